"""Several lags at once: Breusch–Godfrey and Ljung–Box, within series and by elapsed time."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np
from scipy import special, stats

from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.display import count, freedom, number, p_value, percent, significant
from clingstone.evidence.autocorrelation import EXACT_MOMENTS, lag_products
from clingstone.evidence.finding import About, Reading, column
from clingstone.evidence.lagged import lagged_response, partial_r2
from clingstone.evidence.read import Plain, degenerate, exceedance, simulated
from clingstone.evidence.serial import enough, form_of, series_of, step_words
from clingstone.maths.once import Array
from clingstone.maths.ratio import covariances, means
from clingstone.needs import Family, Needs, NotSupported

if TYPE_CHECKING:
    from clingstone.covariance.fits import Fits

DRAWS = 999
# Chi-squared and F references are liberal with trending regressors in short series (a size of 0.15
# was measured at 30 rows): up to these many rows p comes from draws of Mz instead.
LATER = 30  # lags of the second look: a month of days, two years of months, a day of hours
DRAWN_GODFREY = 500
DRAWN_LJUNG = 200


def _whole_lags(design: Design, last: int) -> None:
    series = series_of(design)
    if series.tick is None or series.ties:
        what = "the times are irregular" if series.tick is None else "some rows share their series and time"
        raise NotSupported(
            f"{what}, so rows are not whole steps apart", "The test for irregular times is run instead."
        )
    pairs = len(series.pairs(last)[0])
    if pairs < 3:
        raise NotSupported(f"only {count(pairs, 'pair')} of rows {step_words(series, last)}")


@dataclass(frozen=True)
class BreuschGodfrey(Plain):
    """Breusch–Godfrey: do the residuals up to k steps earlier in the series explain the residuals?

    R² = v'S⁻¹v/e'e with v = E'e and S = E'ME, E the (n, k) residuals k steps earlier in the same
    series, 0 where there is none; the statistic is nR², its size R². A response of an earlier row may stand
    among the predictors: p is then that of F, because draws would have to redraw it.
    """

    id: str = "breusch-godfrey"
    family: Family = "serial"
    null: str = "Earlier residuals of a series say nothing about later ones."
    alternative: str = "Earlier residuals of a series explain some of the later ones."
    needs: Needs = field(default=Needs(frozenset({"serial"}), {"rows": 8}))
    source: str = "godfrey-1978"
    primary: bool = False

    def abouts(self, design: Design) -> tuple[About, ...]:
        series = series_of(design)
        longer = min(4, int(series.part.sizes.max()) // 5)
        lags = (1, longer) if longer > 1 else (1,)
        return tuple(About(str(k), step_words(series) if k == 1 else f"up to {k} steps apart") for k in lags)

    def read(self, fits: Fits, about: About, given: frozenset[str] = frozenset()) -> Reading:
        design, response, k = fits.design, fits.response, int(about.key)
        enough(series_of(design), fits.run.limits)
        _whole_lags(design, k)
        if design.m - k < 2:
            raise NotSupported(f"{design.m} residual degrees of freedom for {count(k, 'lag')}")
        r2, rank = partial_r2(response, k)
        n, df2 = design.n, design.m - rank
        own = lagged_response(fits)
        if fits.depth == "exact" and n <= DRAWN_GODFREY and not own:
            drawn = partial_r2(simulated(response, fits, f"breusch-godfrey:{k}", DRAWS), k)[0]
            p, log_p, method = exceedance(r2, drawn), None, f"exact by {DRAWS} draws"
        else:
            F = (r2 / rank) / ((1.0 - r2) / df2)
            p, method = np.asarray(special.fdtrc(rank, df2, F)), "F approximation"
            log_p = np.asarray(stats.f.logsf(F, rank, df2))
        return Reading(
            statistic=n * r2,
            statistic_name="LM",
            df=float(rank),
            p=p,
            log_p=log_p,
            p_method=method,
            estimate=r2,
            estimate_name="share of the residual variance explained by earlier residuals",
            n_used=n,
            caveats=(f"{own} is the response of an earlier row, so p is that of large samples.",)
            if own
            else (),
        )

    def sentence(self, reading: Reading, about: About) -> str:
        return (
            f"Earlier residuals of the same series, {about.words}, explain "
            f"{percent(column(reading.estimate))} of the residual variance (Breusch–Godfrey "
            f"{significant(column(reading.statistic), 3)} on {freedom(reading.df)}, "
            f"{p_value(column(reading.p))})."
        )


def _own(name: str) -> tuple[str, ...]:
    return (f"{name} is the response of an earlier row, so p is that of large samples.",) if name else ()


@dataclass(frozen=True)
class LjungBox(Plain):
    """Ljung–Box over lags 1…K pooled over series, with the exact moments of residual correlations.

    r_k = Σ e_t e_{t−k}/e'e over all pairs of one series k steps apart. Up to 5,000 rows the statistic
    is (r − E r)'Cov(r)⁻¹(r − E r) with exact mean and covariance given X; above, the usual
    n²(1 + 2/n) Σ r_k²/N_k with N_k pairs, which equals n(n + 2)Σ r_k²/(n − k) for one full series.
    """

    id: str = "ljung-box"
    family: Family = "serial"
    null: str = "Residuals of a series are not correlated at any of the lags."
    alternative: str = "Residuals of a series are correlated at some lag."
    needs: Needs = field(default=Needs(frozenset({"serial"}), {"rows": 8}))
    source: str = "ljung-box-1978"
    primary: bool = False

    def abouts(self, design: Design) -> tuple[About, ...]:
        longest = int(series_of(design).part.sizes.max())
        K = max(1, min(10, longest // 5))
        later = min(LATER, longest // 4)
        out = [About(str(K), f"up to {count(K, 'step')} apart")]
        if later > K:  # what repeats with a season is seen only a season apart
            out.append(About(str(later), f"up to {count(later, 'step')} apart", primary=False))
        return tuple(out)

    def read(self, fits: Fits, about: About, given: frozenset[str] = frozenset()) -> Reading:
        design, response, K = fits.design, fits.response, int(about.key)
        enough(series_of(design), fits.run.limits)
        _whole_lags(design, K)
        if own := lagged_response(fits):
            raise NotSupported(
                f"{own} is the response of an earlier row, which this test does not allow for",
                "Read the test of Breusch and Godfrey, which does.",
            )
        exact = design.n <= EXACT_MOMENTS and design.m > K + 2
        value = corrected(response, K) if exact else plain(response, K)
        if fits.depth == "exact" and design.n <= DRAWN_LJUNG and exact:
            drawn = corrected(simulated(response, fits, f"ljung-box:{K}", DRAWS), K)
            p, log_p, method = exceedance(value, drawn), None, f"exact by {DRAWS} draws"
        else:
            p, log_p = np.asarray(special.chdtrc(K, value)), np.asarray(stats.chi2.logsf(value, K))
            method = "chi-squared" + (", exact moments" if exact else "")
        return Reading(
            statistic=value,
            statistic_name="Ljung–Box" + (" with exact moments" if exact else ""),
            df=float(K),
            p=p,
            log_p=log_p,
            p_method=method,
            estimate=largest(response, K),
            estimate_name="largest correlation over the lags",
            n_used=design.n,
        )

    def sentence(self, reading: Reading, about: About) -> str:
        return (
            f"Over lags {about.words}, the largest residual correlation is "
            f"{number(column(reading.estimate), 2)} ({reading.statistic_name} "
            f"{significant(column(reading.statistic), 3)} on {freedom(reading.df)}, "
            f"{p_value(column(reading.p))})."
        )


def correlations(response: Response, K: int) -> Array:
    """(K, B) r_k = Σ e_t e_{t−k} / e'e."""
    return np.asarray(lag_products(response, K)[0] / np.where(degenerate(response), np.nan, response.ss))


def plain(response: Response, K: int) -> Array:
    """(1 + 2/n) n² Σ r_k²/N_k, (B,)."""
    n, (_, pairs) = response.design.n, lag_products(response, K)
    r = correlations(response, K)
    return np.asarray((1 + 2 / n) * n**2 * np.sum(r**2 / np.maximum(pairs, 1)[:, None], axis=0))


def moments(design: Design, K: int) -> tuple[Array, Array]:
    """Exact mean (K,) and covariance (K, K) of r_1, …, r_K without dependence."""
    forms = [form_of(design, f"lag:{k}") for k in range(1, K + 1)]
    return means(forms, design.basis), covariances(forms, design.basis)


def corrected(response: Response, K: int) -> Array:
    """(r − E r)'Cov(r)⁻¹(r − E r), (B,)."""
    mean, covariance = moments(response.design, K)
    z = correlations(response, K) - mean[:, None]
    return np.asarray(np.einsum("kb,kb->b", z, np.linalg.pinv(covariance, hermitian=True) @ z))


def largest(response: Response, K: int) -> Array:
    """(B,) the correlation r_k − E r_k of largest size, on the scale of its number of pairs."""
    n, (_, pairs) = response.design.n, lag_products(response, K)
    centre = np.zeros(K)
    if n <= EXACT_MOMENTS:
        centre = means([form_of(response.design, f"lag:{k}") for k in range(1, K + 1)], response.design.basis)
    r = (correlations(response, K) - centre[:, None]) * (n / np.maximum(pairs, 1))[:, None]
    pick = np.argmax(np.abs(np.nan_to_num(r)), axis=0)
    return np.asarray(np.clip(r[pick, np.arange(r.shape[1])], -1.0, 1.0))
