"""Plan: how wide would the interval be with other numbers of groups, rows, visits or places?"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any, Literal, get_args

import numpy as np

from clingstone.covariance.algebras import Chosen, choose
from clingstone.covariance.components import declared
from clingstone.design.design import Design, Term
from clingstone.design.response import Response
from clingstone.display import Cell, Column, Table, amount, number, plural_of, significant, wrapped
from clingstone.maths import curvature, groups, reference
from clingstone.maths.basis import Basis, Gram
from clingstone.maths.kenward import Kenward
from clingstone.maths.once import Array
from clingstone.maths.partition import Partition
from clingstone.needs import InputError, Limits, NotSupported, memory
from clingstone.rehearsal.enlarge import enlarged, units
from clingstone.remedies.remedy import rows
from clingstone.run import Run
from clingstone.structure.group import Groups
from clingstone.structure.serial import Series
from clingstone.structure.spatial import Sites

DRAWS = 200  # simulated columns behind the expected information of the error parameters
FACTORS = (0.5, 1.0, 1.5, 2.0, 3.0)  # of the units at hand, when no numbers are asked for
ROW_FACTORS = (1.0, 2.0)  # … and of the rows of each
Varies = Literal["unit", "row"]


@dataclass(frozen=True)
class Scenario:
    """One size of study. units : groups, series or places; rows : of one unit, on average.

    width : expected width of the interval, 2·t·SE with its df; relative : over the first scenario's. cost :
    in the currency of the costs given, NaN when none were.
    """

    units: int
    rows: float
    n: int
    se: float
    df: float
    width: float
    relative: float
    cost: float = float("nan")


def rows_of_each(s: Scenario) -> str:
    """Whole numbers as they are, averages to three digits."""
    return amount(s.rows) if s.rows == round(s.rows) else significant(s.rows, 3)


@dataclass(frozen=True)
class Plan:
    """Interval widths to expect; plain.

    term : the coefficient. unit : what the units are. scenarios : the first is the size at hand. better :
    whether more units or more rows buy precision, in a sentence. assumptions : what all of it rests on.
    """

    term: str
    unit: str
    scenarios: tuple[Scenario, ...]
    better: str
    assumptions: tuple[str, ...]
    confidence: float

    def table(self) -> Table:
        """Every scenario, for people and files."""
        priced = any(np.isfinite(s.cost) for s in self.scenarios)
        columns = [
            Column("units", self.unit, "right"),
            Column("rows", "rows of each", "right"),
            Column("df", "df", "decimal"),
            Column("width", "expected width", "right"),
            Column("relative", "over the first", "decimal"),
        ]
        columns += [Column("cost", "cost", "right")] if priced else []
        body = []
        for s in self.scenarios:
            cells = [
                Cell(f"{s.units:,}", s.units),
                Cell(rows_of_each(s), s.rows),
                Cell(number(s.df, 1), s.df),
                Cell(significant(s.width, 3), s.width),
                Cell(number(s.relative, 2), s.relative),
            ]
            body.append([*cells, Cell(significant(s.cost, 4), s.cost)] if priced else cells)
        caption = f"Expected width of the {100 * self.confidence:g} % interval of {self.term}"
        return Table.of(caption, columns, body, " ".join(self.assumptions))

    def to_frame(self) -> Any:
        """A pandas table of the scenarios."""
        import pandas as pd

        return pd.DataFrame([vars(s) for s in self.scenarios])

    def __str__(self) -> str:
        return "\n".join([self.table().to_text(), "", *wrapped(self.better)])


@dataclass(frozen=True, eq=False)
class Basics:
    """What a plan starts from: a design, its components and their parameters, and the contrast wanted."""

    design: Design
    node: tuple[str, ...]
    theta: Array
    sigma2: float
    term: str
    assumptions: tuple[str, ...]
    held: tuple[int, ...] = ()  # parameters estimated at a bound: not counted among those to be estimated


# ---- one scenario ------------------------------------------------------------------------------


def width_of(design: Design, basics: Basics, run: Run) -> tuple[float, float, float]:
    """SE, df and expected width of the generalised least squares interval under the error model."""
    memory(8.0 * design.n * DRAWS * 4, f"planning for {design.n:,} rows")
    algebra = _algebra(design, basics.node, run.limits)
    names, weights = rows(design)
    w = design.basis.contrast(weights)[:, names.index(basics.term)]
    s2, theta = basics.sigma2, basics.theta
    plain = np.zeros((design.n, 1))
    nothing = Response(design, np.zeros((design.p, 1)), plain, np.zeros(1))
    phi = s2 * np.linalg.inv(algebra.gram(theta, nothing).QQ)
    df = _df(design, algebra, basics, w, run)
    se = float(np.sqrt(w @ phi @ w))
    t = float(reference.t_quantile(1 - run.settings.confidence, df))
    return se, df, 2 * t * se


def _algebra(design: Design, node: Sequence[str], limits: Limits) -> Chosen:
    found, refused = declared(design, limits)
    for key in node:
        if key not in found:
            why = refused.get(key)
            raise NotSupported(why.reason if why is not None else f"{key} cannot be estimated at this size")
    return choose(design, tuple(found[key] for key in found if key in node), limits)


def _df(design: Design, algebra: Chosen, basics: Basics, w: Array, run: Run) -> float:
    """Kenward and Roger's df for one group level, else Satterthwaite's with the expected information."""
    theta, s2, m = basics.theta, basics.sigma2, design.m
    if m < 1:
        raise NotSupported(f"{design.n} rows leave no residual degrees of freedom", "Plan for more.")
    if not len(theta):
        return float(m)
    if len(basics.node) == 1 and basics.node[0].startswith("group:"):
        part = design.partitions[basics.node[0].removeprefix("group:")]
        tau2 = float(algebra.variances(theta[:, None], np.array([s2]))[basics.node[0]][0])
        seen = groups.expected_information(design.n, design.sizes(part), design.sums(part), s2, tau2)
        return float(np.clip(Kenward.of(seen.Phi, seen.P, seen.Q, seen.information).df(w), 1.0, m))
    E = algebra.draw(theta, s2, run.child("plan"), DRAWS)
    e = design.basis.project(E)
    drawn = Response(design, design.Q.T @ E, e, np.einsum("ij,ij->j", e, e))
    one = drawn.column(0)

    def gram(at: Array) -> Gram:
        return algebra.gram(at, one)

    free = [i for i in range(len(theta)) if i not in basics.held]
    found = curvature.slopes(gram, theta, free, m, True, lambda at: algebra.gram(at, drawn), sigma2=s2)
    return found.df(w) if found.sound else 1.0


# ---- many scenarios ------------------------------------------------------------------------------


def planned(
    basics: Basics,
    run: Run,
    counts: Sequence[int] | None,
    per: Sequence[float] | None,
    cost_unit: float | None,
    cost_row: float | None,
) -> Plan:
    """Every combination of numbers of units and of rows per unit, the size at hand first.

    counts : numbers of units. per : mean rows of one unit. cost_unit, cost_row : what one more costs.

    Raises NotSupported when not one of them can be planned.
    """
    design = basics.design
    unit = units(design)
    here, each = unit.count, design.n / unit.count
    single = unit.count == 1
    many = [1] if single else sorted({here, *(counts or [max(2, round(f * here)) for f in FACTORS])})
    factors = FACTORS if single else ROW_FACTORS
    sizes = sorted({each, *(per if per is not None else [f * each for f in factors])})
    if design.spatial is not None and unit.relation(design.spatial.part) == "same" and per is None:
        sizes = [each]
    pairs = [(here, each), *((u, s) for u in many for s in sizes if (u, s) != (here, each))]
    out: list[Scenario] = []
    lost: list[str] = []
    for count, size in pairs:
        try:
            grown = enlarged(design, count, size / each)
            se, df, width = width_of(grown, basics, run)
        except NotSupported as error:
            if not out:
                raise
            lost.append(f"{count:,} × {significant(size, 3)} is left out: {error}.")
            continue
        base = out[0].width if out else width
        price = _price(count, grown.n, cost_unit, cost_row)
        out.append(Scenario(count, grown.n / count, grown.n, se, df, width, width / base, price))
    name = "series" if single and design.serial is not None else _plural(unit.key)
    return Plan(
        basics.term,
        name,
        tuple(out),
        better(basics, run, out, name, single),
        (*basics.assumptions, *lost),
        run.settings.confidence,
    )


def _price(count: int, n: int, unit: float | None, row: float | None) -> float:
    if unit is None and row is None:
        return float("nan")
    return count * (unit or 0.0) + n * (row or 0.0)


def _plural(key: str) -> str:
    return {"site": "places", "series": "series", "all rows": "tables"}.get(key) or plural_of(key)


def better(basics: Basics, run: Run, out: Sequence[Scenario], name: str, single: bool) -> str:
    """Which of twice the units and twice the rows narrows the interval more; with costs, the best buy."""
    design, first = basics.design, out[0]

    def gain(count: int, factor: float) -> float | None:
        try:
            return width_of(enlarged(design, count, factor), basics, run)[2] / first.width
        except NotSupported:
            return None

    units_, rows_ = None if single else gain(2 * first.units, 1.0), gain(first.units, 2.0)
    said = []
    if units_ is not None:
        said.append(f"with twice the {name} {number(units_, 2)} times as wide")
    if rows_ is not None:
        said.append(f"with twice the rows of each {number(rows_, 2)} times as wide")
    text = f"The interval of {basics.term} would be {', '.join(said)}." if said else ""
    if units_ is not None and rows_ is not None:
        if abs(np.log(units_ / rows_)) < 0.02:
            text += " Either buys about the same precision."
        else:
            text += f" More {name if units_ < rows_ else 'rows'} buy more precision."
    priced = [s for s in out if np.isfinite(s.cost) and s.cost > 0]
    if priced:
        best = min(priced, key=lambda s: s.cost * s.width**2)
        text += (
            f" For the money, {best.units:,} {name} of {rows_of_each(best)} rows give the most "
            "precision among these."
        )
    return text.strip()


# ---- stated numbers --------------------------------------------------------------------------------


def stated(
    count: int,
    per: int,
    *,
    icc: float | None,
    rho: float | None,
    reach: float | None,
    sd: float,
    varies: Varies,
) -> Basics:
    """Two arms of equal size over ``count`` units of ``per`` rows each.

    icc : correlation of two rows of one unit. rho : AR(1) correlation of neighbouring visits of one unit.
    reach : practical range over a square map of side 1, with one place per unit. sd : of one row.
    varies : the arm differs between units, or between the rows of one unit in turn.

    Raises InputError for numbers out of their range, or for none or more than one of the three.
    """
    if varies not in get_args(Varies):
        raise InputError(f"varies={varies!r} is not 'unit' or 'row'", "Choose 'unit' or 'row'.")
    if sum(v is not None for v in (icc, rho, reach)) != 1:
        raise InputError("state one of icc, rho and range", "A plan from stated numbers has one structure.")
    if count < 2 or per < 1:
        raise InputError(
            f"{count} units of {per} rows cannot be planned", "Use 2 units or more, 1 row or more."
        )
    if sd <= 0:
        raise InputError(f"sd={sd} is not positive", "Give the standard deviation of one row.")
    code = np.repeat(np.arange(count), per)
    visit = np.tile(np.arange(per), count)
    arm = ((code if varies == "unit" else visit + code) % 2).astype(float)
    part = Partition("unit", code.astype(np.int32), tuple(str(v + 1) for v in range(count)))
    X = np.column_stack([np.ones(len(arm)), arm])
    terms = (Term("constant", (0,), "constant"), Term("arm", (1,), "factor", ("arm",), True))
    design = Design(Basis.of(X), ("constant", "arm"), terms)
    how = "differs between units" if varies == "unit" else "alternates between the rows of one unit"
    said = f"Two arms of equal size; the arm {how}. A row has a standard deviation of {amount(sd)}."
    if icc is not None:
        _within("icc", icc, 0.0, 1.0)
        theta = np.array([np.log(max(icc, 1e-12) / (1 - icc))])
        design = replace(design, group=Groups((part,), "one level"))
        words = f"Two rows of one unit correlate {significant(icc)}."
        return Basics(design, ("group:unit",), theta, sd**2 * (1 - icc), "arm", (said, words))
    if rho is not None:
        _within("rho", rho, -1.0, 1.0)
        serial = Series("visit", part, visit.astype(float), "", 1.0, visit, "regular")
        design = replace(design, serial=serial)
        words = f"Neighbouring visits of one unit correlate {significant(rho)}, by AR(1)."
        return Basics(design, ("serial",), np.array([np.arctanh(rho)]), sd**2, "arm", (said, words))
    return _mapped(design, part, float(reach or 0.0), sd, said)


def _mapped(design: Design, part: Partition, reach: float, sd: float, said: str) -> Basics:
    from scipy.stats import qmc

    from clingstone.maths.matern import PRACTICAL

    if not reach > 0:
        raise InputError(f"range={reach} is not positive", "Give it as a part of the side of the map.")
    xy = qmc.Halton(2, scramble=False).random(part.count + 1)[1:]
    design = replace(design, spatial=Sites(Partition("site", part.codes, part.labels), xy, "planar"))
    # Nine tenths of the variance are the field's: a nugget keeps close places from being copies.
    theta = np.array([np.log(reach / PRACTICAL[0.5]), np.log(9.0)])
    words = (
        f"A field over a square map of side 1 with a practical range of {significant(reach)}, nugget 10 %."
    )
    return Basics(design, ("spatial",), theta, sd**2 / 10, "arm", (said, words))


def _within(name: str, value: float, low: float, high: float) -> None:
    if not low <= value < high or (low < 0 and value <= low):
        raise InputError(f"{name}={value} lies outside {low:g} to {high:g}", "Give a correlation.")
