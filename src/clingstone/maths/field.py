"""Places over independent rows: −2 log-likelihood in (ln φ, ln λ) with its gradient and average information.

With B = I + D^½KD^½ = LL', K = λR(φ), D = diag(c), T̃ = D^{−½}[TQ, TE] and Z = B⁻¹T̃, the Gram of [Q, e]
moves with a parameter by dG = −Z'(dB)Z, and ln|V| by tr(B⁻¹dB) (Harville 1977). For ln λ, dB = B − I, so
nothing more than tr B⁻¹ is needed; for ln φ, dB = D^½(dK)D^½ against the whole of B⁻¹. The average
information y'P(dV)P(dV)Py/σ² (Gilmour, Thompson & Cullis 1995) takes one more solution.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from scipy.linalg import lapack

from clingstone.maths import matern, reml
from clingstone.maths.basis import Gram
from clingstone.maths.groups import Load
from clingstone.maths.once import Array, once

BLOCK = 128  # columns of a triangle that are read at once


class Field:
    """The criterion at any θ = (ln φ, ln λ), for one column of y.

    base, load : the Gram at V = I, and the places' c (S,) and [TQ, TE] (S, p + 1); see ``maths.groups``.
    K, slope : θ → K (S, S) and its derivative in ln φ; both are overwritten.
    m : residual df, or n with ``restricted=False`` (maximum likelihood).

    The factor of the latest θ is kept: a slope asked for where the criterion was just read costs an
    inverse, twice a factor's work.
    """

    def __init__(
        self,
        base: Gram,
        load: Load,
        K: Callable[[Array], Array],
        slope: Callable[[Array], Array],
        m: int,
        restricted: bool = True,
    ) -> None:
        self.base, self.load, self.K, self.dK, self.m, self.restricted = base, load, K, slope, m, restricted
        root = np.sqrt(load.c)
        self.T = np.hstack([load.TQ, load.TE]) / root[:, None]
        self._latest: tuple[bytes, _At] | None = None

    def __call__(self, theta: Array) -> float:
        return self._at(theta).value

    def gradient(self, theta: Array) -> Array:
        """(2,) slopes of the criterion in ln φ and ln λ."""
        return self._at(theta).slopes[0]

    def information(self, theta: Array) -> Array:
        """(2, 2) average information of −2ℓ, σ² profiled out."""
        return self._at(theta).slopes[1]

    def _at(self, theta: Array) -> _At:
        key = theta.tobytes()
        if self._latest is None or self._latest[0] != key:
            self._latest = None  # a table of all places is let go before the next is made
            self._latest = key, _At.of(self, theta)
        return self._latest[1]


@dataclass(frozen=True, eq=False)
class _At:
    """Everything at one θ. L : factor of B; its strict upper triangle is of no meaning."""

    field: Field
    theta: Array
    L: Array
    root: Array
    H: Array

    @classmethod
    def of(cls, field: Field, theta: Array) -> _At:
        L, root = matern.factor(field.load.c, field.K(theta))
        return cls(field, theta, L, root, reml.forward(L, field.T))

    @property
    @once
    def gram(self) -> Gram:
        base, p = self.field.base, self.field.base.QQ.shape[0]
        G = self.H.T @ self.H - self.field.T.T @ self.field.T
        logdet = base.logdet + float(2 * np.log(np.diag(self.L)).sum())
        return Gram(base.QQ + G[:p, :p], base.QE + G[:p, p:], base.EE + np.diag(G)[p:], logdet)

    @property
    @once
    def value(self) -> float:
        _, c, logdet = reml.reduced(self.gram)
        fixed = logdet if self.field.restricted else 0.0
        return float(self.gram.logdet + fixed + reml.profiled(c, self.field.m)[0])

    @property
    @once
    def slopes(self) -> tuple[Array, Array]:
        """The gradient (2,) and the information (2, 2). L is used up."""
        field, T, root = self.field, self.field.T, self.root
        delta, c, _ = reml.reduced(self.gram)
        v = np.append(-delta[:, 0], 1.0)
        Z = self._back(self.H)
        z = Z @ v  # D^{−½} U'Py
        dB = field.dK(self.theta)
        dB *= root[:, None]
        dB *= root
        dBZ = np.stack([dB @ Z, T - Z])
        dG = -np.matmul(Z.T, dBZ)
        scale = field.m / float(c[0])
        # Average information, while L still is the factor.
        a = (dBZ @ v).T
        p = Z.shape[1] - 1
        across = Z[:, :p].T @ a
        AI = a.T @ self._solve(a) - across.T @ np.linalg.solve(self.gram.QQ, across)
        q = scale * (z @ a)
        AI = scale * AI - np.outer(q, q) / field.m
        inverse, _ = lapack.dpotri(self.L, lower=1, overwrite_c=1)
        diagonal = np.diag(inverse)
        trace = np.array([_lower_dot(inverse, dB), len(diagonal) - diagonal.sum()])
        gradient = trace + scale * np.einsum("i,kij,j->k", v, dG, v)
        if field.restricted and p:
            gradient += np.einsum("ij,kji->k", np.linalg.inv(self.gram.QQ), dG[:, :p, :p])
        return gradient, (AI + AI.T) / 2

    def _back(self, block: Array) -> Array:
        solved, _ = lapack.dtrtrs(self.L, block, lower=1, trans=1)
        return np.asarray(solved)

    def _solve(self, block: Array) -> Array:
        return self._back(reml.forward(self.L, block))


def _lower_dot(A: Array, B: Array) -> float:
    """tr AB of symmetric A, of which the lower triangle alone is read, and symmetric B; block by block."""
    total, S = 0.0, len(A)
    for j in range(0, S, BLOCK):
        k = min(j + BLOCK, S)
        corner = np.tril(A[j:k, j:k])
        total += float(2 * np.vdot(corner, B[j:k, j:k]) - np.diag(corner) @ np.diag(B)[j:k])
        total += float(2 * np.einsum("ij,ij->", A[k:, j:k].T, B[j:k, k:]))
    return total
