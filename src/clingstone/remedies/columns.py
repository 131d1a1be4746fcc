"""Columns of y, each with its own covariance and degrees of freedom, and their Estimates."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from typing import Literal

import numpy as np

from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.maths import curvature, reference
from clingstone.maths.kenward import Kenward
from clingstone.maths.once import Array
from clingstone.needs import Refusal
from clingstone.remedies.joint import Joint, f_joint
from clingstone.remedies.remedy import Estimates, Flags, multi

Rule = Literal["kenward-roger", "satterthwaite", "residual", "normal"]
RULES: dict[Rule, str] = {
    "kenward-roger": "Kenward–Roger",
    "satterthwaite": "Satterthwaite",
    "residual": "n − p",
    "normal": "normal quantile",
}
FLAT = "The likelihood is flat in its parameters, so every interval has one degree of freedom."

DEAR = "Satterthwaite's df: too many groups together for Kenward and Roger's."


def plain_df(rule: Rule, m: int) -> float | None:
    """The df of the rules that give every row the same, else None."""
    return {"residual": float(m), "normal": np.inf}.get(rule)


@dataclass(frozen=True, eq=False)
class Column:
    """One column of y under its fitted model: β̂ and Φ in the basis, and where its df come from.

    phi : (p, p), adjusted where the rule adjusts it. df : contrast (p,) → df. joint : contrasts
    (p, q) → (scale of the F statistic, denominator df).
    """

    coef: Array
    phi: Array
    df: Callable[[Array], float]
    joint: Callable[[Array], tuple[float, float]]
    notes: tuple[str, ...] = ()

    @classmethod
    def even(cls, coef: Array, phi: Array, df: float, notes: tuple[str, ...] = ()) -> Column:
        """The same df for every row."""
        return cls(coef, phi, lambda w: df, lambda L: (1.0, df), notes)

    @classmethod
    def bent(cls, coef: Array, slopes: curvature.Slopes, notes: tuple[str, ...] = ()) -> Column:
        """Satterthwaite's df; one where the likelihood is flat in its parameters."""
        if not slopes.sound:
            return cls.even(coef, slopes.phi, 1.0, notes)
        return cls(coef, slopes.phi, slopes.df, lambda L: (1.0, slopes.joint(L)), notes)

    @classmethod
    def kenward(cls, coef: Array, phi: Array, found: Kenward, m: int) -> Column:
        """Kenward and Roger's df, from one to m; phi : their covariance, or Φ where it is kept."""
        return cls(coef, phi, lambda w: float(np.clip(found.df(w), 1.0, m)), found.joint)


def apart(response: Response) -> list[Response]:
    """Every column of y by itself."""
    return [response] if response.B == 1 else [response.column(b) for b in range(response.B)]


@dataclass(frozen=True, eq=False)
class FittedReady:
    """A remedy whose every column of y has a fit of its own; subclasses make the columns.

    names (k,), W (p, k) : reported rows as contrasts in the basis.
    """

    design: Design
    names: tuple[str, ...]
    W: Array
    rule: str
    unusable: Mapping[str, Refusal] = field(default_factory=dict)
    notes: tuple[str, ...] = ()

    def estimates(
        self,
        columns: Sequence[Column],
        confidence: float,
        boundary: Flags | None,
        converged: Flags,
        notes: tuple[str, ...] = (),
    ) -> Estimates:
        """Reported rows of every column, t intervals, joint tests of the terms of several coefficients.

        boundary, converged : (B,). notes : of the first column, kept when there is no other.
        """
        W = self.W
        estimate = np.stack([W.T @ column.coef for column in columns], axis=1)
        variance = [np.einsum("ik,ij,jk->k", W, column.phi, W) for column in columns]
        se = np.sqrt(np.stack(variance, axis=1))
        df = np.stack([[column.df(w) for w in W.T] for column in columns], axis=1)
        own = W[:, : self.design.p]
        one = len(columns) == 1
        return replace(
            Estimates.by_t(estimate, se, df, confidence),
            covariance=own.T @ columns[0].phi @ own if one else None,
            joint={t.name: joint(columns, W[:, list(t.columns)]) for t in multi(self.design)},
            boundary=boundary,
            converged=converged,
            notes=tuple(dict.fromkeys((*columns[0].notes, *notes))) if one else (),
        )


def joint(columns: Sequence[Column], L: Array) -> Joint:
    """F test of q contrasts L (p, q) in every column."""
    q = L.shape[1]
    F, df2 = np.empty(len(columns)), np.empty(len(columns))
    for b, column in enumerate(columns):
        effect = (L.T @ column.coef)[:, None]
        wald = reference.wald(effect, (L.T @ column.phi @ L)[:, :, None])[0]
        scale, df2[b] = column.joint(L)
        F[b] = scale * wald / q
    return f_joint(F, q, df2)
