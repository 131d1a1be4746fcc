"""Joint tests: F, its degrees of freedom and p, in every column of y."""

from __future__ import annotations

from clingstone.maths import reference
from clingstone.maths.once import Array

Joint = tuple[Array, float, Array | float, Array]


def f_joint(F: Array, q: int, df2: Array | float) -> Joint:
    """F on q and df2 degrees of freedom, with its p."""
    return F, float(q), df2, reference.f_tail(F, q, df2)


def wald_joint(wald: Array, q: int, df2: Array | float) -> Joint:
    """F = Wald statistic over q, on q and df2 degrees of freedom."""
    return f_joint(wald / q, q, df2)


def hotelling_joint(wald: Array, q: int, eta: float) -> Joint | None:
    """F and p of an approximate T² with η df, or None where η leaves no denominator."""
    if not eta - q + 1 > 0:
        return None
    F, df2 = reference.hotelling(wald, q, eta)
    return f_joint(F, q, df2)
