"""From columns of y, each with its own covariance and degrees of freedom, to Estimates."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from clingstone.design.design import Design
from clingstone.maths import reference
from clingstone.maths.once import Array
from clingstone.remedies.gls import Column
from clingstone.remedies.joint import Joint, f_joint
from clingstone.remedies.remedy import Estimates, Flags, multi


def estimates(
    design: Design,
    W: Array,
    columns: Sequence[Column],
    confidence: float,
    boundary: Flags,
    converged: Flags,
    notes: tuple[str, ...] = (),
) -> Estimates:
    """Rows W (p, k) of every column, t intervals, joint tests of the terms of several coefficients.

    boundary, converged : (B,). notes : of the first column, kept when there is no other.
    """
    estimate = np.stack([W.T @ column.coef for column in columns], axis=1)
    variance = [np.einsum("ik,ij,jk->k", W, column.phi, W) for column in columns]
    se = np.sqrt(np.stack(variance, axis=1))
    df = np.stack([[column.df(w) for w in W.T] for column in columns], axis=1)
    low, high, p = reference.t_rows(estimate, se, df, confidence)
    own = W[:, : design.p]
    one = len(columns) == 1
    return Estimates(
        estimate,
        se,
        df,
        low,
        high,
        p,
        own.T @ columns[0].phi @ own if one else None,
        {t.name: joint(columns, W[:, list(t.columns)]) for t in multi(design)},
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
