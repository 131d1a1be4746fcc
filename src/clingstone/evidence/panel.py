"""Serial dependence within many series, whatever their variances and levels."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt
from scipy import special, stats

from clingstone.design.derived import sweep
from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.display import bounds, count, freedom, number, p_value, significant
from clingstone.evidence.anova import absorbed
from clingstone.evidence.finding import About, Reading, column
from clingstone.evidence.read import Plain, degenerate, direction
from clingstone.evidence.serial import series_of
from clingstone.maths.once import Array
from clingstone.needs import Family, Needs, NotSupported
from clingstone.run import Alternative

if TYPE_CHECKING:
    from clingstone.covariance.fits import Fits

SERIES = 10  # fewer have too few sums for a t of their spread; the exact panel test serves there
ROBUST, WITHIN = "robust", "within means"
BLIND = "It is blind to a correlation near one, where series wander like random walks."
Rows = npt.NDArray[np.int64]


@dataclass(frozen=True)
class PanelSerial(Plain):
    """Does a residual go with the one before it in its series, whatever the variances over time?

    robust : residuals less the mean of those from there on, times the one before less the mean of those
    up to there. The two share no error, so the mean is zero for any variances that change with time, and
    series means cancel. The sums of the series give t with G − 1 df (the heteroscedasticity-robust form
    of Born & Breitung 2016). A random walk gives no signal: its coming and past changes are unrelated.

    within means : residuals from series means on the ones before, whose slope is −1/(T − 1) without
    dependence (Wooldridge 2010); series of one length. That slope is put into the scores, whose sums over
    series give t with G − 1 df: a variance at the estimated slope, as plm takes it, rejects in .10 of cases
    with 10 series of 20 times and in .13 with 10 of 5; so imposed, in .047 and .043.
    """

    id: str = "panel-serial"
    family: Family = "serial"
    null: str = "Residuals of a series do not go with the ones before, whatever their variances."
    alternative: str = "Residuals of a series go with the ones before."
    needs: Needs = field(
        default=Needs(frozenset({"serial"}), {"series of 3 rows or more": SERIES}, unweighted=True)
    )
    source: str = "born-breitung-2016"
    primary: bool = False

    def abouts(self, design: Design) -> tuple[About, ...]:
        series = series_of(design)
        if series.part.count < 2:
            return ()
        out = [About(ROBUST, "whatever the variances over time", primary=False)]
        if series.tick is not None and not series.gaps and len(np.unique(series.part.sizes)) == 1:
            out.append(About(WITHIN, "around series means", primary=False))
        return tuple(out)

    def read(self, fits: Fits, about: About, given: frozenset[str] = frozenset()) -> Reading:
        series = series_of(fits.design)
        if series.tick is None or series.ties:
            raise NotSupported("rows are not whole steps apart, one at a time")
        inside = within_series(fits.response)
        two_sided = fits.run.settings.alternative
        if about.key == ROBUST:
            return _robust(inside, fits.run.settings.confidence, two_sided)
        return _shifted(inside, fits.run.settings.confidence, two_sided)

    def sentence(self, reading: Reading, about: About) -> str:
        against = "" if about.key == ROBUST else " (below 0 without dependence)"
        df = freedom(reading.df)
        return (
            f"Within {count(reading.n_used, 'series', 'series')}, {about.words}, residuals go with the ones "
            f"before at a slope of {number(column(reading.estimate), 2)}"
            f"{bounds(column(reading.low), column(reading.high))}{against} "
            f"({reading.statistic_name} = {significant(column(reading.statistic), 3)} on {df}, "
            f"{p_value(column(reading.p))})."
        )


def within_series(response: Response) -> Response:
    """The response with series means swept out. Raises NotSupported where little would be left."""
    design = response.design
    part = series_of(design).part
    inner = absorbed(design, part)
    if inner.m < 5:
        raise NotSupported(f"taking out the series means leaves {inner.m} degrees of freedom")
    return sweep(response, inner, part)


def _robust(response: Response, confidence: float, alternative: Alternative) -> Reading:
    forward, backward, rows = windows(response)
    codes = series_of(response.design).part.codes[rows]
    G = series_of(response.design).part.count

    def sums(values: Array) -> Array:
        return np.stack([np.bincount(codes, weights=v, minlength=G) for v in values.T])

    product, square = sums(forward * backward), sums(backward**2)  # (B, G)
    used = np.bincount(codes, minlength=G) > 0
    N = int(used.sum())
    if N < SERIES:
        raise NotSupported(
            f"{count(N, 'series', 'series')} of 4 consecutive times or more",
            f"{SERIES} would be needed; the exact test over all series is run instead.",
        )
    lost = degenerate(response)
    with np.errstate(divide="ignore", invalid="ignore"):
        # One-sample t: about their mean, for about zero a large sum would hold down its own t (t² ≤ N).
        t = product.sum(axis=1) / np.sqrt(N * product[:, used].var(axis=1, ddof=1))
        slope = product.sum(axis=1) / square.sum(axis=1)
        rest = product - slope[:, None] * square
        se = np.sqrt(np.sum(rest**2, axis=1)) / square.sum(axis=1)
    half = float(special.stdtrit(N - 1, 0.5 + confidence / 2)) * se
    p, log_p = _t_tail(np.where(lost, np.nan, t), float(N - 1), alternative)
    return Reading(
        statistic=np.where(lost, np.nan, t),
        statistic_name="t",
        df=float(N - 1),
        p=p,
        log_p=log_p,
        p_method=f"t over series, {direction(alternative)}",
        estimate=np.where(lost, np.nan, slope),
        estimate_name="slope on the residual before, without shared errors",
        low=slope - half,
        high=slope + half,
        n_used=N,
        caveats=() if column(p) < 0.05 else (BLIND,),
    )


def windows(response: Response) -> tuple[Array, Array, Rows]:
    """Forward and backward deviations (K, B), and the rows (K,) they stand at.

    v_t = e_t − mean(e_t … e_T) and w_{t−1} = e_{t−1} − mean(e_1 … e_{t−1}) for t = 3 … T − 1 of each
    series, where row t follows row t − 1 by one step.
    """
    series = series_of(response.design)
    part, e = series.part, response.residual
    first = part.first[part.codes]
    place = np.arange(part.n) - first  # 0-based in its series
    size = part.sizes[part.codes]
    total = np.cumsum(np.vstack([np.zeros(response.B), e]), axis=0)
    rows = np.flatnonzero((place >= 2) & (place <= size - 2) & (series.steps == 1))
    start, stop = first[rows], first[rows] + size[rows]
    ahead = (total[stop] - total[rows]) / (stop - rows)[:, None]
    behind = (total[rows] - total[start]) / (rows - start)[:, None]
    return e[rows] - ahead, e[rows - 1] - behind, rows


def _shifted(response: Response, confidence: float, alternative: Alternative) -> Reading:
    series = series_of(response.design)
    T, G = int(series.part.sizes[0]), series.part.count
    earlier, later = series.pairs(1)
    y, x = response.residual[later], response.residual[earlier]
    y, x = y - y.mean(axis=0), x - x.mean(axis=0)
    codes = series.part.codes[later]

    def sums(values: Array) -> Array:
        return np.stack([np.bincount(codes, weights=v, minlength=G) for v in values.T])

    # Scores of a slope β are product − β square, one a series: the value without dependence is put in, and
    # the interval holds every β whose scores have a mean that t over series does not tell from zero.
    product, square = sums(x * y), sums(x**2)  # (B, G)
    lost = degenerate(response)
    with np.errstate(divide="ignore", invalid="ignore"):
        slope = product.sum(axis=1) / square.sum(axis=1)
        scores = product + square / (T - 1)
        t = scores.mean(axis=1) / np.sqrt(scores.var(axis=1, ddof=1) / G)
        low, high = _not_rejected(product, square, float(special.stdtrit(G - 1, 0.5 + confidence / 2)))
    p, log_p = _t_tail(np.where(lost, np.nan, t), float(G - 1), alternative)
    return Reading(
        statistic=np.where(lost, np.nan, t),
        statistic_name="t",
        df=float(G - 1),
        p=p,
        log_p=log_p,
        p_method=f"t over series, {direction(alternative)}",
        estimate=np.where(lost, np.nan, slope),
        estimate_name=f"slope on the residual before, {number(-1 / (T - 1), 2)} without dependence",
        low=low,
        high=high,
        n_used=G,
        caveats=("Where the variances of the series differ much it rejects too seldom.",),
    )


def _not_rejected(product: Array, square: Array, cut: float) -> tuple[Array, Array]:
    """β between which |t| of the G scores product − β square stays within the cut; NaN where it always does.

    (ā − β b̄)² ≤ κ (s_aa − 2β s_ab + β² s_bb), κ = cut²/G: a quadratic in β (Fieller 1954).
    """
    G = product.shape[1]
    a, b = product.mean(axis=1), square.mean(axis=1)
    u, v = product - a[:, None], square - b[:, None]
    k = cut**2 / (G * (G - 1))
    bend = b**2 - k * np.sum(v * v, axis=1)
    middle = a * b - k * np.sum(u * v, axis=1)
    rest = a**2 - k * np.sum(u * u, axis=1)
    half = np.sqrt(middle**2 - bend * rest)
    ends = np.where(bend > 0, [(middle - half) / bend, (middle + half) / bend], np.nan)
    return ends[0], ends[1]


def _t_tail(t: Array, df: float, alternative: Alternative) -> tuple[Array, Array]:
    if alternative == "two-sided":
        log = np.log(2.0) + stats.t.logsf(np.abs(t), df)
        return np.asarray(np.exp(log)), np.asarray(log)
    log = stats.t.logsf(t if alternative == "greater" else -t, df)
    return np.asarray(np.exp(log)), np.asarray(log)
