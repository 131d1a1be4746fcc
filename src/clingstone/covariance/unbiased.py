"""Median-unbiased correlation of a first-order process, with an exact interval, in short series.

The residual correlation and restricted likelihood both come out too low in short series. The
Durbin–Watson ratio d has, at each ρ, an exact law under normal errors; ρ is where half of that law lies
below the observed d, and its interval where a tail of the wanted size does (the idea of Andrews 1993,
carried over to the residuals of a regression).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import linalg, special
from scipy.interpolate import PchipInterpolator

from clingstone.design.response import Response
from clingstone.maths.forms import differences
from clingstone.maths.markov import Links
from clingstone.maths.once import Array, kept
from clingstone.maths.ratio import eigen_tails

ROWS = 300  # dense eigenvalues at each ρ: 16 problems of this order
NODES = np.array(
    [-0.97, -0.9, -0.75, -0.55, -0.3, 0.0, 0.25, 0.45, 0.6, 0.72, 0.82, 0.9, 0.95, 0.98, 0.995, 0.9995]
)


@dataclass(frozen=True)
class Unbiased:
    """ρ per step, and both ends of its exact interval; an end of NODES stands for −1 or 1."""

    rho: float
    low: float
    high: float


def unbiased(response: Response, confidence: float) -> Unbiased | None:
    """For one column of y over regular series of at most ROWS rows; None where it does not apply."""
    design = response.design
    series = design.serial
    if series is None or series.tick is None or series.ties or design.n > ROWS or design.m < 3:
        return None
    if design.swept or not design.known or design.root is not None or len(series.pairs(1)[0]) < 3:
        return None
    if float(response.ss[0]) <= 0:
        return None
    return kept(response, ("unbiased", confidence), lambda: _solve(response, confidence))


def _solve(response: Response, confidence: float) -> Unbiased:
    score = scores(response)
    fine = np.linspace(NODES[0], NODES[-1], 20_001)
    curve = np.maximum.accumulate(PchipInterpolator(NODES, score)(fine))

    def at(probability: float) -> float:
        goal = float(special.ndtri(probability))
        if goal <= curve[0]:
            return -1.0
        if goal >= curve[-1]:
            return 1.0
        return float(np.interp(goal, curve, fine))

    tail = (1 - confidence) / 2
    return Unbiased(at(0.5), at(tail), at(1 - tail))


def scores(response: Response) -> Array:
    """Φ⁻¹ of P_ρ(d ≤ observed) at each of NODES; it grows with ρ."""
    design = response.design
    series = design.serial
    assert series is not None
    earlier, later = series.pairs(1)
    form = differences(earlier, later, design.n, "differences")
    e = response.residual[:, 0]
    d = float(e @ form.apply(e) / response.ss[0])
    Z: Array = np.asarray(linalg.qr(design.Q, mode="full")[0][:, design.p :], dtype=float)
    A = Z.T @ form.apply(Z)
    A[np.diag_indices(len(A))] -= d
    links = Links(series.steps)
    out = np.empty(len(NODES))
    for i, rho in enumerate(NODES):
        L = np.linalg.cholesky(Z.T @ links.dense(float(rho)) @ Z)
        tails = eigen_tails(np.linalg.eigvalsh(L.T @ A @ L), [0.0])
        low, high = float(tails.log_lower[0]), float(tails.log_upper[0])
        out[i] = special.ndtri_exp(low) if low < high else -special.ndtri_exp(high)
    return np.clip(out, -30.0, 30.0)
