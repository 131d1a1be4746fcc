"""What can be taken for dependence, or spoil a test for it: unequal variance, outliers, shape, copies."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt
from scipy import special, stats

from clingstone.design.derived import whole
from clingstone.design.design import Design, rows_of
from clingstone.design.response import Response
from clingstone.display import bounds, count, decimals_for, number, p_value, significant
from clingstone.evidence.finding import About, Reading, column
from clingstone.evidence.read import Plain, degenerate, normal_quantile
from clingstone.evidence.whitened import whitened
from clingstone.maths.once import Array, lately, once
from clingstone.needs import Family, Needs, NotSupported

if TYPE_CHECKING:
    from clingstone.covariance.fits import Fits

FITTED = "fitted"
SQUARE = "²"  # of a variable that is read together with its square
CURVED = 4  # covariates that are read so as well
ALPHA = 0.05  # of Bonferroni's bound, for the rows that are named
MOST_NAMED = 20


class GivenAll(Plain):
    """A test that takes the rows as independent; read again on what the joint error model leaves of them.

    Squares of dependent residuals go together as the residuals do, so along anything that moves as slowly
    a spread seems to change; and a skewness of few independent pieces of information is seldom small.
    """

    def givens(self, fits: Fits, about: About) -> tuple[frozenset[str], ...]:
        node = fits.full_node
        return (node,) if node and fits.design.known else ()


def _seen(fits: Fits, given: frozenset[str]) -> Response:
    """The residuals that a test reads: as they are, or freed of the dependence that is given."""
    return whitened(fits, given) if given and not degenerate(fits.response).all() else fits.response


@dataclass(frozen=True)
class Heteroscedasticity(GivenAll):
    """Koenker's studentised Breusch–Pagan statistic on fitted values or on one covariate.

    n R² of e² on the variable; also on the variable and its square, which sees a spread that is larger
    at both ends than in the middle (White 1980, with few df). The size is the ratio of residual standard
    deviations between the upper and the lower fifth of the rows by that variable; its interval uses
    Var ln s² ≈ (kurtosis − 1)/rows. Given the dependence it is read on whitened residuals, whose squares are
    independent; alone, dependence can disturb it: a screen, not a verdict.
    """

    id: str = "heteroscedasticity"
    family: Family = "lookalike"
    null: str = "The spread of the residuals does not change with the variable."
    alternative: str = "The spread of the residuals changes with the variable."
    needs: Needs = field(default=Needs(frozenset(), {"residual df": 10}, known_design=True))
    source: str = "koenker-1981"
    primary: bool = False

    def abouts(self, design: Design) -> tuple[About, ...]:
        numeric = [k for k, x in design.covariates.items() if np.ptp(x) > 0]
        several = [k for k in numeric if len(np.unique(design.covariates[k][:1000])) > 2]
        return (
            About(FITTED, "the fitted values", primary=False),
            *(About(k, k, primary=False) for k in numeric[:8]),
            About(FITTED + SQUARE, "the fitted values", primary=False),
            *(About(k + SQUARE, k, primary=False) for k in several[:CURVED]),
        )

    def read(self, fits: Fits, about: About, given: frozenset[str] = frozenset()) -> Reading:
        design, response = fits.design, _seen(fits, given)
        squared = about.key.endswith(SQUARE)
        if about.key.removesuffix(SQUARE) == FITTED:
            along = _Along.of(rows_of(design, design.Q @ response.coef), squared)
        else:
            along = _along(design, about.key)
        lost = degenerate(fits.response) | along.constant
        if lost.all():
            raise NotSupported(f"{about.words} do not vary beyond rounding, or nothing is left over")
        e2 = response.residual**2
        e2[:, lost] = np.nan
        r2 = np.sum([_r2(e2, column) for column in along.columns], axis=0)
        df = float(len(along.columns))
        low, estimate, high = _spread_ratio(e2, along, normal_quantile(fits))
        return Reading(
            statistic=design.n * r2,
            statistic_name="nR²",
            df=df,
            p=np.asarray(special.chdtrc(df, design.n * r2)),
            log_p=np.asarray(stats.chi2.logsf(design.n * r2, df)),
            p_method="chi-squared, large samples",
            estimate=np.where(lost, np.nan, estimate),
            estimate_name="ratio of residual standard deviations, "
            + ("far from the middle to near it" if squared else "upper to lower end"),
            low=np.where(lost, np.nan, low),
            high=np.where(lost, np.nan, high),
            n_used=design.n,
        )

    def sentence(self, reading: Reading, about: About) -> str:
        low, high = column(reading.low), column(reading.high)
        places = max(1, decimals_for((high - low) / 2, 1))
        squared = about.key.endswith(SQUARE)
        ends = ("At the upper end", "at the lower end")
        there, here = ("Far from the middle", "near it") if squared else ends
        return (
            f"{there} of {about.words} the residuals spread "
            f"{number(column(reading.estimate), places)} times{bounds(low, high, places)} as far as {here} "
            f"({'White' if squared else 'Koenker'}'s nR² = {significant(column(reading.statistic))}, "
            f"{p_value(column(reading.p))})."
        )


@dataclass(frozen=True, eq=False)
class _Along:
    """A variable, (n, B) or (n, 1): what squares of residuals are put against.

    columns : the variable less its mean, and the bent part of its square where that is read too; each is
    orthogonal to the others. lower, upper : rows of its ends. constant (B,) : it does not vary.
    """

    columns: tuple[Array, ...]
    lower: npt.NDArray[np.bool_]
    upper: npt.NDArray[np.bool_]
    constant: npt.NDArray[np.bool_]

    @classmethod
    def of(cls, z: Array, squared: bool) -> _Along:
        """Ends are fifths of the rows by the variable, or by how far from its middle they are.

        Where one value fills both fifths, it is one end and everything above it (else below) the other.
        """
        constant = np.ptp(z, axis=0) <= 1e-12 * np.abs(z).max(axis=0)
        line = z - z.mean(axis=0)
        columns = (line, _bent(line)) if squared else (line,)
        if squared:
            z = np.abs(z - np.median(z, axis=0))
            with np.errstate(invalid="ignore"):
                z = np.round(z / z.max(axis=0), 9)  # rows as far apart are tied whatever the order of rows
        low_cut, high_cut = np.quantile(z, [0.2, 0.8], axis=0)
        tied, top = low_cut == high_cut, high_cut == z.max(axis=0)
        lower = np.where(tied & top, z < low_cut, z <= low_cut)
        upper = np.where(tied & ~top, z > high_cut, z >= high_cut)
        return cls(columns, lower, upper, constant)


@lately
def _along(design: Design, key: str) -> _Along:
    x = np.asarray(design.covariates[key.removesuffix(SQUARE)], dtype=float)
    return _Along.of(x[:, None], key.endswith(SQUARE))


def _bent(line: Array) -> Array:
    """The square of a variable of mean zero without its linear part, column by column."""
    square = line**2
    square -= np.mean(square, axis=0)
    with np.errstate(divide="ignore", invalid="ignore"):
        square -= line * (np.sum(line * square, axis=0) / np.sum(line * line, axis=0))
    return square


def _r2(e2: Array, line: Array) -> Array:
    """Of e² on a variable of mean zero, (B,)."""
    a = e2 - e2.mean(axis=0)
    with np.errstate(divide="ignore", invalid="ignore"):
        cross = np.sum(a * line, axis=0) ** 2
        return np.asarray(cross / (np.sum(a * a, axis=0) * np.sum(line * line, axis=0)))


def _spread_ratio(e2: Array, along: _Along, quantile: float) -> tuple[Array, Array, Array]:
    """Low, estimate and high of sd(upper end)/sd(lower end) from squared residuals, each (B,)."""
    lower, upper = along.lower, along.upper
    counts = lower.sum(axis=0), upper.sum(axis=0)
    with np.errstate(divide="ignore", invalid="ignore"):
        log = 0.5 * np.log(
            (np.sum(e2 * upper, axis=0) / counts[1]) / (np.sum(e2 * lower, axis=0) / counts[0])
        )
        kurtosis = np.mean(e2**2, axis=0) / np.mean(e2, axis=0) ** 2
        half = quantile * 0.5 * np.sqrt((kurtosis - 1) * (1 / counts[0] + 1 / counts[1]))
        return np.exp(log - half), np.exp(log), np.exp(log + half)


@dataclass(frozen=True)
class Outliers(GivenAll):
    """The largest externally studentised residual, with Bonferroni's p.

    t_i = r_i √((m − 1)/(m − r_i²)), r_i = e_i/(s √(1 − h_i)); t with m − 1 degrees of freedom. The
    size is r_i, the residual in residual standard deviations. Given the dependence: of whitened residuals,
    each row against what the others say of it, with the h_i of the ordinary fit.
    """

    id: str = "outliers"
    family: Family = "lookalike"
    null: str = "No row lies further out than chance would put one of so many."
    alternative: str = "Some row lies further out than chance would put one of so many."
    needs: Needs = field(default=Needs(frozenset(), {"residual df": 3}))
    source: str = "cook-weisberg-1982"
    primary: bool = False

    def abouts(self, design: Design) -> tuple[About, ...]:
        return (About("", "all rows"),)

    def read(self, fits: Fits, about: About, given: frozenset[str] = frozenset()) -> Reading:
        design, response = fits.design, _seen(fits, given)
        free = 1.0 - design.basis.leverage
        usable = free > 1e-8  # a row with leverage 1 has no residual of its own
        e = response.residual[usable] / np.sqrt(free[usable])[:, None]
        lost = degenerate(fits.response)
        r = e / np.sqrt(np.where(lost, np.nan, response.s2))
        place = np.argmax(np.abs(np.nan_to_num(r)), axis=0)
        most = r[place, np.arange(response.B)]
        with np.errstate(divide="ignore", invalid="ignore"):
            t = most * np.sqrt((design.m - 1) / np.maximum(design.m - most**2, 0.0))
            each = 2 * stats.t.sf(np.abs(t), design.m - 1)
            log_p = np.minimum(stats.t.logsf(np.abs(t), design.m - 1) + np.log(2.0 * usable.sum()), 0.0)
        return Reading(
            statistic=t,
            statistic_name="studentised residual",
            df=float(design.m - 1),
            p=np.minimum(usable.sum() * each, 1.0),
            log_p=log_p,
            p_method="t with Bonferroni's correction",
            estimate=most,
            estimate_name="largest residual in standard deviations",
            n_used=int(usable.sum()),
            rows=_far(np.flatnonzero(usable), r[:, 0], design.m),
        )

    def sentence(self, reading: Reading, about: About) -> str:
        return (
            f"The largest residual lies {significant(abs(column(reading.estimate)))} standard deviations "
            f"{'above' if column(reading.estimate) > 0 else 'below'} its fitted value; among "
            f"{count(reading.n_used, 'row')}, "
            f"{p_value(column(reading.p))}."
        )


def _far(rows: npt.NDArray[np.int64], r: Array, m: int) -> tuple[int, ...]:
    """Rows beyond Bonferroni's 5 %, furthest first and at most 20; the furthest one where there are none."""
    size = np.abs(np.nan_to_num(r))
    most = min(MOST_NAMED, len(size))
    among = np.flatnonzero(size >= np.partition(size, -most)[-most])  # with all that tie with the last
    among = among[np.argsort(-size[among], kind="stable")][:most]
    with np.errstate(divide="ignore", invalid="ignore"):
        t = size[among] * np.sqrt((m - 1) / np.maximum(m - size[among] ** 2, 0.0))
    far = int(np.sum(2 * len(r) * stats.t.sf(t, m - 1) < ALPHA))
    return tuple(int(i) for i in rows[among[: max(far, 1)]])


@dataclass(frozen=True)
class Normality(GivenAll):
    """Skewness and kurtosis of the residuals at once (D'Agostino & Pearson 1973); only a screen.

    Residuals are nearer to normal than errors, and the tests for dependence hold for heavy tails that
    are alike in all rows; the size is the skewness.
    """

    id: str = "normality"
    family: Family = "lookalike"
    null: str = "The residuals are shaped like normal ones."
    alternative: str = "The residuals are skewed, or heavier or lighter in the tails than normal ones."
    needs: Needs = field(default=Needs(frozenset(), {"rows": 20, "residual df": 10}))
    source: str = "dagostino-pearson-1973"
    primary: bool = False

    def abouts(self, design: Design) -> tuple[About, ...]:
        return (About("", "all rows"),)

    def read(self, fits: Fits, about: About, given: frozenset[str] = frozenset()) -> Reading:
        response = _seen(fits, given)
        lost = degenerate(fits.response)
        e = np.where(lost, np.nan, response.residual)
        with np.errstate(divide="ignore", invalid="ignore"):
            skew = np.asarray(stats.skew(e, axis=0))
            heavy = np.asarray(stats.kurtosis(e, axis=0))
            K2 = stats.skewtest(e, axis=0).statistic ** 2 + stats.kurtosistest(e, axis=0).statistic ** 2
        return Reading(
            statistic=np.asarray(K2),
            statistic_name="K²",
            df=2.0,
            p=np.asarray(special.chdtrc(2, K2)),
            log_p=np.asarray(stats.chi2.logsf(K2, 2)),
            p_method="chi-squared, large samples",
            estimate=skew,
            estimate_name="skewness",
            n_used=fits.design.n,
            caveats=(
                f"Their excess kurtosis is {significant(column(heavy))} (0 when normal).",
                "This is a screen only and decides nothing.",
            ),
        )

    def sentence(self, reading: Reading, about: About) -> str:
        return (
            f"The residuals have skewness {significant(column(reading.estimate))} (0 when normal; skewness "
            f"and kurtosis together, K² = {significant(column(reading.statistic))}, "
            f"{p_value(column(reading.p))})."
        )


@once
def row_codes(design: Design) -> npt.NDArray[np.int64]:
    """(n,) which distinct row of model columns, raw covariates and declared structures each row is.

    Columns are compared at nine digits of their size: QR leaves rounding in the last few.
    """
    codes, live, given = np.zeros(design.n, dtype=np.int64), np.arange(design.n), 0
    for values in _columns(design):
        # Only rows that are still like another one are looked at again.
        order = live[np.lexsort((values[live], codes[live]))]
        new = np.append(True, (np.diff(codes[order]) != 0) | (np.diff(values[order]) != 0))
        codes[order] = given + np.cumsum(new)
        given += int(new.sum())
        live = order[~(new & np.append(new[1:], True))]
        if not len(live):
            break
    return np.unique(codes, return_inverse=True)[1].ravel().astype(np.int64)


def _columns(design: Design) -> Iterator[npt.NDArray[Any]]:
    """What rows are compared by, one (n,) column at a time; structures first, which tell most rows apart."""
    for part in design.partitions.values():
        yield part.codes
    if design.serial is not None:
        yield design.serial.times[1]
    for w in design.basis.R.T:
        yield _digits(rows_of(design, design.Q @ w))
    for x in design.covariates.values():
        yield _digits(np.asarray(x, dtype=float))


def _digits(x: Array) -> Array:
    """Nine digits of the size of a column."""
    scale = float(np.abs(x).max()) or 1.0
    return np.asarray(np.round(x / scale * 1e9))


@dataclass(frozen=True)
class Duplicates(Plain):
    """Rows identical in y, in every column of the model, and in group, time and place.

    Copies look like perfect dependence. A count, without a null law: rounded and counted values can
    repeat honestly, so it never decides.
    """

    id: str = "duplicates"
    family: Family = "lookalike"
    null: str = "No row is a copy of another."
    alternative: str = "Some rows are copies of others."
    needs: Needs = field(default=Needs(frozenset(), {"rows": 2}, known_design=True))
    source: str = ""
    primary: bool = False

    def abouts(self, design: Design) -> tuple[About, ...]:
        return (About("", "rows identical in every column used"),)

    def read(self, fits: Fits, about: About, given: frozenset[str] = frozenset()) -> Reading:
        if fits.run.settings.weights_kind == "frequency" and fits.run.settings.weights is not None:
            raise NotSupported("rows were repeated by their frequency, so copies are what was declared")
        codes = row_codes(fits.design)
        Y = whole(fits.response)
        copies = [copies_of(codes, Y[:, b]) for b in range(fits.response.B)]
        counts = np.array([float(len(rows)) for rows in copies])
        return Reading(
            statistic=counts,
            statistic_name="copies",
            p=np.full(len(counts), np.nan),
            p_method="a count, no test",
            estimate=counts / fits.design.n,
            estimate_name="share of rows that copy another",
            n_used=fits.design.n,
            flag=counts > 0,
            rows=tuple(int(r) for r in copies[0][:50]),
            caveats=("Rounded or counted values can repeat honestly.",) if counts[0] else (),
        )

    def sentence(self, reading: Reading, about: About) -> str:
        found = int(column(reading.statistic))
        if not found:
            return "No row is identical to another in every column used."
        verb = "copies" if found == 1 else "copy"
        return f"{count(found, 'row')} {verb} an earlier row in every column used."


def copies_of(codes: npt.NDArray[np.int64], y: Array) -> npt.NDArray[np.int64]:
    """Rows whose code and y (to nine digits) have occurred in an earlier row."""
    shared = np.flatnonzero(np.bincount(codes)[codes] > 1)
    digits = _digits(y)
    order = shared[np.lexsort((shared, digits[shared], codes[shared]))]
    same = (np.diff(codes[order]) == 0) & (np.diff(digits[order]) == 0)
    return np.sort(order[1:][same])
