"""Tail probability of a quadratic form by a contour integral, to relative accuracy at any depth.

For Q = Σ λ_i χ²₁ with K(z) = −½ Σ ln(1 − 2zλ_i) and any real c > 0 left of the first singularity,

    P(Q > 0) = (1/π) ∫₀^∞ Re[ exp K(c + iy) / (c + iy) ] dy,

and for c < 0 the same integral is −P(Q < 0) (Rice 1980; Helstrom 1996). It is Imhof's (1961) integral
moved through the saddle point of f(z) = K(z) − ln|z|, where nothing cancels.

All singularities are real, so the path may bend on its way up. Where few eigenvalues dominate, the
integrand on a straight line turns quickly and hardly falls; on the hyperbola

    z(u) = c + w [ sin b (cosh u − 1) + i cos b sinh u ]

that has the curvature of the path of steepest descent at c, it falls as fast as it turns. The trapezoid
rule in u converges geometrically in the step and in the range, for any number of terms.
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
DEEP = float(np.log(1e-30))
STEEPEST = 0.6  # sine of the largest bend


@dataclass(frozen=True)
class Saddle:
    """Where the path crosses the real axis: c, its width w, the angle b by which it bends.

    found : False where the saddle lies beyond the edge, c then being as near as could be.
    """

    c: float
    width: float
    bend: float
    found: bool


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
    """Σ ln of the unpivoted LDL' pivots of (J, p, p) complex symmetric matrices S = Q'D(z)⁻¹Q.

    For Im z > 0 the field of values of D(z) = I − 2zB, B real, lies in an open half plane that leaves out
    the negative real axis; so do those of D⁻¹, of S, and of every pivot (a Schur complement). The sum of
    principal logarithms is therefore the continuous branch; the principal logarithm of det S is not. A
    complex step survives too: no rotation mixes real and imaginary parts.
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


def slopes(log_det: LogDet, s: float) -> tuple[float, float, float]:
    """The first three derivatives of K at a real point: complex steps, then differences of three."""
    step = 1e-4 * abs(s)
    z = np.array([s - step, s, s + step]) + 1j * COMPLEX_STEP * abs(s)
    d = -0.5 * log_det(z).imag / (COMPLEX_STEP * abs(s))
    return float(d[1]), float((d[2] - d[0]) / (2.0 * step)), float((d[2] - 2.0 * d[1] + d[0]) / step**2)


def saddle(log_det: LogDet, start: float, edge: float, tolerance: float = 0.02, most: int = 60) -> Saddle:
    """The saddle of K(s) − ln|s| between 0 and ``edge`` (signed), to ``tolerance`` of its width.

    The derivative of this increases from −∞ at 0+ to its value at the edge; a Newton step outside the
    bracket is replaced by its middle.
    """
    sign = 1.0 if edge > 0 else -1.0
    limit = abs(edge)
    low, high = 0.0, limit
    s = min(abs(start), 0.9 * limit) if np.isfinite(limit) else abs(start)
    width, bend, found = s, 0.0, False
    for _ in range(most):
        first, second, third = slopes(log_det, sign * s)
        gap = sign * first - 1.0 / s
        curve = max(second, 0.0) + 1.0 / s**2
        width, bend = float(1.0 / np.sqrt(curve)), _bend(curve, third, sign * s)
        found = abs(gap) * width < tolerance
        if found:
            break
        low, high = (s, high) if gap < 0 else (low, s)
        step = s - gap / curve
        if not low < step < high:
            step = 0.5 * (low + high) if np.isfinite(high) else 4.0 * s
        if np.isfinite(limit) and step > (1.0 - 1e-9) * limit:
            break
        s = step
    return Saddle(sign * s, width, bend, found)


def _bend(curve: float, third: float, c: float) -> float:
    """The angle b that gives the hyperbola the curvature of steepest descent: sin b/cos² b = w f‴/(3f″).

    The part −2/c³ of f‴ that the pole adds counts only where it bends to the same side as K does, so that
    near the pole a long tail of K still decides. The bend stays below 37°: at 45° a normal law, falling as
    cos 2b, would no longer fall.
    """
    whole = third - 2.0 / c**3
    chosen = whole if whole * third > 0 and abs(whole) > abs(third) else third
    g = chosen / (3.0 * curve**1.5)
    if abs(g) < 1e-8:
        return 0.0
    sine = (np.sqrt(1.0 + 4.0 * g**2) - 1.0) / (2.0 * g)
    return float(np.arcsin(np.clip(sine, -STEEPEST, STEEPEST)))


def integrate(
    log_det: LogDet, at: Saddle, tolerance: float = 1e-12, first: float = 0.5, deep: float | None = None
) -> Integral:
    """The tail on the side of c by the trapezoid rule, halving the step until two answers agree.

    deep : the tolerance of a tail below 10⁻³⁰, by default the same.

    The error squares with each halving, so agreement to √tolerance is agreement to the tolerance. Where the
    path leaves what numbers can hold, the integral is not known (accuracy 1); the bound still is.
    """
    sine, cosine = np.sin(at.bend), np.cos(at.bend)
    base = float((-0.5 * log_det(np.array([at.c + 0j]))).real[0])

    if deep is not None and base < DEEP:
        tolerance = deep
    outside: list[bool] = []

    def terms(u: Array) -> tuple[Array, Array]:
        z = at.c + at.width * (sine * (np.cosh(u) - 1.0) + 1j * cosine * np.sinh(u))
        along = at.width * (sine * np.sinh(u) + 1j * cosine * np.cosh(u))
        with np.errstate(over="ignore", invalid="ignore"):
            value = np.exp(-0.5 * log_det(z) - base) * along / (z if at.c > 0 else -z)
        held = np.isfinite(value)
        outside.append(not held.all())
        value = np.where(held, value, 0.0)
        return value.imag, np.abs(value)

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
    if estimate <= 0.0 or any(outside):
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
