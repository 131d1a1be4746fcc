"""Groups: does the slope of a predictor differ between groups?"""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING

import numpy as np
from scipy import special

from clingstone.design.derived import sweep
from clingstone.design.design import Design, Term
from clingstone.design.response import Response
from clingstone.display import bounds, decimals_for, freedom, number, p_value, significant
from clingstone.evidence.anova import absorbed
from clingstone.evidence.finding import About, Reading, column
from clingstone.evidence.groups import BY, covariate, level_name, moving, row_level
from clingstone.evidence.read import Plain, by_f, degenerate
from clingstone.evidence.rough import inner_models, inner_node
from clingstone.maths.basis import Basis
from clingstone.maths.once import Array, kept, once
from clingstone.maths.partition import Partition
from clingstone.needs import Family, Needs, NotSupported

if TYPE_CHECKING:
    from clingstone.covariance.fits import Fits

STEPS = 60
RANK = 1e-9
HELD = "F, one-sided, group intercepts swept out, dependence fitted without slopes and held"


@dataclass(frozen=True)
class SlopeVariation(Plain):
    """Exact F test of group-specific slopes, group intercepts swept out first.

    F compares the residuals about one common slope with those about a slope per group, both beside free
    intercepts: exact under normal errors for any unbalance, and for any variance of the intercepts and any
    correlation with them. Its size is the standard deviation of slopes, τ² = (MSB − MSW)/n₀ (Henderson's
    third method), with the interval of Wald (1947) and Harville & Fenech (1985) for a variance ratio.

    A process in time, or a finer level, makes slopes that are apparent only. Given them the same F is read on
    rows whitened by their error model, fitted without slopes and held: see ``clingstone.evidence.rough``.
    """

    id: str = "slope-variation"
    family: Family = "group"
    null: str = "All groups have the same slope."
    alternative: str = "Slopes differ between groups."
    needs: Needs = field(default=Needs(frozenset({"group"}), {"groups": 2}, known_design=True))
    source: str = "harville-fenech-1985"
    primary: bool = False

    def abouts(self, design: Design) -> tuple[About, ...]:
        return tuple(
            About(f"{term.name}{BY}{level.key}", f"slopes of {term.name} between {level_name(level.key)}")
            for level, term in sloping(design)
        )

    def givens(self, fits: Fits, about: About) -> tuple[frozenset[str], ...]:
        node = inner_node(fits, _place(fits.design, about)[0])
        return (node,) if node else ()

    def read(self, fits: Fits, about: About, given: frozenset[str] = frozenset()) -> Reading:
        design = fits.design
        part, term = _place(design, about)
        x = covariate(design, term)
        assert x is not None
        table = spread_given(fits, part, x, given) if given else spread(fits.response, part, term.name, x)
        lost = degenerate(fits.response)
        F = np.where(lost, np.nan, table.F)
        sd = np.where(lost, np.nan, table.sd)
        low, high = (None, None)
        if fits.response.B == 1:
            low, high = table.interval(fits.run.settings.confidence)
            low, high = np.minimum(low, sd), np.maximum(high, sd)
        return replace(
            by_f(
                F, table.df1, table.df2, HELD if given else "exact F, one-sided, group intercepts swept out"
            ),
            estimate=sd,
            estimate_name="standard deviation of slopes between groups",
            low=low,
            high=high,
            n_used=design.n,
            caveats=_beside(design, term.columns[0], fits.response),
        )

    def sentence(self, reading: Reading, about: About) -> str:
        name, _, level = about.key.rpartition(BY)
        sd, low, high = column(reading.estimate), column(reading.low), column(reading.high)
        tail = (
            f"F = {significant(column(reading.statistic))} on {freedom(reading.df, reading.df2)}, "
            f"{p_value(column(reading.p))}."
        )
        if not high > 0:
            return (
                f"Slopes of {name} differ between groups of {level_name(level)} no more than row noise makes "
                f"them; {tail}"
            )
        decimals = decimals_for(sd if sd > 0 else high)
        size = f"{number(sd, decimals)}{bounds(low, high, decimals)}"
        return (
            f"Slopes of {name} differ between groups of {level_name(level)} with a standard deviation of "
            f"{size}; {tail}"
        )


@once
def sloping(design: Design) -> tuple[tuple[Partition, Term], ...]:
    """Numeric terms that vary within a level, in focus or a part of an interaction in focus."""
    if design.group is None:
        return ()
    inside = {x for t in design.focus() if t.kind == "interaction" for x in t.variables}
    out = [(v, t) for v, t in row_level(design) if covariate(design, t) is not None]
    for level in reversed(design.group.levels):
        for term in design.terms:
            if term.focus or level.count < 2 or not inside.intersection(term.variables):
                continue
            if covariate(design, term) is not None and moving(design, level, term):
                out.append((level, term))
    return tuple(out)


def _place(design: Design, about: About) -> tuple[Partition, Term]:
    return next((v, t) for v, t in sloping(design) if f"{t.name}{BY}{v.key}" == about.key)


def _beside(design: Design, j: int, response: Response) -> tuple[str, ...]:
    if response.B != 1:
        return ()
    slope = float((design.basis.inverse @ response.coef[:, 0])[j])
    return (f"The common slope of the model is {significant(slope, 3)}.",)


@dataclass(frozen=True, eq=False)
class Spread:
    """Sums of squares with one slope and with a slope per group, group intercepts swept out.

    c (G,) : Σ (x − x̄_g)². TQ (G, p), TE (G, B) : Σ (x − x̄_g)[Q, e] of the swept design. df1 : slopes that the
    groups add. df2 : left within them. whole, within (B,) : residual sums of squares without and with.
    """

    c: Array
    TQ: Array
    TE: Array
    df1: int
    df2: int
    whole: Array
    within: Array

    @property
    def F(self) -> Array:
        with np.errstate(divide="ignore", invalid="ignore"):
            return np.asarray((self.whole - self.within) / self.df1 / (self.within / self.df2))

    @property
    def n0(self) -> float:
        """tr(Z'MZ)/df1, Z the swept slopes."""
        return float(self.c.sum() - np.sum(self.TQ**2)) / self.df1

    @property
    def sd(self) -> Array:
        """(B,) √max((MSB − MSW)/n₀, 0)."""
        msb, msw = (self.whole - self.within) / self.df1, self.within / self.df2
        return np.asarray(np.sqrt(np.maximum((msb - msw) / self.n0, 0.0)))

    def interval(self, confidence: float) -> tuple[Array, Array]:
        """Ends for the standard deviation, σ² at its estimate within groups; one column of y."""
        alpha = 1 - confidence
        ends = (special.fdtri(self.df1, self.df2, q) for q in (1 - alpha / 2, alpha / 2))
        msw = float(self.within[0]) / self.df2
        low, high = (np.array([np.sqrt(max(self._solve(float(f)), 0.0) * msw)]) for f in ends)
        return low, high

    def _pivot(self, ratio: float) -> float:
        """[Σ w²/(1 + λμ)/df1]/MSW, F(df1, df2) at the true λ = τ²/σ², falling in λ."""
        k = ratio / (1 + ratio * self.c)
        A = np.eye(self.TQ.shape[1]) - self.TQ.T @ (k[:, None] * self.TQ)
        b = -self.TQ.T @ (k * self.TE[:, 0])
        rest = float(self.whole[0]) - float(k @ self.TE[:, 0] ** 2) - float(b @ np.linalg.pinv(A, RANK) @ b)
        return (rest - float(self.within[0])) / self.df1 / (float(self.within[0]) / self.df2)

    def _solve(self, target: float) -> float:
        if self._pivot(0.0) <= target:
            return 0.0
        low, high = np.log(1e-8 / self.c.max()), np.log(1e8 / self.c.mean())
        for _ in range(STEPS):
            middle = (low + high) / 2
            above = self._pivot(float(np.exp(middle))) > target
            low, high = (middle, high) if above else (low, middle)
        return float(np.exp((low + high) / 2))


def spread(response: Response, part: Partition, name: str, x: Array) -> Spread:
    """Sums of squares for one predictor at one level. Raises NotSupported where slopes cannot be told."""
    design = response.design
    inner = absorbed(design, part)

    def of_design() -> tuple[Array, Array, Array]:
        root = np.ones(design.n) if design.root is None else design.root
        centre = part.sums(x * root**2) / part.sums(root**2)
        u = (x - centre[part.codes]) * root
        # What rounding leaves of a predictor constant in a group would count as variation there.
        c = np.where((c := part.sums(u * u)) > 1e-18 * np.sum((x * root) ** 2), c, 0.0)
        u = np.where(c[part.codes] > 0, u, 0.0)
        return u, c, part.sums(u[:, None] * inner.Q)

    u, c, TQ = kept(design, ("slopes", part.key, name), of_design)
    swept = sweep(response, inner, part)
    TE = part.sums(u[:, None] * swept.residual)
    return compared(part, name, c, TQ, TE, swept.ss, inner.p)


def spread_given(fits: Fits, part: Partition, x: Array, given: frozenset[str]) -> Spread:
    """As ``spread``, on rows freed of what goes on within groups; x (n,) on the scale of the user.

    Whitening row by row keeps to groups, so W1 and Wx cut by group are the intercepts and slopes there.
    """
    design, response = fits.design, fits.response
    root = np.ones(design.n) if design.root is None else design.root
    models = inner_models(fits, given)
    tables = []
    for b in range(response.B):
        white = models.white(b, np.column_stack([root, x * root, design.Q, response.residual[:, b]]))
        w, raw = white[:, 0].copy(), part.sums(white[:, 1] ** 2)
        size = part.sums(w * w)
        for j in range(1, white.shape[1]):
            white[:, j] -= w * (part.sums(w * white[:, j]) / size)[part.codes]
        u, Q, e = white[:, 1], white[:, 2:-1], white[:, -1]
        c = np.where((c := part.sums(u * u)) > 1e-12 * raw, c, 0.0)
        u = np.where(c[part.codes] > 0, u, 0.0)
        R = np.linalg.qr(Q, mode="r")
        _, size, turn = np.linalg.svd(R, full_matrices=False)
        some = size > RANK * max(float(size[0]), 1.0)
        Q = Basis.of(Q @ (turn[some].T / size[some])).Q
        e = e - Q @ (Q.T @ e)
        TQ, TE = part.products(u, Q), part.sums(u * e)[:, None]
        tables.append(compared(part, "the predictor", c, TQ, TE, np.array([e @ e]), Q.shape[1]))
    first = tables[0]
    if len(tables) == 1:
        return first
    whole, within = (np.concatenate([getattr(t, k) for t in tables]) for k in ("whole", "within"))
    return replace(first, TE=np.hstack([t.TE for t in tables]), whole=whole, within=within)


def compared(part: Partition, name: str, c: Array, TQ: Array, TE: Array, ss: Array, p: int) -> Spread:
    """One slope against a slope per group, from the sums of (swept) rows. Raises NotSupported.

    ss (B,) : sums of squares with one slope. p : columns that the swept model has left.
    """
    able = c > 0
    scale = np.where(able, c, 1.0)
    A = np.eye(p) - TQ.T @ (TQ / scale[:, None])
    b = -TQ.T @ (TE / scale[:, None])
    size, U = np.linalg.eigh(A)
    free = size > RANK
    project = U[:, free].T @ b
    within = ss - np.sum(TE**2 / scale[:, None], axis=0)
    within = within - np.sum(project**2 / size[free][:, None], axis=0)
    df1 = int(able.sum()) - int(np.sum(~free))
    df2 = part.n - part.count - p - df1
    if df1 < 1:
        raise NotSupported(
            f"{name} varies within too few groups of {part.key}, or the model has a slope for each already",
            "More groups over which it varies would be needed.",
        )
    if df2 < 1:
        raise NotSupported(
            f"a slope for every group of {part.key} leaves no degrees of freedom within groups",
            "Three rows or more in some groups would be needed.",
        )
    return Spread(c, TQ, TE, df1, df2, np.asarray(ss), np.maximum(within, 0.0))
