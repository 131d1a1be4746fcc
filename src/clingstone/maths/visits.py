"""A free covariance between the few visits of each subject, by restricted maximum likelihood.

Rows of one subject have covariance Σ[v, v], v the visits at which it was seen, and subjects are independent.
Subjects with the same visits are one pattern; all that matters of a pattern is Σ_g x_gi x_gj' over its
subjects, x = [Q, e], so that no step depends on the number of subjects (Jennrich & Schluchter 1986).
V is linear in the entries of Σ: Newton and scoring steps, and Kenward and Roger's ingredients, follow
from the same sums.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from clingstone.maths.groups import Expected
from clingstone.maths.once import Array, once

STEPS = 60
SETTLED = 1e-9  # a scoring decrement at which the search is over


@dataclass(frozen=True, eq=False)
class Pattern:
    """Subjects that were seen at the same visits.

    at : (k,) those visits. count : subjects. moments : (k, k, p + 1, p + 1) Σ_g x_gi x_gj'.
    """

    at: npt.NDArray[np.int64]
    count: int
    moments: Array


@dataclass(frozen=True, eq=False)
class Visits:
    """All patterns of one column of y; T visits, p columns of Q, m residual df."""

    patterns: tuple[Pattern, ...]
    T: int
    p: int
    m: int

    @property
    @once
    def pairs(self) -> tuple[tuple[int, int], ...]:
        """Entries (i, j), j ≤ i, of Σ: the parameters."""
        return tuple((i, j) for i in range(self.T) for j in range(i + 1))

    def matrix(self, theta: Array) -> Array:
        """Σ (T, T)."""
        out = np.empty((self.T, self.T))
        for (i, j), value in zip(self.pairs, theta, strict=True):
            out[i, j] = out[j, i] = value
        return out

    def sums(self, sigma: Array) -> tuple[Array, float]:
        """A = [Q, e]'V⁻¹[Q, e] and ln|V|. Raises LinAlgError where Σ is not positive definite."""
        A = np.zeros((self.p + 1, self.p + 1))
        logdet = 0.0
        for pattern in self.patterns:
            own = sigma[np.ix_(pattern.at, pattern.at)]
            L = np.linalg.cholesky(own)
            logdet += pattern.count * 2 * float(np.log(np.diag(L)).sum())
            A += np.einsum("ij,ijab->ab", np.linalg.inv(own), pattern.moments)
        return A, logdet

    def criterion(self, sigma: Array, restricted: bool = True) -> float:
        """−2ℓ_R in the basis Q, or −2ℓ."""
        A, logdet = self.sums(sigma)
        half, c = _reduced(A, self.p)
        rows = self.m if restricted else self.m + self.p
        return logdet + rows * float(np.log(2 * np.pi)) + c + (half if restricted else 0.0)

    def scores(self, sigma: Array, restricted: bool = True) -> tuple[Array, Array, Expected]:
        """Gradient (d,) and second derivatives (d, d) of −2ℓ_R (−2ℓ) in the entries of Σ, and the expected
        information with its parts."""
        p, d = self.p, len(self.pairs)
        A, _ = self.sums(sigma)
        Phi = np.asarray(np.linalg.inv(A[:p, :p]), dtype=float)
        a = np.append(-Phi @ A[:p, p], 1.0)
        D = np.zeros((d, p + 1, p + 1))
        t = np.zeros((d, d))
        trace = np.zeros(d)
        QQ = np.zeros((d, d, p + 1, p + 1))
        for pattern in self.patterns:
            self._pattern(sigma, pattern, D, t, trace, QQ)
        P = -D[:, :p, :p]
        fixed = np.einsum("ab,dba->d", Phi, P)
        gradient = trace - np.einsum("a,dab,b->d", a, D, a) + (fixed if restricted else 0.0)
        PPhi = P @ Phi
        own = QQ[:, :, :p, :p]
        info = t - 2 * np.einsum("ab,ijba->ij", Phi, own) + np.einsum("iab,jba->ij", PPhi, PPhi)
        info = info if restricted else t
        pull = D[:, :p] @ a
        bent = 2 * (np.einsum("a,ijab,b->ij", a, QQ, a) - pull @ Phi @ pull.T) - info
        return gradient, (bent + bent.T) / 2, Expected(info / 2, Phi, P, own)

    def _pattern(self, sigma: Array, one: Pattern, D: Array, t: Array, trace: Array, QQ: Array) -> None:
        """One pattern's part of Σ_g Z'V_iZ, tr(V⁻¹V_iV⁻¹V_j), tr(V⁻¹V_i) and Q'V⁻¹V_iV⁻¹V_jV⁻¹Q."""
        inverse = np.linalg.inv(sigma[np.ix_(one.at, one.at)])
        S = np.einsum("ik,klab,lj->ijab", inverse, one.moments, inverse, optimize=True)
        C = np.zeros((len(self.pairs), *sigma.shape))  # V_i, an entry of Σ and its mirror
        for index, (i, j) in enumerate(self.pairs):
            C[index, i, j] = C[index, j, i] = 1.0
        C = C[:, one.at][:, :, one.at]
        W = C @ inverse
        D += np.tensordot(C, S, 2)
        trace += one.count * np.einsum("ixx->i", W)
        t += one.count * np.tensordot(W, W, ((1, 2), (2, 1)))
        QQ += np.tensordot(W, np.tensordot(C, S, (2, 1)), ((1, 2), (2, 1)))


@dataclass(frozen=True, eq=False)
class Found:
    """Σ̂ (T, T), the criterion there, whether the steps came to rest."""

    sigma: Array
    value: float
    converged: bool
    steps: int


def fit(visits: Visits, start: Array, restricted: bool = True) -> Found:
    """Newton steps with halving from a positive definite start, scoring steps where −2ℓ is not convex."""
    sigma, value = start, visits.criterion(start, restricted)
    for step in range(STEPS):
        gradient, bent, seen = visits.scores(sigma, restricted)
        H = bent if np.linalg.eigvalsh(bent)[0] > 0 else 2 * seen.information
        move = np.asarray(-np.linalg.lstsq(H, gradient, rcond=1e-12)[0], dtype=float)
        decrement = -float(move @ gradient)
        if decrement < SETTLED:
            return Found(sigma, value, True, step)
        after = _shorter(lambda s: visits.criterion(s, restricted), sigma, visits.matrix(move), value)
        if after is None:
            return Found(sigma, value, decrement < 1e-5, step)
        sigma, value = after
    return Found(sigma, value, False, STEPS)


def _shorter(
    f: Callable[[Array], float], sigma: Array, move: Array, value: float
) -> tuple[Array, float] | None:
    """The first of the halved steps that stays positive definite and brings the value down."""
    for k in range(30):
        trial = sigma + 0.5**k * move
        try:
            new = f(trial)
        except np.linalg.LinAlgError:
            continue
        if new < value:
            return trial, new
    return None


def _reduced(A: Array, p: int) -> tuple[float, float]:
    """ln|A₁₁| and the generalised residual sum of squares."""
    L = np.linalg.cholesky(A[:p, :p])
    half = np.linalg.solve(L, A[:p, p])
    return 2 * float(np.log(np.diag(L)).sum()), float(A[p, p] - half @ half)


def patterns(
    subject: npt.NDArray[np.int32], visit: npt.NDArray[np.int64], T: int, Q: Array, e: Array
) -> tuple[Pattern, ...]:
    """Subjects by the visits at which they were seen; each (subject, visit) at most once. e (n,)."""
    order = np.lexsort((visit, subject))
    subject, visit = subject[order], visit[order]
    x = np.hstack([Q, e[:, None]])[order]
    starts = np.flatnonzero(np.r_[True, subject[1:] != subject[:-1]])
    ends = np.r_[starts[1:], len(subject)]
    seen: dict[tuple[int, ...], list[int]] = {}
    for start, end in zip(starts.tolist(), ends.tolist(), strict=True):
        seen.setdefault(tuple(visit[start:end].tolist()), []).append(start)
    out = []
    for at, first in sorted(seen.items()):
        rows = np.asarray(first)[:, None] + np.arange(len(at))
        block = x[rows]  # (subjects, k, p + 1)
        moments = np.einsum("gia,gjb->ijab", block, block, optimize=True)
        out.append(Pattern(np.asarray(at, dtype=np.int64), len(first), moments))
    return tuple(out)
