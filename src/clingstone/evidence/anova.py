"""Analysis of variance of residuals by groups: mean squares, intraclass correlation, exact interval."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import special

from clingstone.design.derived import absorb, sweep
from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.maths.once import Array, once
from clingstone.maths.partition import Partition


@once
def absorbed(design: Design, part: Partition) -> Design:
    """The design with the means of a partition swept out."""
    return absorb(design, part)[0]


@dataclass(frozen=True, eq=False)
class Anova:
    """Between and within sums of squares of y after the model (Henderson's third method).

    df1 : rank of Z'MZ, what the groups add to the model. df2 : n − rank[X, Z].
    between, within : (B,) sums of squares. n0 : tr(Z'MZ) / df1, the effective group size.
    """

    df1: int
    df2: int
    between: Array
    within: Array
    n0: float

    @property
    def F(self) -> Array:
        """(SSB/df1) / (SSW/df2), exactly F(df1, df2) without a group effect."""
        with np.errstate(divide="ignore", invalid="ignore"):
            return np.asarray((self.between / self.df1) / (self.within / self.df2))

    @property
    def icc(self) -> Array:
        """(MSB − MSW) / (MSB + (n0 − 1) MSW), signed."""
        msb, msw = self.between / self.df1, self.within / self.df2
        with np.errstate(divide="ignore", invalid="ignore"):
            return np.asarray((msb - msw) / (msb + (self.n0 - 1.0) * msw))


def anova(response: Response, part: Partition) -> Anova:
    """Mean squares of a response by a partition; df1 or df2 may be 0 (nothing to compare)."""
    design = response.design
    inner = absorbed(design, part)
    within = sweep(response, inner, part).ss
    df1 = part.count + inner.p - design.p
    spread = float(design.sizes(part).sum() - np.sum(design.sums(part) ** 2))
    return Anova(
        df1=df1,
        df2=design.n - part.count - inner.p,
        between=np.maximum(response.ss - within, 0.0),
        within=np.asarray(within),
        n0=spread / df1 if df1 else float("nan"),
    )


def icc_interval(
    response: Response, part: Partition, table: Anova, confidence: float, steps: int = 46
) -> tuple[Array, Array]:
    """Exact interval of the intraclass correlation, (B,) each, any unbalance and any covariates.

    The pivot W(λ) = [Σ w_l²/(1+λμ_l)/df1]/MSW is F(df1, df2) at the true λ = τ²/σ² and falls in λ
    (Wald 1947; Harville & Fenech 1985); μ_l, w_l are the spectrum of Z'MZ and e in it. The sum is
    e'P(λ)e − SSW with P from V = I + λZZ', so no eigenproblem is needed: groups of equal size share
    one small matrix. Both ends are found by bisection, all columns at once; ρ = λ/(1+λ). The lower
    end may be negative, down to −1/(n_max − 1), where V stops being a covariance.
    """
    pivot = _Pivot.of(response, part, table)
    alpha = 1.0 - confidence
    upper_f = float(special.fdtri(table.df1, table.df2, 1.0 - alpha / 2))
    lower_f = float(special.fdtri(table.df1, table.df2, alpha / 2))
    low, high = pivot.solve(upper_f, steps), pivot.solve(lower_f, steps)
    lost = ~(table.within > 0)
    return np.where(lost, np.nan, low / (1.0 + low)), np.where(lost, np.nan, high / (1.0 + high))


@dataclass(frozen=True, eq=False)
class _Pivot:
    sizes: Array  # (D,) distinct group sizes
    QQ: Array  # (D, p, p) Σ t_g t_g' over the groups of a size, t_g = Z_g'Q
    QE: Array  # (D, p, B)
    EE: Array  # (D, B)
    ss: Array
    table: Anova

    @classmethod
    def of(cls, response: Response, part: Partition, table: Anova) -> _Pivot:
        design = response.design
        sizes, codes = np.unique(design.sizes(part), return_inverse=True)
        by_size = Partition("size", codes.astype(np.int32), tuple(str(s) for s in sizes))
        tQ, tE = design.sums(part), response.sums(part)
        D, p, B = len(sizes), design.p, response.B
        QQ = by_size.sums((tQ[:, :, None] * tQ[:, None, :]).reshape(part.count, -1)).reshape(D, p, p)
        QE = np.stack([by_size.sums(tQ[:, j : j + 1] * tE) for j in range(p)], axis=1)
        return cls(sizes, QQ, QE.reshape(D, p, B), by_size.sums(tE**2).reshape(D, B), response.ss, table)

    def W(self, ratio: Array) -> Array:
        """(B,) the pivot at one λ per column."""
        k = ratio[:, None] / (1.0 + ratio[:, None] * self.sizes)  # (B, D)
        A = np.eye(self.QQ.shape[1]) - np.tensordot(k, self.QQ, axes=1)  # (B, p, p)
        b = -np.einsum("bd,dpb->bp", k, self.QE)
        c = self.ss - np.einsum("bd,db->b", k, self.EE)
        whole = c - np.einsum("bp,bp->b", b, np.linalg.solve(A, b[:, :, None])[:, :, 0])
        with np.errstate(divide="ignore", invalid="ignore"):
            msw = self.table.within / self.table.df2
            return np.asarray((whole - self.table.within) / self.table.df1 / msw)

    def solve(self, target: float, steps: int) -> Array:
        """(B,) λ with W(λ) = target, within (−1/n_max, 1e7/n̄); the bound where there is none."""
        edge = (1.0 - 1e-7) / float(self.sizes.max())
        low = np.full(len(self.ss), np.log(1e-7 / self.sizes.max()))
        high = np.full(len(self.ss), np.log(1e7 / self.sizes.mean()))
        for _ in range(steps):
            mid = (low + high) / 2
            above = self.W(np.exp(mid) - edge) > target
            low, high = np.where(above, mid, low), np.where(above, high, mid)
        return np.asarray(np.exp((low + high) / 2) - edge)
