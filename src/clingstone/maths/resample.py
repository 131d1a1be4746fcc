"""Resampled tests of one coefficient θ as functions of the value that is tested, and their inversion.

Each resample r gives a studentised statistic whose square is a ratio of two quadratics in D = θ̂ − θ₀,

    t*²(D) = (n₀ + n₁D)²/(q₀ + q₁D + q₂D²),   to be compared with   t²(D) = D²/v,

so that after one pass over the clusters every hypothesised value costs a few operations per resample.

The wild bootstrap is the restricted one of Cameron, Gelbach & Miller (2008), on the level of cluster
scores as in Roodman, MacKinnon, Nielsen & Webb (2019); six-point weights are Webb's (2023). Letters: per
cluster M_g = Q_g'Q_g (p, p) and s_g = Q_g'e_g (p,), w the contrast in the basis, h_g = M_gw. Clusters
G, resamples d, columns of y C.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass

import numpy as np

from clingstone.maths.once import Array

WEBB = np.array([-np.sqrt(1.5), -1.0, -np.sqrt(0.5), np.sqrt(0.5), 1.0, np.sqrt(1.5)])
TIE = 1e-9  # a resample this near to the observed statistic counts as equal to it
GONE = 1e-11  # a variance below this part of its terms is no variance
ROUNDING = 1e-12
FAR = 1e8  # standard errors beyond which an interval has no end


@dataclass(frozen=True, eq=False)
class Curves:
    """d resampled statistics of one coefficient for C columns of y, as functions of D.

    n0, n1, q0, q1, q2 : (d, C) or (d, 1). size : (d, C) or (d, 1), what q0 was left from. v : (C,) variance
    of the observed statistic. exact : the resamples are all there are, the observed one among them.
    """

    n0: Array
    n1: Array
    q0: Array
    q1: Array
    q2: Array
    size: Array
    v: Array
    exact: bool

    @classmethod
    def joined(cls, blocks: Sequence[Curves]) -> Curves:
        """All resamples of several blocks."""
        if len(blocks) == 1:
            return blocks[0]
        n0, n1, q0, q1, q2, size = (
            np.concatenate([b._rows(name) for b in blocks]) for name in ("n0", "n1", "q0", "q1", "q2", "size")
        )
        return cls(n0, n1, q0, q1, q2, size, blocks[0].v, blocks[0].exact)

    def _rows(self, name: str) -> Array:
        """A part with one row per resample."""
        values = getattr(self, name)
        return np.broadcast_to(values, (len(self.n0), values.shape[1]))

    def p(self, D: Array) -> Array:
        """(C,) two-sided p of θ₀ = θ̂ − D: the part of resamples with t*² ≥ t². NaN where v is zero.

        Drawn resamples count the observed one as one more, (1 + #)/(1 + d). Resamples without a
        variance are left out.
        """
        D = np.asarray(D, dtype=float)
        below = self.q0 + D * (self.q1 + D * self.q2)
        kept = below > GONE * (self.size + np.abs(D * self.q1) + D**2 * np.abs(self.q2))
        above = (self.n0 + self.n1 * D) ** 2 * self.v >= D**2 * below * (1 - TIE)
        extra = 0 if self.exact else 1
        p = (np.sum(above & kept, axis=0) + extra) / np.maximum(np.sum(kept, axis=0) + extra, 1)
        return np.where((self.v > 0) & kept.any(axis=0), p, np.nan)

    @property
    def left_out(self) -> int:
        """Resamples of the first column without a variance at D = 0."""
        return int(np.sum(np.broadcast_to(self.q0 <= GONE * self.size, self.q0.shape)[:, 0]))

    def ends(self, alpha: float) -> tuple[Array, Array]:
        """(C,) the distances below and above θ̂ at which p falls to α, ∞ where it never does."""
        return self._end(alpha, 1.0), self._end(alpha, -1.0)

    def _end(self, alpha: float, side: float) -> Array:
        se = np.sqrt(self.v)
        inside, outside = np.zeros_like(se), 2.0 * se
        open_ = self.p(side * outside) > alpha
        while np.any(open_):
            inside = np.where(open_, outside, inside)
            outside = np.where(open_, 1.5 * outside, outside)
            open_ &= (self.p(side * outside) > alpha) & (outside < FAR * se)
        for _ in range(60):
            if np.all(outside - inside <= 1e-6 * se):
                break
            middle = (inside + outside) / 2
            stays = self.p(side * middle) > alpha
            inside, outside = np.where(stays, middle, inside), np.where(stays, outside, middle)
        end = np.where(outside >= FAR * se, np.inf, (inside + outside) / 2)
        return np.where(np.isfinite(self.p(0 * se)), end, np.nan)


def settled(q1: Array, q2: Array, s0: Array, s2: Array) -> tuple[Array, Array]:
    """q₁ and q₂ without what is left of them by rounding, which D² would blow up.

    s0, s2 : the sums that q₀ and q₂ are differences from; q₁ is one from 2√(s₀s₂) at most.
    """
    q1 = np.where(np.abs(q1) <= ROUNDING * np.sqrt(s0 * s2), 0.0, q1)
    return q1, np.where(np.abs(q2) <= ROUNDING * s2, 0.0, q2)


# ---- weights --------------------------------------------------------------------------


def every_sign(G: int) -> Array:
    """(2^(G−1), G) all distinct sign patterns: the first sign is +, for t*² is the same under −v."""
    bits = (np.arange(2 ** (G - 1))[:, None] >> np.arange(G - 1)) & 1
    return np.hstack([np.ones((len(bits), 1)), 1.0 - 2.0 * bits])


def random_signs(rng: np.random.Generator, d: int, G: int) -> Array:
    """(d, G) independent signs."""
    signs = rng.integers(0, 2, (d, G), dtype=np.int8)
    signs *= 2
    signs -= 1
    return signs.astype(float)


def random_webb(rng: np.random.Generator, d: int, G: int) -> Array:
    """(d, G) independent six-point weights ±√½, ±1, ±√1½."""
    return np.asarray(WEBB[rng.integers(0, 6, (d, G))])


# ---- wild cluster bootstrap --------------------------------------------------------------


def wild(V: Array, V2: Array | None, M: Array, S: Array, w: Array, A0: Array, exact: bool) -> Curves:
    """Curves of the restricted wild cluster bootstrap of w'coef.

    V (d, G) weights, V2 their squares or None when all are one, M (G, p, p), S (G, p, C) unrestricted
    scores, w (p,), A0 (d, p, C) from ``wild_sums``. With θ = θ₀ imposed the scores are s_g + D h_g/w'w; a
    resample multiplies them by v_g, its coefficient is w'A with A = Σ v_g s_g, and its residual scores
    are v_g w's_g − h_g'A.
    """
    G, p, C = S.shape
    d = len(V)
    H = M @ w
    size = float(w @ w)
    z0, z1 = np.einsum("gpc,p->gc", S, w), H @ w / size
    every = V @ np.hstack([H, H * z1[:, None], (H[:, :, None] * z0[:, None, :]).reshape(G, p * C)])
    A1, C1, C0 = every[:, :p] / size, every[:, p : 2 * p], every[:, 2 * p :].reshape(d, p, C)
    K = H.T @ H
    KA0, KA1 = np.einsum("pq,dqc->dpc", K, A0), A1 @ K
    if V2 is None:
        s0, s1, s2 = np.sum(z0**2, axis=0)[None], (z1 @ z0)[None], np.array([[z1 @ z1]])
    else:
        s0, s1, s2 = V2 @ z0**2, V2 @ (z1[:, None] * z0), (V2 @ z1**2)[:, None]
    q0 = s0 + np.einsum("dpc,dpc->dc", KA0 - 2 * C0, A0)
    q1 = 2 * s1 + 2 * np.einsum("dpc,dp->dc", KA0 - C0, A1) - 2 * np.einsum("dp,dpc->dc", C1, A0)
    q2 = s2 + np.sum((KA1 - 2 * C1) * A1, axis=1)[:, None]
    n0, n1 = np.einsum("dpc,p->dc", A0, w), (A1 @ w)[:, None]
    q1, q2 = settled(q1, q2, s0, s2)
    return Curves(n0, n1, q0, q1, q2, np.broadcast_to(s0, q0.shape), np.sum(z0**2, axis=0), exact)


def wild_sums(V: Array, S: Array) -> Array:
    """(d, p, C) Σ_g v_g s_g."""
    G, p, C = S.shape
    return (V @ S.reshape(G, p * C)).reshape(len(V), p, C)


def wild_joint(
    weights: Iterable[Array], M: Array, s: Array, W: Array, theta: Array, exact: bool
) -> tuple[float, float]:
    """Wald statistic and wild bootstrap p of W'coef = 0 for one column of y, all q restrictions imposed.

    weights : blocks (d, G). s (G, p) unrestricted scores, W (p, q), theta (q,) the estimates. NaN where
    the covariance of the q contrasts is not of full rank.
    """
    restricted = s + M @ (W @ np.linalg.solve(W.T @ W, theta))
    H = M @ W  # (G, p, q)
    q = W.shape[1]
    K = np.einsum("gpi,grj->ijpr", H, H)
    observed = _wald(theta[None], ((s @ W).T @ (s @ W))[None])[0]
    found = np.concatenate([_wald(*_resampled(V, restricted, W, H, K, q)) for V in weights])
    kept = np.isfinite(found)
    if not np.isfinite(observed) or not kept.any():
        return float("nan"), float("nan")
    extra = 0 if exact else 1
    beyond = np.sum(found[kept] >= observed * (1 - TIE))
    return float(observed), float((beyond + extra) / (np.sum(kept) + extra))


def _resampled(V: Array, s: Array, W: Array, H: Array, K: Array, q: int) -> tuple[Array, Array]:
    """(d, q) coefficients and (d, q, q) covariances of resamples of the restricted scores s."""
    Z, A = s @ W, V @ s
    squares = (V**2 @ (Z[:, :, None] * Z[:, None, :]).reshape(len(Z), q * q)).reshape(-1, q, q)
    cross = np.empty_like(squares)
    for i in range(q):
        for j in range(q):
            cross[:, i, j] = np.einsum("dp,dp->d", V @ (Z[:, i : i + 1] * H[:, :, j]), A)
    inner = np.einsum("dp,ijpr,dr->dij", A, K, A, optimize=True)
    return A @ W, squares - cross - np.swapaxes(cross, 1, 2) + inner


def _wald(theta: Array, V: Array) -> Array:
    """(d,) θ'V⁻¹θ; NaN where V is not of full rank."""
    scale = np.sqrt(np.maximum(np.einsum("dii->di", V), 1e-300))
    values, vectors = np.linalg.eigh(V / (scale[:, :, None] * scale[:, None, :]))
    z = np.einsum("dij,di->dj", vectors, theta / scale)
    full = values[:, 0] > 1e-10 * values[:, -1]
    return np.where(full, np.sum(z**2 / np.where(full[:, None], values, 1.0), axis=1), np.nan)
