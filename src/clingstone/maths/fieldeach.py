"""Places with levels above their rows, many columns of y at once: the criterion and two derivatives.

Rows are independent within a place, so all that a place tells is its c and its means x̄ = T/c of [Q, e]:

    [Q, e]'V⁻¹[Q, e] = W + x̄'M⁻¹x̄,    ln|V| = Σ ln c + ln|M|,    M = D⁻¹ + Σ λ_jF_j + λR(φ),    D = diag(c),

W what varies within places, F_j = I for an intercept of the places themselves, the indicator of "same cell"
for a level that holds whole places. Natural parameters η are (λ_j …, ln φ, λ): a variance of zero is an
ordinary point, with a slope. With Mᵢ = ∂M/∂ηᵢ, Z = M⁻¹x̄ and Nᵢ = M⁻¹Mᵢ,

    ∂ᵢ ln|M| = tr Nᵢ,    ∂ᵢ∂ⱼ ln|M| = tr M⁻¹Mᵢⱼ − tr NᵢNⱼ,
    ∂ᵢ Gram = −Z'MᵢZ,    ∂ᵢ∂ⱼ Gram = Z'MᵢNⱼZ + Z'MⱼNᵢZ − Z'MᵢⱼZ.
"""

from __future__ import annotations

import dataclasses
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from scipy.linalg import lapack

from clingstone.maths import reml
from clingstone.maths.basis import Gram
from clingstone.maths.each import Grams, Places
from clingstone.maths.groups import Load
from clingstone.maths.once import Array, once

BLOCK = 30_000  # doubles of one array of places × places × columns: what a cache holds

# R, and with it ∂R/∂ln φ and ∂²R/∂(ln φ)², at ranges φ (K,): (K, S, S) each.
Kernels = Callable[[Array, bool], tuple[Array, ...]]


@dataclass(frozen=True, eq=False)
class Bent:
    """−2ℓ_R of K columns (σ² profiled out), and what it is made of, with first and second derivatives in η.

    value, c (K,) · slope (K, d) · bend (K, d, d) of the criterion; first, second : of ln|V| + ln|Q'V⁻¹Q|
    and of c, (K, 2, d) and (K, 2, d, d). QQ (K, p, p), moved (K, d, p, p) : Q'V⁻¹Q and its derivatives.
    """

    value: Array
    c: Array
    slope: Array
    bend: Array
    first: Array
    second: Array
    QQ: Array
    moved: Array

    @classmethod
    def of(cls, grams: Grams, dG: Array, ddG: Array, first: Array, second: Array, m: int) -> Bent:
        """From Grams of [Q, e], their derivatives (K, d, p + 1, p + 1), (K, d, d, …) and those of ln|V|."""
        delta, c, logdet = grams.reduced()
        p = delta.shape[1]
        v = np.concatenate([-delta, np.ones((len(c), 1))], axis=1)
        inverse = np.linalg.inv(grams.QQ)
        moved = np.einsum("kiab,kb->kia", dG, v)
        dc = np.einsum("kia,ka->ki", moved, v)
        across = moved[..., :p]
        ddc = np.einsum("kijab,ka,kb->kij", ddG, v, v, optimize=True)
        ddc -= 2 * across @ inverse @ across.transpose(0, 2, 1)
        inner = inverse[:, None] @ dG[..., :p, :p]
        dl = np.einsum("kiaa->ki", inner)
        ddl = np.einsum("kab,kijba->kij", inverse, ddG[..., :p, :p])
        ddl -= np.einsum("kiab,kjba->kij", inner, inner)
        first, second = np.stack([first + dl, dc], axis=1), np.stack([second + ddl, ddc], axis=1)
        scale = (m / c)[:, None]
        bend = second[:, 0] + scale[..., None] * (ddc - dc[:, :, None] * dc[:, None, :] / c[:, None, None])
        value = grams.logdet + logdet + reml.profiled(c, m)
        return cls(value, c, first[:, 0] + scale * dc, bend, first, second, grams.QQ, dG[..., :p, :p])


@dataclass(frozen=True, eq=False)
class Fields:
    """The criterion over B columns of y at η (K, d).

    base : the Gram at V = I. load : of the places, c (S,). levels : F_j, None for I. kernels : of the field.
    m : residual df.
    """

    base: Gram
    load: Load
    levels: tuple[Array | None, ...]
    kernels: Kernels
    m: int

    @property
    def size(self) -> int:
        """Columns that one evaluation takes at a time."""
        return max(1, BLOCK // len(self.load.c) ** 2)

    def grams(self, eta: Array, columns: Places) -> Grams:
        """Grams of columns (K,) of y, each at its own η."""
        c, L = self.load.c, len(self.levels)
        rest, means = self._within, self._means
        K, p = len(columns), self.base.QQ.shape[0]
        G, logdet = np.empty((K, p + 1, p + 1)), np.full(K, float(np.log(c).sum()))
        for start in range(0, K, self.size):
            these = slice(start, start + self.size)
            own = columns[these]
            M = self._M(eta[these], *self.kernels(np.exp(eta[these, L]), False))
            for k, b in enumerate(own.tolist()):
                factor, info = lapack.dpotrf(M[k].T, lower=1, clean=0, overwrite_a=1)
                if info:
                    raise np.linalg.LinAlgError("the covariance of the places is not positive definite")
                H = reml.forward(factor, means[b])
                G[start + k] = H.T @ H
                logdet[start + k] += 2 * np.log(np.diag(factor)).sum()
        G += rest[columns]
        return _grams(G, logdet)

    def bent(self, eta: Array, columns: Places) -> Bent:
        """The criterion of columns (K,) of y, each at its own η, with derivatives."""
        parts = [
            self._bent(eta[i : i + self.size], columns[i : i + self.size])
            for i in range(0, max(1, len(columns)), self.size)
        ]
        names = [own.name for own in dataclasses.fields(Bent)]
        return Bent(**{name: np.concatenate([getattr(part, name) for part in parts]) for name in names})

    def _bent(self, eta: Array, columns: Places) -> Bent:
        L, d = len(self.levels), eta.shape[1]
        R, dR, ddR = self.kernels(np.exp(eta[:, L]), True)
        size = eta[:, -1][:, None, None]
        M = self._M(eta, R)
        inverse, logdet = _inverse(M)
        X = self._means[columns]
        Z = inverse @ X
        moves: list[Array | None] = [*self.levels, size * dR, R]
        N = [inverse if F is None else inverse @ F for F in moves]
        A = [Z if F is None else F @ Z for F in moves]
        NZ = [n @ Z for n in N]
        K, q = len(columns), X.shape[2]
        dG, ddG = np.empty((K, d, q, q)), np.empty((K, d, d, q, q))
        first, second = np.empty((K, d)), np.empty((K, d, d))
        Zt = Z.transpose(0, 2, 1)
        for i in range(d):
            dG[:, i] = -Zt @ A[i]
            first[:, i] = np.einsum("kss->k", N[i])
            for j in range(i + 1):
                both = A[i].transpose(0, 2, 1) @ NZ[j]
                ddG[:, i, j] = both + both.transpose(0, 2, 1)
                second[:, i, j] = -np.einsum("kst,kts->k", N[i], N[j])
        # Only the range bends M: ∂²M/∂(ln φ)² and ∂²M/∂ln φ∂λ.
        for i, j, F in ((L, L, size * ddR), (L + 1, L, dR)):
            ddG[:, i, j] -= Zt @ (F @ Z)
            second[:, i, j] += np.einsum("kst,kst->k", inverse, F)
        for i in range(d):
            for j in range(i):
                ddG[:, j, i], second[:, j, i] = ddG[:, i, j], second[:, i, j]
        G = X.transpose(0, 2, 1) @ Z + self._within[columns]
        grams = _grams(G, logdet + float(np.log(self.load.c).sum()))
        return Bent.of(grams, dG, ddG, first, second, self.m)

    def _M(self, eta: Array, R: Array) -> Array:
        """(K, S, S)."""
        M = eta[:, -1][:, None, None] * R
        diagonal = np.broadcast_to(1 / self.load.c, (len(eta), len(self.load.c)))
        for ratio, F in zip(eta.T, self.levels, strict=False):
            if F is None:
                diagonal = diagonal + ratio[:, None]
            else:
                M += ratio[:, None, None] * F
        np.einsum("kss->ks", M)[:] += diagonal
        return np.asarray(M)

    @property
    @once
    def _means(self) -> Array:
        """(B, S, p + 1) means of [Q, e] by place, for each column of y."""
        c, TQ, TE = self.load.c[:, None], self.load.TQ, self.load.TE
        own = np.broadcast_to(TQ / c, (TE.shape[1], *TQ.shape))
        return np.concatenate([own, (TE / c).T[..., None]], axis=2)

    @property
    @once
    def _within(self) -> Array:
        """(B, p + 1, p + 1) W."""
        means, p = self._means, self.base.QQ.shape[0]
        G = -(means.transpose(0, 2, 1) * self.load.c) @ means
        G[:, :p, :p] += self.base.QQ
        G[:, :p, p] += self.base.QE.T
        G[:, p, :p] += self.base.QE.T
        G[:, p, p] += self.base.EE
        return np.asarray(G)


def _grams(G: Array, logdet: Array) -> Grams:
    """From whole Gram matrices (K, p + 1, p + 1)."""
    return Grams(G[:, :-1, :-1], G[:, :-1, -1], G[:, -1, -1], logdet)


def _inverse(M: Array) -> tuple[Array, Array]:
    """M⁻¹ (K, S, S), in the place of M, and ln|M| (K,)."""
    logdet = np.empty(len(M))
    for k, one in enumerate(M):
        factor, info = lapack.dpotrf(one.T, lower=1, clean=1, overwrite_a=1)
        if info:
            raise np.linalg.LinAlgError("the covariance of the places is not positive definite")
        logdet[k] = 2 * np.log(np.diag(factor)).sum()
        inverse, _ = lapack.dtrtri(factor, lower=1)
        np.matmul(inverse.T, inverse, out=one)
    return M, logdet
