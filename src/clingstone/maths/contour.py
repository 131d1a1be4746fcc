"""Tail probability of a quadratic form by a contour integral, to relative accuracy at any depth.

For Q = Σ λ_i χ²₁ with K(z) = −½ Σ ln(1 − 2zλ_i) and any real c > 0 left of the first singularity,

    P(Q > 0) = (1/π) ∫₀^∞ Re[ exp K(c + iy) / (c + iy) ] dy,

and for c < 0 the same integral is −P(Q < 0) (Rice 1980; Helstrom 1996). It is Imhof's (1961) integral
moved through the saddle point of K(z) − ln z, where nothing cancels. With y = w sinh u the trapezoid
rule converges geometrically in the step and also in the range, for any number of terms.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from clingstone.maths.once import Array

Complex = npt.NDArray[np.complex128]
LogDet = Callable[[Complex], Complex]
COMPLEX_STEP = 1e-20


@dataclass(frozen=True)
class Integral:
    """ln of the tail on the side of c, its relative accuracy, and the nodes used.

    log_bound : K(c), never below ln of the tail.
    """

    log_tail: float
    log_bound: float
    accuracy: float
    nodes: int


def log_pivots(S: Complex) -> Complex:
    """Σ ln of the unpivoted LDL' pivots of (J, p, p) complex symmetric matrices.

    For an accretive S every pivot lies in the right half plane, so that the sum of principal logarithms
    is the continuous branch; the principal logarithm of det S is not. A complex step in S also survives:
    no rotation mixes real and imaginary parts.
    """
    S = S.copy()
    total = np.zeros(S.shape[0], dtype=complex)
    for k in range(S.shape[1]):
        pivot = S[:, k, k]
        total += np.log(pivot)
        if k + 1 < S.shape[1]:
            column = S[:, k + 1 :, k] / pivot[:, None]
            S[:, k + 1 :, k + 1 :] -= column[:, :, None] * S[:, k, k + 1 :][:, None, :]
    return total


def slope(log_det: LogDet, s: float) -> tuple[float, float, float]:
    """K, K' and K'' at a real point: complex step for K', a difference of two for K''."""
    step = 1e-5 * abs(s)
    z = np.array([s - step, s + step]) + 1j * COMPLEX_STEP * abs(s)
    value = -0.5 * log_det(z)
    d = value.imag / (COMPLEX_STEP * abs(s))
    return float(value.real.mean()), float(d.mean()), float((d[1] - d[0]) / (2.0 * step))


def abscissa(
    log_det: LogDet, start: float, edge: float, tolerance: float = 0.02, most: int = 60
) -> tuple[float, float, bool]:
    """The saddle c of K(s) − ln|s| between 0 and ``edge`` (signed), its width, and if it was found.

    K' − 1/s increases from −∞ at 0+ to its value at the edge; a Newton step outside the bracket is
    replaced by its middle. Not found means that the saddle lies beyond the edge.
    """
    sign = 1.0 if edge > 0 else -1.0
    limit = abs(edge)
    low, high = 0.0, limit
    s = min(abs(start), 0.9 * limit) if np.isfinite(limit) else abs(start)
    width = s
    for _ in range(most):
        _, d1, d2 = slope(log_det, sign * s)
        gap = sign * d1 - 1.0 / s
        curve = max(d2, 0.0) + 1.0 / s**2
        width = 1.0 / np.sqrt(curve)
        if abs(gap) * width < tolerance:
            return sign * s, float(width), True
        low, high = (s, high) if gap < 0 else (low, s)
        step = s - gap / curve
        if not low < step < high:
            step = 0.5 * (low + high) if np.isfinite(high) else 4.0 * s
        if np.isfinite(limit) and step > (1.0 - 1e-9) * limit:
            break
        s = step
    return sign * s, float(width), False


def integrate(
    log_det: LogDet, c: float, width: float, tolerance: float = 1e-12, first: float = 0.5
) -> Integral:
    """The tail on the side of c by the trapezoid rule, halving the step until two answers agree.

    The error squares with each halving, so agreement to √tolerance is agreement to the tolerance.
    """
    base = float((-0.5 * log_det(np.array([c + 0j]))).real[0])

    def terms(u: Array) -> tuple[Array, Array]:
        z = c + 1j * width * np.sinh(u)
        value = np.exp(-0.5 * log_det(z) - base) / (z if c > 0 else -z) * (width * np.cosh(u))
        return value.real, np.abs(value)

    total, size, top, nodes = _first_pass(terms, first, tolerance)
    step, previous = first, np.inf
    estimate = step * total
    accuracy = 1.0
    for _ in range(6):
        between: Array = np.arange(0.5 * step, top, step)
        value, modulus = terms(between)
        nodes += len(between)
        total, size, step = total + float(value.sum()), size + float(modulus.sum()), 0.5 * step
        previous, estimate = estimate, step * total
        rounding = 4e-16 * step * size / max(abs(estimate), 1e-300)
        change = abs(estimate - previous) / max(abs(estimate), 1e-300)
        accuracy = max(min(change, change**2 * 10.0) if change < 1e-2 else change, rounding)
        if accuracy <= tolerance or change <= 10.0 * rounding:
            break
    if estimate <= 0.0:
        return Integral(-np.inf, base, 1.0, nodes)
    return Integral(base + float(np.log(estimate / np.pi)), base, accuracy, nodes)


def _first_pass(
    terms: Callable[[Array], tuple[Array, Array]], step: float, tolerance: float
) -> tuple[float, float, float, int]:
    """Sum with the first step, as far as the terms matter: (sum, sum of moduli, where it ended, nodes)."""
    value, modulus = terms(step * np.arange(0.0, 7.0))
    total = 0.5 * float(value[0]) + float(value[1:].sum())
    size = 0.5 * float(modulus[0]) + float(modulus[1:].sum())
    count, largest = 7, float(modulus.max())
    while modulus[-1] > 1e-3 * tolerance * largest and count * step < 300.0:
        value, modulus = terms(step * np.arange(float(count), count + 8.0))
        total, size = total + float(value.sum()), size + float(modulus.sum())
        count += 8
    return total, size, (count - 1) * step, count
