"""Could a dependence of a given size matter? The standard-error factor of the coefficients in focus."""

from __future__ import annotations

from typing import Any

import numpy as np
from scipy import sparse
from scipy.sparse.linalg import splu

from clingstone.design.design import Design
from clingstone.evidence.serial import series_of
from clingstone.evidence.spatial import moran_form, neighbours_of, site_design
from clingstone.maths.markov import Links, at_rho
from clingstone.maths.once import Array, kept, once

# A correlation is scanned on this grid and the factor interpolated: it is smooth and monotone.
GRID = np.array([0.0, 0.025, 0.05, 0.1, 0.15, 0.2, 0.3, 0.4, 0.5, 0.6, 0.7, 0.8, 0.9, 0.95])
# Lags are added until ρᵏ is below this; more lags than this never enter.
SMALLEST, MOST_LAGS = 1e-3, 200
SOLVED_SITES = 5000


def focus_directions(design: Design) -> Array:
    """(n, k) a = Qw, one per coefficient in focus (else per coefficient but the constant, else all).

    Var(c'β̂) = a'Va for any covariance V of the rows.
    """
    chosen = [j for t in design.terms if t.focus for j in t.columns]
    if not chosen:
        chosen = [j for t in design.terms if t.kind != "constant" for j in t.columns]
    if not chosen:
        chosen = list(range(design.p))
    weights = np.eye(design.p)[chosen]
    extra = [c.weights for c in design.contrasts]
    if extra:
        weights = np.vstack([weights, np.array(extra)])
    a = design.Q @ design.basis.contrast(weights)
    return np.asarray(a / np.linalg.norm(a, axis=0))


@once
def group_factors(design: Design, key: str) -> Array:
    """(len(GRID),) largest standard-error factor at each intraclass correlation (Moulton 1986).

    1 + ρ(a'ZZ'a − 1) for a of unit length, ZZ' scaled to a mean diagonal of 1 when rows carry weights.
    """
    part = design.partitions[key]
    a = focus_directions(design)
    root = np.ones(design.n) if design.root is None else design.root
    spread = np.sum(part.sums(a * root[:, None]) ** 2, axis=0) / np.mean(root**2)
    return _largest(1.0 + GRID[:, None] * (spread[None, :] - 1.0))


@once
def serial_factors(design: Design) -> Array:
    """(len(GRID),) largest factor at each correlation ρ per base step, a first-order process in time."""
    series, a = series_of(design), focus_directions(design)
    sums = Links(series.steps).lag_sums(a, a)
    if sums is not None:
        return _largest(np.einsum("kii->ki", at_rho(sums, GRID)))
    out = np.ones((len(GRID), a.shape[1]))
    codes = series.part.codes
    place = series.elapsed / series.step
    for ahead in range(1, min(MOST_LAGS, design.n - 1) + 1):
        same = codes[ahead:] == codes[:-ahead]
        if not same.any():
            break
        apart = (place[ahead:] - place[:-ahead])[same]
        product = (a[ahead:] * a[:-ahead])[same]
        live = GRID ** float(apart.min()) > SMALLEST
        if not live.any():
            break
        out[live] += 2.0 * (GRID[live, None] ** apart[None, :]) @ product
    return _largest(out)


def spatial_factors(design: Design, key: str, rng: np.random.Generator) -> Array:
    """(len(GRID),) largest factor at each λ of V ∝ (I − λW)⁻¹(I − λW')⁻¹ over the sites.

    V is scaled to a mean variance of 1, that mean from 30 random signs above 400 sites. Above 5,000
    sites the worst case √((1 + λ)/(1 − λ)) stands in for it.
    """
    small = site_design(design)
    if small.n > SOLVED_SITES:
        return np.asarray(np.sqrt((1 + GRID) / (1 - GRID)))
    a, W = focus_directions(small), neighbours_of(design, key).W
    form = moran_form(small, key)
    reach = max(abs(form.low), abs(form.high), 1.0)  # keeps I − λW/reach invertible
    probes = np.eye(small.n) if small.n <= 400 else np.where(rng.random((small.n, 30)) < 0.5, -1.0, 1.0)
    eye = sparse.eye_array(small.n)

    def solver(lam: float) -> Any:
        return splu(sparse.csc_array(eye - (lam / reach) * W.T))

    def means() -> Array:
        return np.array([np.sum(solver(lam).solve(probes) ** 2) / np.sum(probes**2) for lam in GRID])

    # The mean is that of the neighbours alone, whatever the columns of the design.
    mean = kept(neighbours_of(design, key), ("mean variance",), means)
    out = np.stack([np.sum(solver(lam).solve(a) ** 2, axis=0) for lam in GRID])
    return _largest(out / mean[:, None])


def _largest(squared: Array) -> Array:
    return np.asarray(np.sqrt(np.maximum(squared.max(axis=1), 0.0)))


def factor_at(factors: Array, value: Array) -> Array:
    """(B,) the factor at correlations in 0 … 0.95, values outside taken to the nearest end.

    The largest factor up to the value counts, because a factor need not grow with the correlation.
    """
    return np.asarray(np.interp(value, GRID, np.maximum.accumulate(factors)))
