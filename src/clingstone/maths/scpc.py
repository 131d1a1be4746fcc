"""Spatial correlation principal components: a variance from projections on a few smooth maps.

The law of t holds for every correlation e^{−cD} from the strongest thought possible (mean pairwise
correlation ρ̄₀ at c₀) down to independence, so no range is estimated (Müller & Watson 2022, Econometrica
90:2901; for regressions 2023, JBES 41:1050).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import linalg, optimize, special
from scipy.spatial.distance import cdist, pdist, squareform

from clingstone.maths.longrun import ANGLE, WEIGHT, RatioLaw
from clingstone.maths.once import Array, kept

SAMPLE = 1000  # places on which c₀, the maps and the laws are worked out when there are more
STEP, FAINT = 1.2, 1e-5  # ratio of one c to the next, and the mean correlation at which they end
MAPS, MORE_MAPS, MANY = 10, 20, 500
STRIP = 1000


@dataclass(frozen=True, eq=False)
class Components:
    """Smooth maps of S places and the strengths of dependence they guard against.

    R (S, q_max) : orthonormal maps, each adding to zero. rates : c, in units of the largest distance,
    from the strongest to the faintest. points (S, ·), scale : places, and the largest distance.
    chosen : the places worked on.
    """

    points: Array
    scale: float
    R: Array
    rates: Array
    chosen: npt.NDArray[np.int64]

    @classmethod
    def of(cls, points: Array, mean_correlation: float, rng: np.random.Generator) -> Components:
        """From straight distances and ρ̄₀, the largest mean pairwise correlation thought possible."""
        S = len(points)
        chosen = np.arange(S) if S <= SAMPLE else np.sort(rng.choice(S, SAMPLE, replace=False))
        some = points[chosen]
        apart = pdist(some)
        scale = float(apart.max())
        apart = apart / scale

        def gap(log_c: float) -> float:
            return float(np.log(max(np.mean(np.exp(-np.exp(log_c) * apart)), 1e-300) / mean_correlation))

        faint = 14.0
        while gap(faint) > 0 and faint < 40.0:  # most places in clusters that are tiny on this map
            faint += 4.0
        first = float(np.exp(optimize.brentq(gap, -8.0, faint, xtol=1e-10)))
        rates = [first]
        while np.mean(np.exp(-rates[-1] * apart)) > FAINT and len(rates) < 60:
            rates.append(rates[-1] * STEP)
        most = min(MORE_MAPS if S > MANY else MAPS, len(some) - 2)
        K = np.exp(-first * squareform(apart))
        R = _maps(K, most)
        if S > SAMPLE:
            R = _extended(points, some, R, K, first / scale)
        return cls(points, scale, R, np.array(rates), chosen)

    def covariances(self, block: Array, rates: Array) -> Array:
        """(len(rates), k, k) block'e^{−cD} block for a block (S, k), in strips."""
        S, k = block.shape
        out = np.zeros((len(rates), k, k))
        for start in range(0, S, STRIP):
            D = cdist(self.points[start : start + STRIP], self.points) / self.scale
            for i, c in enumerate(rates):
                out[i] += block[start : start + STRIP].T @ (np.exp(-c * D) @ block)
        return out

    @property
    def laws(self) -> tuple[tuple[RatioLaw, ...], ...]:
        """Per q, the laws of t for a mean, one for each c and one for independence."""
        return kept(self, ("laws",), self._laws)

    def _laws(self) -> tuple[tuple[RatioLaw, ...], ...]:
        R = self.R[self.chosen]
        m = len(self.chosen)
        if m < len(self.points):
            R = np.linalg.qr(R - R.mean(axis=0))[0]
        W = np.column_stack([np.full(m, 1 / np.sqrt(m)), R])
        part = Components(self.points[self.chosen], self.scale, R, self.rates, np.arange(m))
        omega = part.covariances(W, self.rates)
        return tuple(
            (*(mean_law(one[: q + 1, : q + 1]) for one in omega), mean_law(np.eye(q + 1)))
            for q in range(1, R.shape[1] + 1)
        )

    def critical(self, q: int, alpha: float) -> float:
        """Critical value for the mean of a map, with q projections."""
        return kept(self, ("critical", q, alpha), lambda: critical(self.laws[q - 1], alpha))

    def best(self, alpha: float) -> tuple[int, float]:
        """q of the shortest expected interval under independence, and its critical value."""
        values = np.array([self.critical(q, alpha) for q in range(1, len(self.laws) + 1)])
        q = np.arange(1, len(values) + 1)
        # E√(χ²_q/q) = √(2/q) Γ((q+1)/2)/Γ(q/2)
        length = values * np.sqrt(2 / q) * np.exp(special.gammaln((q + 1) / 2) - special.gammaln(q / 2))
        best = int(np.argmin(length))
        return best + 1, float(values[best])


def mean_law(omega: Array) -> RatioLaw:
    """Law of t for a mean over the root of the mean of q squared projections."""
    scale = np.r_[1.0, np.full(len(omega) - 1, 1 / np.sqrt(len(omega) - 1))]
    return RatioLaw.of(omega * scale[:, None] * scale)


def critical(laws: tuple[RatioLaw, ...], alpha: float, least: float | None = None) -> float:
    """The smallest c from ``least`` on with P(|t| > c) ≤ α under every law: raised until none objects."""
    value = laws[0].quantile(alpha) if least is None else least
    for _ in laws:
        over = tails(laws, value)
        worst = int(np.argmax(over))
        if over[worst] <= alpha * (1 + 1e-6):
            break
        value = laws[worst].quantile(alpha)
    return value


def tails(laws: tuple[RatioLaw, ...], t: float) -> Array:
    """P(|T| > t) under each law, all laws at once; as ``RatioLaw.tail``, its matrix solved whole."""
    size = {len(law.weights) for law in laws}
    # Beyond t = 10⁵ the one positive eigenvalue drowns in rounding; a law with fewer weights stands alone.
    if t == 0 or t > 1e5 or len(size) > 1:
        return np.array([law.tail(np.array([t]))[0] for law in laws])
    v = np.stack([law.load for law in laws])
    M = v[:, :, None] * v[:, None, :]
    q = size.pop()
    inner = np.arange(1, q + 1)
    M[:, inner, inner] -= t**2 * np.stack([law.weights for law in laws])
    omega = np.linalg.eigvalsh(M)
    eta = -omega[:, None, :-1] / omega[:, -1:, None]
    cosine = np.cos(ANGLE)
    gap = cosine[None, :, None] ** 2 + eta
    integrand = np.exp(q * np.log(cosine) - 0.5 * np.log(np.maximum(gap, 1e-300)).sum(axis=2))
    return np.asarray(np.clip(2 / np.pi * integrand @ WEIGHT, 0.0, 1.0))


def tail(laws: tuple[RatioLaw, ...], t: Array) -> Array:
    """The largest P(|t| > |t_b|) over the laws, (B,); many values are interpolated in ln p."""
    t = np.abs(np.asarray(t, dtype=float))
    if len(t) <= 64:
        return np.array([np.nan if np.isnan(v) else tails(laws, float(v)).max() for v in t])
    known = t[np.isfinite(t)]
    grid = np.linspace(0.0, float(known.max(initial=1.0)) ** 0.5, 64) ** 2
    log_p = np.log([max(tails(laws, float(v)).max(), 1e-300) for v in grid])
    return np.asarray(np.where(np.isnan(t), np.nan, np.exp(np.interp(t, grid, log_p))))


def _maps(K: Array, most: int) -> Array:
    """The largest eigenvectors of the doubly demeaned K; signs fixed by their largest entry."""
    S = len(K)
    centred = K - K.mean(axis=0) - K.mean(axis=1)[:, None] + K.mean()
    _, vectors = linalg.eigh(centred, subset_by_index=[S - most, S - 1])
    vectors = vectors[:, ::-1]
    big = np.abs(vectors).argmax(axis=0)
    return np.asarray(vectors * np.sign(vectors[big, np.arange(most)]))


def _extended(points: Array, some: Array, R: Array, K: Array, rate: float) -> Array:
    """Maps of some places carried to all by their kernel (Nyström), orthonormal again."""
    out = np.empty((len(points), R.shape[1]))
    middle = K.mean(axis=0)
    for start in range(0, len(points), STRIP):
        k = np.exp(-rate * cdist(points[start : start + STRIP], some))
        k = k - k.mean(axis=1)[:, None] - middle + K.mean()
        out[start : start + STRIP] = k @ R
    out -= out.mean(axis=0)
    Q, T = np.linalg.qr(out)
    return np.asarray(Q * np.sign(np.diag(T)))
