"""A law from its first four moments: the spectrum replaced by three points. Approximate, and said to be."""

from __future__ import annotations

import numpy as np

from clingstone.maths.basis import Basis
from clingstone.maths.forms import Form
from clingstone.maths.once import Array, once
from clingstone.maths.partition import Partition
from clingstone.maths.spectra import Eigen
from clingstone.maths.traces import projected, residual_df


@once
def surrogate(basis: Basis, form: Form, swept: Partition | None, upper: bool) -> Eigen:
    """A three-point spectrum with the same τ₀ … τ₄, one point at the end of the spectrum on that side.

    Gauss–Radau quadrature of the spectral measure (Golub 1973): its law lies in the attainable range,
    is monotone, and has the first four moments of the true one.
    """
    m = float(residual_df(basis, swept))
    tau = projected(basis, form, swept, 4)
    return radau(np.array([m, *tau]), form.high if upper else form.low)


def radau(tau: Array, end: float) -> Eigen:
    """Three points with power sums τ₀ … τ₄, one of them ``end``; two or one where fewer suffice."""
    m, mean = float(tau[0]), float(tau[1] / tau[0])
    # Central moments of the spectral measure, in units of its standard deviation.
    c2 = tau[2] / m - mean**2
    if c2 <= 1e-14 * max(mean**2, end**2):
        return Eigen(np.array([mean]), np.array([m]))
    sd = np.sqrt(c2)
    c3 = (tau[3] / m - 3 * mean * tau[2] / m + 2 * mean**3) / sd**3
    c4 = (tau[4] / m - 4 * mean * tau[3] / m + 6 * mean**2 * tau[2] / m - 3 * mean**4) / sd**4
    # Recurrence of the orthogonal polynomials: a₀ = 0, b₁² = 1, a₁ = c₃, b₂² = c₄ − c₃² − 1.
    a1, b2 = c3, c4 - c3**2 - 1.0
    if b2 <= 1e-12:
        J = np.array([[0.0, 1.0], [1.0, a1]])
    else:
        x = (end - mean) / sd
        p1, p2 = x, (x - a1) * x - 1.0
        a2 = x - b2 * p1 / p2 if p2 != 0 else x
        J = np.array([[0.0, 1.0, 0.0], [1.0, a1, np.sqrt(b2)], [0.0, np.sqrt(b2), a2]])
    point, vector = np.linalg.eigh(J)
    return Eigen(mean + sd * point, m * vector[0] ** 2)
