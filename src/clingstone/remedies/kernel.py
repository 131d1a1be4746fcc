"""Bartlett-kernel variances of ordinary estimates: along time, and over periods that series share."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Literal

import numpy as np
import numpy.typing as npt

from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.maths import bandwidth, reference
from clingstone.maths.fixedb import bartlett_law, wishart
from clingstone.maths.longrun import Grid, RatioLaw
from clingstone.maths.once import Array
from clingstone.maths.partition import Partition
from clingstone.remedies.joint import Joint, hotelling_joint, wald_joint
from clingstone.remedies.linear import LinearReady
from clingstone.remedies.remedy import Account, ByBandwidth

if TYPE_CHECKING:
    from clingstone.covariance.fits import Fits

Bandwidth = Literal["textbook", "wide", "newey-west", "andrews", "quarter"]
RULES: dict[Bandwidth, str] = {
    "textbook": "⌊4(N/100)^(2/9)⌋",
    "wide": "⌈1.3√N⌉ − 1",
    "newey-west": "Newey & West 1994, from the scores",
    "andrews": "Andrews 1991, from the scores",
    "quarter": "⌊N^(1/4)⌋",
}
SHOWN = 3  # coefficients whose standard error is shown against the bandwidth


@dataclass(frozen=True, eq=False, kw_only=True)
class KernelReady(LinearReady):
    """V = Σ_j (1 − |j|/(L+1)) Γ_j of the scores on a grid of steps.

    part : rows → periods, whose scores are summed first; None when each row has its own step.
    fixed : refer t to its fixed-b law; else to the normal. corrected : factor n/(n − p).
    """

    grid: Grid
    lags: Bandwidth
    fixed: bool
    corrected: bool
    what: str
    sources: str
    part: Partition | None = None

    @classmethod
    def made(
        cls,
        design: Design,
        names: tuple[str, ...],
        W: Array,
        grid: Grid,
        *,
        lags: Bandwidth,
        fixed: bool,
        corrected: bool,
        what: str,
        source: str,
        notes: tuple[str, ...],
        part: Partition | None = None,
    ) -> KernelReady:
        """Ready with its df: fixed-b critical values need a rule that does not read y."""
        if fixed and lags not in PLAIN:
            raise ValueError("fixed-b critical values go with a bandwidth that does not read y")
        df = wishart(bartlett_law(grid.lengths, _lags(lags, grid.N) + 1))[1] if fixed else np.inf
        return cls(
            design,
            names,
            W,
            np.full((len(names), 1), df),
            "fixed-b" if fixed else "normal quantile",
            notes=notes,
            grid=grid,
            lags=lags,
            fixed=fixed,
            corrected=corrected,
            what=what,
            sources=_sources(source, lags, fixed),
            part=part,
        )

    @property
    def _factor(self) -> float:
        return self.design.n / self.design.m if self.corrected else 1.0

    def _scores(self, a: Array, e: Array) -> Array:
        """Scores of one contrast for B columns, or of q contrasts for one: (T, ·)."""
        return a * e if self.part is None else self.part.sums(a * e)

    def chosen(self, response: Response) -> npt.NDArray[np.int64]:
        """(B,) lags; the same for all columns unless the rule reads the residuals."""
        if self.lags in PLAIN:
            return np.full(response.B, _lags(self.lags, self.grid.N))
        return np.array([self._automatic(response.residual[:, b]) for b in range(response.B)])

    def _automatic(self, e: Array) -> int:
        """From the scores of all columns but the constant, as other software has it.

        The result depends on the units of the predictors where there are several.
        """
        X = self.design.Q @ self.design.basis.R
        constant = [j for t in self.design.terms if t.kind == "constant" for j in t.columns]
        keep = [j for j in range(X.shape[1]) if j not in constant] or list(range(X.shape[1]))
        scores = self._scores(X[:, keep], e[:, None])
        if self.lags == "newey-west":
            S = bandwidth.newey_west(self.grid, scores.sum(axis=1))
        else:
            S = bandwidth.andrews(self.grid, scores)
        return int(min(np.floor(S), self.grid.N - 1)) if np.isfinite(S) else bandwidth.textbook(self.grid.N)

    def _each(self, response: Response, read: Callable[[Response, int], Array]) -> Array:
        """``read(columns, lags)`` over columns of equal lags, put together along the last axis."""
        lags = self.chosen(response)
        distinct = np.unique(lags)
        if len(distinct) == 1:
            return read(response, int(distinct[0]))
        return np.concatenate([read(response.column(b), int(lags[b])) for b in range(response.B)], axis=-1)

    def variance(self, response: Response) -> Array:
        return self._each(response, self.variance_at)

    def variance_at(self, response: Response, lags: int) -> Array:
        """(k, B) with so many lags."""
        a = self.design.Q @ self.W
        rows = [
            self.grid.bartlett_squares(self._scores(a[:, j : j + 1], response.residual), lags)
            for j in range(a.shape[1])
        ]
        return np.asarray(self._factor * np.stack(rows))

    def block(self, response: Response, columns: tuple[int, ...]) -> Array:
        a = self.design.Q @ self.W[:, list(columns)]

        def read(of: Response, lags: int) -> Array:
            each = [self.grid.bartlett(self._scores(a, e[:, None]), lags) for e in of.residual.T]
            return self._factor * np.stack(each, axis=2)

        return self._each(response, read)

    @property
    def law(self) -> RatioLaw:
        """The fixed-b law of t."""
        return bartlett_law(self.grid.lengths, _lags(self.lags, self.grid.N) + 1)

    def refer(self, estimate: Array, se: Array, confidence: float) -> tuple[Array, Array, Array]:
        if not self.fixed:
            return reference.t_rows(estimate, se, self.df, confidence)
        se = np.where(se > 0, se, np.nan)
        c = self.law.quantile(1 - confidence)
        p = self.law.tail((estimate / se).ravel()).reshape(estimate.shape)
        return estimate - c * se, estimate + c * se, p

    def joint(self, wald: Array, columns: tuple[int, ...]) -> Joint | None:
        q = len(columns)
        if not self.fixed:
            return wald_joint(wald, q, np.inf)
        scale, nu = wishart(self.law)
        return hotelling_joint(scale * wald, q, nu)

    def account(self, fits: Fits) -> Account:
        lags = int(self.chosen(fits.response)[0])
        grid = self.grid
        items = [("series", f"{len(grid.lengths)}")] if self.part is None else []
        items += [("steps" if self.part is None else "periods", f"{grid.N}")]
        if missing := grid.N - (self.design.n if self.part is None else self.part.count):
            items.append(("missing steps, entered as zero scores", f"{missing}"))
        items += [("lags", f"{lags}"), ("rule for the lags", RULES[self.lags])]
        return Account(
            estimator="ordinary least squares",
            covariance=self.what,
            factor="n/(n − p)" if self.corrected else "none",
            df_rule=self.rule,
            reference="fixed-b law of t" if self.fixed else "normal",
            items=tuple(items),
            source=self.sources,
            bandwidths=by_lags(self, fits.response),
        )


def by_lags(ready: KernelReady, response: Response) -> tuple[ByBandwidth, ...]:
    """Standard errors by number of lags, for the first few coefficients other than the constant."""
    design = ready.design
    constant = {design.names[j] for t in design.terms if t.kind == "constant" for j in t.columns}
    focus = [design.names[j] for t in design.terms if t.focus for j in t.columns]
    names = (focus or [n for n in ready.names if n not in constant])[:SHOWN]
    top = max(int(ready.grid.lengths.max()) // 3, 2)  # of the longest series
    lags = (0, *(2**k for k in range(9) if 2**k < top))
    one = response if response.B == 1 else response.column(0)
    at = [ready.names.index(name) for name in names]
    some = replace(ready, names=tuple(names), W=ready.W[:, at], df=ready.df[at])
    se = np.stack([np.sqrt(some.variance_at(one, L)[:, 0]) for L in lags])
    return tuple(
        ByBandwidth(name, "lags", "", tuple(map(float, lags)), tuple(own.tolist()))
        for name, own in zip(names, se.T, strict=True)
    )


def _lags(rule: Bandwidth, N: int) -> int:
    """Lags of a rule that reads the number of steps alone."""
    return min(PLAIN[rule](N), N - 1)


PLAIN: dict[Bandwidth, Callable[[int], int]] = {
    "textbook": bandwidth.textbook,
    "wide": lambda N: int(np.ceil(bandwidth.wide(N))) - 1,
    "quarter": lambda N: int(np.floor(N**0.25 + 1e-9)),
}


def _sources(first: str, rule: Bandwidth, fixed: bool) -> str:
    """Keys of references of a kernel variance."""
    named = {"newey-west": "newey-west-1994", "andrews": "andrews-1991", "textbook": "newey-west-1994"}
    keys = [first]
    if rule in named:
        keys.append(named[rule])
    if fixed:
        keys.append("kiefer-vogelsang-2005")
        keys += ["vogelsang-2012"] if first == "driscoll-kraay-1998" else []
    return ", ".join(keys)
