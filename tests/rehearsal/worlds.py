"""Small designs with a fitted y, for the tests of the rehearsal."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from clingstone.covariance.fits import Fits
from clingstone.rehearsal.study import Study, study
from clingstone.rehearsal.truths import Truth
from remedies.cases import ar1, design, fits


def trial(G: int = 12, m: int = 10, icc: float = 0.25, seed: int = 1, weights: bool = False) -> Fits:
    """Clinics of unequal size, an arm by clinic, a covariate by row."""
    rng = np.random.default_rng(seed)
    clinic = np.repeat(np.arange(G), rng.integers(m - 3, m + 4, G))
    n = len(clinic)
    X = np.column_stack([np.ones(n), (clinic % 2).astype(float), rng.normal(size=n)])
    root = np.sqrt(rng.uniform(0.5, 2.0, n)) if weights else None
    y = np.sqrt(icc) * rng.normal(size=G)[clinic] + np.sqrt(1 - icc) * rng.normal(size=n) + X[:, 2]
    return fits(design(X, ["constant", "arm", "age"], group=clinic, root=root), y)


def stream(n: int = 60, rho: float = 0.5, seed: int = 2) -> Fits:
    """One series with a trend and a covariate."""
    rng = np.random.default_rng(seed)
    X = np.column_stack([np.ones(n), np.arange(n) / n, rng.normal(size=n)])
    return fits(design(X, ["constant", "trend", "rain"], tick=np.arange(n)), ar1(n, rho, 1, rng)[:, 0])


def wells(S: int = 40, seed: int = 3) -> Fits:
    """A field over places and a smooth covariate."""
    rng = np.random.default_rng(seed)
    xy = rng.uniform(size=(S, 2))
    D = np.sqrt(((xy[:, None] - xy[None]) ** 2).sum(axis=2))
    L = np.linalg.cholesky(np.exp(-D / 0.2) + 0.3 * np.eye(S))
    X = np.column_stack([np.ones(S), xy[:, 0]])
    return fits(design(X, ["constant", "east"], xy=xy), L @ rng.normal(size=S))


def truth_of(
    f: Fits, node: Sequence[str], different: str = "as fitted", theta: Sequence[float] | None = None
) -> Truth:
    """The fitted model of a node as a truth, or the same at another θ."""
    model = f[frozenset(node)]
    at = tuple(float(v) for v in model.theta[:, 0]) if theta is None else tuple(theta)
    return Truth("estimate", "as fitted", model.node, at, float(model.sigma2[0]), different)  # type: ignore[arg-type]


def study_of(f: Fits, truths: Sequence[Truth], *wanted: tuple[str, str]) -> Study:
    found, left = study(f, truths, wanted)
    assert not left
    return found
