"""Small-sample inference for many columns of y at once, each at its own covariance parameters.

The same formulas as ``curvature`` (Satterthwaite, observed information by differences) and ``kenward``
(Kenward & Roger 1997, expected information), a column per leading index K.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from clingstone.maths.curvature import STEP
from clingstone.maths.each import Grams
from clingstone.maths.groups import Expected
from clingstone.maths.once import Array

Flags = npt.NDArray[np.bool_]


def fai_cornelius_each(df: Array) -> Array:
    """As ``reference.fai_cornelius`` for each row of df (K, q)."""
    least = df.min(axis=1)
    plain = (np.ptp(df, axis=1) <= 1e-8 * df.max(axis=1)) | (least <= 2)
    safe = np.where(plain[:, None], 4.0, df)
    E = np.sum(safe / (safe - 2), axis=1)
    q = df.shape[1]
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.asarray(np.where(plain, least, 2 * E / (E - q)))


@dataclass(frozen=True, eq=False)
class SlopesEach:
    """As ``curvature.Slopes``: phi (K, p, p), slopes (K, d, p, p), information (K, 1 + d, 1 + d)."""

    phi: Array
    slopes: Array
    information: Array
    largest: float

    @property
    def sound(self) -> Flags:
        """(K,) whether the information is positive definite."""
        diagonal = np.einsum("kii->ki", self.information)
        good = np.all(diagonal > 0, axis=1)
        scale = 1 / np.sqrt(np.where(diagonal > 0, diagonal, 1.0))
        unit = self.information * scale[:, :, None] * scale[:, None, :]
        return np.asarray(good & (np.linalg.eigvalsh(unit)[:, 0] > 1e-8))

    def only(self, these: Flags) -> SlopesEach:
        """The same for some of the columns."""
        return SlopesEach(self.phi[these], self.slopes[these], self.information[these], self.largest)

    def df(self, w: Array) -> Array:
        """(K, k) Satterthwaite df of contrasts w, (p, k) shared or (K, p, k) each its own."""
        w = np.broadcast_to(w, (len(self.phi), *w.shape[-2:]))
        size = np.einsum("kpc,kpq,kqc->kc", w, self.phi, w, optimize=True)
        inner = np.matmul(self.slopes, w[:, None])  # (K, d, p, k)
        g = np.einsum("kpc,kdpc->kdc", w, inner) / size[:, None]
        g = np.concatenate([np.ones((len(g), 1, g.shape[2])), g], axis=1)
        spread = np.einsum("kdc,kdc->kc", g, np.linalg.solve(self.information, g))
        with np.errstate(divide="ignore"):
            found = np.clip(2.0 / spread, 1.0, self.largest)
        return np.asarray(np.where(spread > 0, found, self.largest))

    def joint(self, L: Array) -> tuple[Array, Array]:
        """(scale (K,), df2 (K,)) of the F test of q contrasts L (p, q)."""
        _, vectors = np.linalg.eigh(np.einsum("pa,kpq,qb->kab", L, self.phi, L, optimize=True))
        return np.ones(len(self.phi)), fai_cornelius_each(self.df(np.matmul(L[None], vectors)))


def slopes_each(grams: Callable[[Array], Grams], theta: Array, free: Sequence[int], m: int) -> SlopesEach:
    """Derivatives by central differences over the free coordinates of θ (d, K), the same in all K columns."""
    here = grams(theta)
    _, c, logdet = here.reduced()
    s2 = c / m
    phi = s2[:, None, None] * np.linalg.inv(here.QQ)
    phi = (phi + phi.transpose(0, 2, 1)) / 2
    d, K = len(free), theta.shape[1]
    unit = STEP * np.eye(len(theta))[list(free)]

    def read(shift: Array) -> tuple[Array, Array, Array]:
        found = grams(theta + shift[:, None])
        _, at, log = found.reduced()
        return found.logdet + log, at / s2, found.QQ

    middle = here.logdet + logdet + c / s2
    H = np.zeros((K, 1 + d, 1 + d))
    H[:, 0, 0] = m / 2
    out = np.empty((K, d, *phi.shape[1:]))
    for i in range(d):
        up, down = read(unit[i]), read(-unit[i])
        bend = (up[2] - down[2]) / (2 * STEP * s2[:, None, None])
        out[:, i] = -phi @ bend @ phi
        H[:, 0, i + 1] = H[:, i + 1, 0] = -(up[1] - down[1]) / (4 * STEP)
        H[:, i + 1, i + 1] = (up[0] + up[1] - 2 * middle + down[0] + down[1]) / (2 * STEP**2)
        for j in range(i):
            corners = ((1, 1), (-1, -1), (1, -1), (-1, 1))
            f = [sum(read(a * unit[i] + b * unit[j])[:2], start=np.zeros(K)) for a, b in corners]
            H[:, i + 1, j + 1] = H[:, j + 1, i + 1] = (f[0] + f[1] - f[2] - f[3]) / (8 * STEP**2)
    return SlopesEach(phi, out, H, float(m))


@dataclass(frozen=True, eq=False)
class KenwardEach:
    """As ``kenward.Kenward``, with K columns: phi, adjusted (K, p, p) · P (d, K, p, p) · W (K, d, d)."""

    phi: Array
    adjusted: Array
    P: Array
    W: Array

    @classmethod
    def of(cls, seen: Expected) -> KenwardEach:
        """From the ingredients of K columns. Raises LinAlgError when an information has no inverse."""
        phi, P, Q = seen.Phi, seen.P, seen.Q
        W = np.linalg.inv(seen.information)
        PPhi = P @ phi
        inner = np.zeros_like(phi)
        for i in range(len(P)):
            for j in range(i + 1):
                part = Q[i, j] - PPhi[i] @ P[j]
                part = part if i == j else part + part.transpose(0, 2, 1)
                inner += W[:, i, j, None, None] * part
        adjusted = phi + 2 * phi @ inner @ phi
        return cls(phi, (adjusted + adjusted.transpose(0, 2, 1)) / 2, P, np.asarray(W, dtype=float))

    def df(self, w: Array) -> Array:
        """(K, k) df of contrasts w, (p, k) shared or (K, p, k) each its own."""
        w = np.broadcast_to(w, (len(self.phi), *w.shape[-2:]))
        u = self.phi @ w
        g = np.stack([np.einsum("kpc,kpc->kc", u, P @ u) for P in self.P], axis=1)  # (K, d, k)
        g /= np.einsum("kpc,kpc->kc", w, u)[:, None]
        return np.asarray(2.0 / np.einsum("kic,kij,kjc->kc", g, self.W, g, optimize=True))

    def joint(self, L: Array) -> tuple[Array, Array]:
        """As ``Kenward.joint``: (scale (K,), df2 (K,)) of the F test of contrasts L (p, q)."""
        q = L.shape[1]
        inside = np.einsum("pa,kpq,qb->kab", L, self.phi, L, optimize=True)
        theta = L @ np.linalg.solve(inside, np.broadcast_to(L.T, (len(inside), *L.T.shape)))
        T = np.stack([theta @ self.phi @ P @ self.phi for P in self.P], axis=1)  # (K, d, p, p)
        trace = np.einsum("kiaa->ki", T)
        A1 = np.einsum("ki,kij,kj->k", trace, self.W, trace)
        A2 = np.einsum("kij,kiab,kjba->k", self.W, T, T, optimize=True)
        with np.errstate(divide="ignore", invalid="ignore"):
            B = (A1 + 6 * A2) / (2 * q)
            g = ((q + 1) * A1 - (q + 4) * A2) / ((q + 2) * A2)
            d = 3 * q + 2 * (1 - g)
            c1, c2, c3 = g / d, (q - g) / d, (q + 2 - g) / d
            mean = 1 / (1 - A2 / q)
            variance = 2 / q * (1 + c1 * B) / ((1 - c2 * B) ** 2 * (1 - c3 * B))
            df2 = 4 + (q + 2) / (q * variance / (2 * mean**2) - 1)
            exists = (q > A2) & (c2 * B < 1) & (c3 * B < 1) & (df2 > 2)
            scale = np.where(exists, df2 / (mean * (df2 - 2)), 1.0)
        _, vectors = np.linalg.eigh(inside)
        apart = fai_cornelius_each(self.df(np.matmul(L[None], vectors)))
        return scale, np.where(exists, df2, apart)
