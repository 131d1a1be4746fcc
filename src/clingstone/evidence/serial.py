"""Order in time: Durbin–Watson within runs, its panel form, and a ratio for irregular times."""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np
from scipy import sparse, special, stats

from clingstone.design.derived import sweep
from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.display import amount, bounds, count, number, p_value, significant
from clingstone.evidence.anova import absorbed
from clingstone.evidence.autocorrelation import elapsed_curve, lag_curve
from clingstone.evidence.calibrate import curve
from clingstone.evidence.finding import About, Curve, Reading, column
from clingstone.evidence.lagged import lagged_response, one_lag
from clingstone.evidence.nested import level_name
from clingstone.evidence.read import Plain, arcsine, direction, normal_quantile, ratio, tail_p
from clingstone.evidence.short import half_life, short_series, told_apart
from clingstone.evidence.traces import traces
from clingstone.maths.forms import Form, differences, graph, lagged
from clingstone.maths.once import Array, kept, lately, once
from clingstone.maths.partition import Partition
from clingstone.maths.ratio import Law
from clingstone.needs import Family, Limits, Needs, NotSupported
from clingstone.structure.serial import Rows, Series

if TYPE_CHECKING:
    from clingstone.covariance.fits import Fits

# The kernel of irregular times looks at most so many rows ahead and so many median gaps away:
# exp(−4) is below 2 %, and the form stays sparse however dense the times are.
KERNEL_ROWS = 8
KERNEL_GAPS = 4.0


def series_of(design: Design) -> Series:
    assert design.serial is not None
    return design.serial


def step_words(series: Series, lag: int = 1) -> str:
    """ "one day apart", "3 steps apart"."""
    unit = series.unit or "step"
    if series.tick is None or series.step != 1 or not series.unit:
        size = "one step" if lag == 1 else f"{lag} steps"
        if series.unit:
            size += f" of {amount(series.step * lag)} {series.unit}s" if series.step * lag != 1 else ""
        return f"{size} apart"
    return f"one {unit} apart" if lag == 1 else f"{lag} {unit}s apart"


@lately
def form_of(design: Design, kind: str) -> Form:
    """ "differences" (Durbin–Watson), or "lag:k" with e'Se = Σ e_t e_{t−k}, within series only."""
    lag = 1 if kind == "differences" else int(kind.split(":")[1])
    earlier, later = series_of(design).pairs(lag)
    build = differences if kind == "differences" else lagged
    return build(earlier, later, design.n, kind)


def near_pairs(series: Series) -> tuple[Rows, Rows, Array]:
    """Rows (earlier, later) of one series at most KERNEL_ROWS rows apart, and their elapsed time."""
    first, second = [], []
    codes, index = series.part.codes, np.arange(series.part.n, dtype=np.int64)
    for ahead in range(1, min(KERNEL_ROWS, series.part.n - 1) + 1):
        same = codes[ahead:] == codes[:-ahead]
        first.append(index[:-ahead][same])
        second.append(index[ahead:][same])
    earlier, later = np.concatenate(first), np.concatenate(second)
    return earlier, later, series.elapsed[later] - series.elapsed[earlier]


def median_gap(series: Series) -> float:
    """Median elapsed time between one row and the next of its series, ties left out; NaN if none."""
    same = series.part.codes[1:] == series.part.codes[:-1]
    gaps = np.diff(series.elapsed)[same]
    gaps = gaps[gaps > 0]
    return float(np.median(gaps)) if len(gaps) else float("nan")


@once
def kernel_form(design: Design) -> Form:
    """S_ij = exp(−|t_i − t_j|/h) for near pairs of one series, h the median gap; no diagonal."""
    series = series_of(design)
    h = median_gap(series)
    earlier, later, apart = near_pairs(series)
    keep = (apart > 0) & (apart <= KERNEL_GAPS * h)
    half = sparse.coo_array(
        (np.exp(-apart[keep] / h), (earlier[keep], later[keep])), shape=(design.n, design.n)
    )
    return graph(sparse.csr_array(half + half.T), "elapsed kernel")


def law_of(design: Design, form: Form, swept: Partition | None = None) -> Law:
    """The null law of e'Se/e'e. Raises NotSupported where the design leaves it no room to vary."""
    law = Law(form, design.basis, swept)
    if law.constant:
        raise NotSupported(
            "the model fixes this statistic whatever the data are", "More rows would be needed."
        )
    return law


def over_groups(fits: Fits, given: frozenset[str]) -> tuple[Response, Partition | None]:
    """The response, with the means of a group level taken out when that level is given."""
    if not given:
        return fits.response, None
    (key,) = given
    part = fits.design.partitions[key.removeprefix("group:")]
    if fits.design.root is not None:
        raise NotSupported("group means cannot be taken out exactly under precision weights")
    inner = absorbed(fits.design, part)
    if inner.m < 5:  # fewer leave the law almost no room
        raise NotSupported(f"taking out the {level_name(part.key)} means leaves {inner.m} degrees of freedom")
    return sweep(fits.response, inner, part), part


def enough(series: Series, limits: Limits) -> None:
    """Raises NotSupported when no series is long enough and too few are of 3 rows or more."""
    sizes = series.part.sizes
    if sizes.max() < limits.serial_test_rows and np.sum(sizes >= 3) < limits.serial_test_series:
        raise NotSupported(
            f"the longest series has {int(sizes.max())} rows and {int(np.sum(sizes >= 3))} series have "
            "3 or more",
            f"One series of {limits.serial_test_rows} rows, or {limits.serial_test_series} series of 3, "
            "would be needed.",
        )


def one_step(response: Response, form: Form, law: Law, doubled: bool = True) -> tuple[Array, float]:
    """Score estimate ρ̂ of V = I + ρK at ρ = 0, and its exact null standard deviation.

    With T = e'Se/e'e and K = 2S (``doubled``) or K = S: dE T/dρ at 0 is κ = (m + 2) Var T, or half of
    it, so ρ̂ = (T − E T)/κ is right to first order for any design.
    """
    slope = (response.design.m + 2) * law.variance * (1.0 if doubled else 0.5)
    return (ratio(response, form) - law.mean) / slope, float(np.sqrt(law.variance) / slope)


def correlation_of_errors(fits: Fits, response: Response, lag: Form, law: Law) -> tuple[Array, Array, Array]:
    """Correlation one step apart and both ends of its interval, each (B,).

    By inversion of the mean of T under a first-order process (``calibrate``) where the rows can be
    laid out on steps, else one score step with an arcsine interval.
    """
    run, key = fits.run, None if law.swept is None else law.swept.key
    found = kept(
        fits.design,
        ("serial curve", key, run.settings.seed),
        lambda: curve(response.design, law, run.child("serial interval")),
    )
    if found is not None:
        return found.invert(ratio(response, lag), normal_quantile(fits))
    rho, sd = one_step(response, lag, law)
    return (np.clip(rho, -0.999, 0.999), *arcsine(rho, sd, normal_quantile(fits)))


def _read(fits: Fits, about: About, given: frozenset[str], name: str) -> Reading:
    """Durbin–Watson within runs of consecutive times, over series, its size the lag-one correlation."""
    series = series_of(fits.design)
    enough(series, fits.run.limits)
    if not given and (own := lagged_response(fits)):
        return _beside(fits, own)
    response, swept = over_groups(fits, given)
    design = response.design
    pairs = len(series.pairs(1)[0])
    if pairs < 3:
        raise NotSupported(
            f"{count(pairs, 'pair')} of rows {step_words(series)}", "At least 3 would be needed."
        )
    form, lag = form_of(fits.design, "differences"), form_of(fits.design, "lag:1")
    d = ratio(response, form)
    alternative = fits.run.settings.alternative
    tails = law_of(design, form, swept).tails(d, fits.tails)
    p, log_p = tail_p(tails, alternative, "lower")
    rho, low, high = correlation_of_errors(fits, response, lag, law_of(design, lag, swept))
    return Reading(
        statistic=d,
        statistic_name=name,
        p=p,
        log_p=log_p,
        p_method=f"{tails.method}, {direction(alternative)}",
        estimate=rho,
        estimate_name=f"correlation of errors {step_words(series)}{half_life(column(rho), series)}",
        low=low,
        high=high,
        n_used=pairs,
        caveats=_caveats(fits.design, series) + (told_apart(fits, given) if given else short_series(fits)),
    )


def _beside(fits: Fits, own: str) -> Reading:
    """The coefficient of the residual one step earlier, where the model holds an earlier response.

    There the Durbin–Watson ratio leans to no correlation; the regression of Breusch and Godfrey does not.
    """
    response, series = fits.response, series_of(fits.design)
    b, se, df = one_lag(response)
    half = float(special.stdtrit(df, 0.5 + fits.run.settings.confidence / 2)) * se
    with np.errstate(divide="ignore", invalid="ignore"):
        t = b / se
    alternative = fits.run.settings.alternative
    log_p = stats.t.logsf({"less": -t, "greater": t}.get(alternative, np.abs(t)), df)
    log_p = log_p + (np.log(2.0) if alternative == "two-sided" else 0.0)
    return Reading(
        statistic=t,
        statistic_name="Breusch–Godfrey t",
        df=df,
        p=np.exp(log_p),
        log_p=log_p,
        p_method=f"t, {direction(alternative)}",
        estimate=np.clip(b, -1.0, 1.0),
        estimate_name=f"coefficient of the residual {step_words(series)}, beside {own}",
        low=np.maximum(b - half, -1.0),
        high=np.minimum(b + half, 1.0),
        n_used=len(series.pairs(1)[0]),
        caveats=(
            f"{own} is the response of an earlier row, which makes Durbin–Watson lean to no correlation; "
            "the residual one step earlier was put beside it instead.",
        ),
    )


def _caveats(design: Design, series: Series) -> tuple[str, ...]:
    out = []
    if series.gaps:
        out.append(
            f"Series lack {count(series.gaps, 'step')} inside, so only rows one step apart are compared."
        )
    if not design.known:
        out.append("Only residuals were given, so the null law leaves out the columns of the model.")
    return tuple(out)


def _sentence(reading: Reading, about: About) -> str:
    r = f"{number(column(reading.estimate), 2)}{bounds(column(reading.low), column(reading.high))}"
    name, _, rest = reading.estimate_name.partition(", half ")
    if name.startswith("coefficient"):
        own = name.partition(", beside ")[2]
        return (
            f"Beside {own}, the residual {about.words} has a coefficient of {r} over "
            f"{count(reading.n_used, 'pair')} of rows ({reading.statistic_name} = "
            f"{significant(column(reading.statistic), 3)}, {p_value(column(reading.p))})."
        )
    r += f", half {rest}" if rest else ""
    return (
        f"Errors {about.words} correlate {r}, by residuals over {count(reading.n_used, 'pair')} of rows "
        f"({reading.statistic_name} {significant(column(reading.statistic), 3)}, "
        f"{p_value(column(reading.p))})."
    )


def _group_givens(fits: Fits) -> tuple[frozenset[str], ...]:
    """The finest group level with at least 3 rows in some group: its means can be swept out exactly."""
    group = fits.design.group
    if group is None or fits.design.root is not None:
        return ()
    usable = [level for level in group.levels if level.count >= 2 and level.sizes.max() >= 3]
    return (frozenset({f"group:{usable[-1].key}"}),) if usable else ()


@dataclass(frozen=True)
class DurbinWatson(Plain):
    """Durbin–Watson statistic of one regular series, with its exact null law at any length.

    d = Σ(e_t − e_{t−1})²/e'e. The size is the correlation of the errors one step apart: the residual
    correlation with what the regressors took from it put back, and an interval by inversion of its
    mean and standard deviation under a first-order process (``calibrate``).
    """

    id: str = "durbin-watson"
    family: Family = "serial"
    null: str = "Residuals next to each other in time are not correlated."
    alternative: str = "Residuals next to each other in time are correlated."
    needs: Needs = field(default=Needs(frozenset({"serial"}), {"rows": 5}))
    source: str = "durbin-watson-1950"
    primary: bool = True

    def abouts(self, design: Design) -> tuple[About, ...]:
        series = series_of(design)
        if _kind(series) != self.id:
            return ()
        return (About("1", step_words(series)),)

    def givens(self, fits: Fits, about: About) -> tuple[frozenset[str], ...]:
        return _group_givens(fits)

    def read(self, fits: Fits, about: About, given: frozenset[str] = frozenset()) -> Reading:
        return _read(fits, about, given, "Durbin–Watson")

    def curve(self, fits: Fits, about: About) -> Curve | None:
        design = fits.design
        return lag_curve(fits, lambda k: law_of(design, form_of(design, f"lag:{k}")))

    def more(self, fits: Fits, about: About) -> tuple[Curve, ...]:
        found = traces(fits)
        return () if found is None else (found,)

    def sentence(self, reading: Reading, about: About) -> str:
        return _sentence(reading, about)


@dataclass(frozen=True)
class PanelDurbinWatson(DurbinWatson):
    """Durbin–Watson over several series or a series with gaps: differences within runs, one e'e.

    Differences are taken only between rows of one series exactly one step apart (Bhargava, Franzini
    & Narendranathan 1982, with a gap ending a run). Given a group level, its means are swept out and
    the law is that of the swept residuals, exact whatever the group effects are.
    """

    id: str = "panel-durbin-watson"
    source: str = "bhargava-franzini-narendranathan-1982"

    def read(self, fits: Fits, about: About, given: frozenset[str] = frozenset()) -> Reading:
        return _read(fits, about, given, "Durbin–Watson within series")


@dataclass(frozen=True)
class IrregularSerial(DurbinWatson):
    """Ratio e'Ke/e'e for irregular times, K_ij = exp(−|t_i − t_j|/h) within series, h the median gap.

    Pairs more than 4 median gaps or 8 rows apart, and rows at the same time, are left out of K; the
    law is exact for the ratio so defined. The size is the correlation at one median gap by one score
    step of V = I + ρeK, which understates large ones, with an arcsine interval from the exact null
    standard deviation.
    """

    id: str = "irregular-serial"
    null: str = "Residuals close in time are not correlated."
    alternative: str = "Residuals close in time are correlated, less so as time passes."
    source: str = "king-hillier-1985"

    def abouts(self, design: Design) -> tuple[About, ...]:
        series = series_of(design)
        if _kind(series) != self.id:
            return ()
        unit = f" {series.unit}s" if series.unit else " in time"
        return (About("1", f"{amount(median_gap(series))}{unit} apart (the median gap)"),)

    def read(self, fits: Fits, about: About, given: frozenset[str] = frozenset()) -> Reading:
        series = series_of(fits.design)
        enough(series, fits.run.limits)
        if not np.isfinite(median_gap(series)):
            raise NotSupported("no series has two different times", "At least 3 such pairs would be needed.")
        response, swept = over_groups(fits, given)
        form = kernel_form(fits.design)
        law = law_of(response.design, form, swept)
        value = ratio(response, form)
        alternative = fits.run.settings.alternative
        tails = law.tails(value, fits.tails)
        p, log_p = tail_p(tails, alternative, "upper")
        rho, sd = one_step(response, form, law, doubled=False)
        rho, sd = rho / math.e, sd / math.e
        low, high = arcsine(rho, sd, normal_quantile(fits))
        return Reading(
            statistic=value,
            statistic_name="ratio of near products",
            p=p,
            log_p=log_p,
            p_method=f"{tails.method}, {direction(alternative)}",
            estimate=np.clip(rho, -0.999, 0.999),
            estimate_name="correlation of errors one median gap apart",
            low=low,
            high=high,
            n_used=int(form.S.nnz // 2),
            caveats=_tie_caveats(series) + _caveats(fits.design, series),
        )

    def curve(self, fits: Fits, about: About) -> Curve | None:
        return elapsed_curve(fits, *near_pairs(series_of(fits.design)))


def _tie_caveats(series: Series) -> tuple[str, ...]:
    if not series.ties:
        return ()
    have = "has" if series.ties == 1 else "have"
    return (f"{count(series.ties, 'row')} {have} the time of another; pairs at one time are left out.",)


def _kind(series: Series) -> str:
    if series.tick is None or series.ties:
        return "irregular-serial"
    single = series.part.count == 1 and series.spacing == "regular"
    return "durbin-watson" if single else "panel-durbin-watson"
