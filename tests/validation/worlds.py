"""Worlds whose truth is known: a table, what is declared about it, and the covariance of its rows.

In every world the coefficient of ``x`` is 0.5, so an interval for ``x`` either holds 0.5 or does not.
``V`` is the true covariance of the rows, used for the oracle (generalised least squares at V) and for
the true standard-error factor of the ordinary fit. ``misses`` names a part of the mean that the
declared model leaves out.

A world is drawn in two steps: a design (x, sizes, places, times) and on it any number of columns of y.
"""

from __future__ import annotations

import zlib
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from scipy import optimize

SEED = 20_261_201
SLOPE = 0.5
Array = np.ndarray


@dataclass(frozen=True)
class Truth:
    """One design of a world.

    mean : what V does not hold, an offset beside x and the constant. noise : draws the errors (n, B)
    where they are not normal with covariance V. without : by family, the nearest covariance that lacks it,
    where that is not the one of independent rows.
    """

    x: Array
    V: Array
    columns: Mapping[str, Any]
    mean: Array | float = 0.0
    noise: Callable[[np.random.Generator, int], Array] | None = None
    without: Mapping[str, Array] | None = None

    def y(self, rng: np.random.Generator, B: int) -> Array:
        """(n, B) columns of y."""
        n = len(self.x)
        if self.noise is not None:
            e = self.noise(rng, B)
        else:
            e = np.linalg.cholesky(self.V + 1e-10 * np.eye(n)) @ rng.standard_normal((n, B))
        return np.asarray((3.0 + SLOPE * self.x + self.mean)[:, None] + e)

    def table(self, y: Array) -> pd.DataFrame:
        """The user's table with one column of y."""
        return pd.DataFrame({"y": y, "x": self.x, **self.columns})


@dataclass(frozen=True)
class World:
    """A scenario.

    holds : families of dependence that are really there. covered : whether 0.5 is what the declared
    model estimates. wrong : whether a part of the mean is missing from it. batch : columns of y on one
    design, fewer where each column is searched by itself.
    """

    name: str
    draw: Callable[[np.random.Generator], Truth]
    arguments: Mapping[str, Any]
    holds: frozenset[str] = frozenset()
    covered: bool = True
    wrong: bool = False
    batch: int = 50

    def design(self, d: int) -> tuple[Truth, np.random.Generator]:
        """Design d, and the generator that goes on to draw columns of y on it."""
        rng = np.random.default_rng([SEED, zlib.crc32(self.name.encode()), d])
        return self.draw(rng), rng

    def table(self, rng: np.random.Generator) -> tuple[pd.DataFrame, Truth]:
        """One table of a user, and the truth behind it."""
        truth = self.draw(rng)
        return truth.table(truth.y(rng, 1)[:, 0]), truth


# ---- predictors and covariances ---------------------------------------------------------------


def sizes(G: int, m: int, equal: bool) -> Array:
    """Rows per group: all m, or from 2 up to about 3m with the same mean."""
    if equal:
        return np.full(G, m)
    raw = np.linspace(0.0, 1.0, G) ** 2
    return np.maximum(2, np.round(2 + raw * 3 * (m - 2))).astype(int)


def ar(rng: np.random.Generator, n: int, rho: float) -> Array:
    """A stationary first-order process of variance 1."""
    e = rng.standard_normal(n) * np.sqrt(1 - rho**2)
    out = np.empty(n)
    out[0] = rng.standard_normal()
    for t in range(1, n):
        out[t] = rho * out[t - 1] + e[t]
    return out


def toeplitz(n: int, rho: float) -> Array:
    t = np.arange(n)
    return np.asarray(rho ** np.abs(t[:, None] - t[None]))


def same(code: Array) -> Array:
    return np.asarray((code[:, None] == code[None]).astype(float))


def field(points: Array, practical: float) -> Array:
    d = np.linalg.norm(points[:, None] - points[None], axis=2)
    return np.asarray(np.exp(-3.0 * d / practical))


def smooth(rng: np.random.Generator, V: Array) -> Array:
    return np.asarray(np.linalg.cholesky(V + 1e-8 * np.eye(len(V))) @ rng.standard_normal(len(V)))


def nearest(V: Array, family: Callable[[float], Array]) -> Array:
    """The covariance of a one-parameter family, at parameters from 0 to 0.95, that is nearest to V.

    Up to scale and in Kullback and Leibler's distance of normal laws, ln|V₀| + n ln tr(V₀⁻¹V): no test of
    the family has more power against V than the most powerful one against any single member, and against
    the nearest it has about the least.
    """
    n = len(V)

    def distance(value: float) -> float:
        L = np.linalg.cholesky(family(value))
        half = np.linalg.solve(L, V)
        return float(2 * np.log(np.diag(L)).sum() + n * np.log(np.trace(np.linalg.solve(L.T, half))))

    return family(float(optimize.minimize_scalar(distance, bounds=(0.0, 0.95), method="bounded").x))


# ---- builders ----------------------------------------------------------------------------------


def groups(
    G: int, m: int, icc: float, level: str, equal: bool = True, slope: float = 0.0
) -> Callable[..., Truth]:
    """Random intercepts (and slopes of x, standard deviation ``slope``) of G groups."""

    def draw(rng: np.random.Generator) -> Truth:
        g = np.repeat(np.arange(G), sizes(G, m, equal))
        n = len(g)
        x = rng.standard_normal(G)[g] if level == "group" else rng.standard_normal(n)
        V = icc * same(g) + (1 - icc) * np.eye(n)
        if slope:
            V = V + slope**2 * same(g) * np.outer(x, x)
        return Truth(x, V, {"g": [f"g{k}" for k in g]})

    return draw


def series(n: int, rho: float, predictor: str) -> Callable[..., Truth]:
    """One series with first-order errors; x is the time itself, a process of its own, or rough."""

    def draw(rng: np.random.Generator) -> Truth:
        t = np.arange(n)
        trend = (t - t.mean()) / t.std()
        x = {"trend": lambda: trend, "ar": lambda: ar(rng, n, 0.7), "rough": lambda: rng.standard_normal(n)}
        return Truth(x[predictor](), toeplitz(n, rho), {"t": t})

    return draw


def panel(G: int, T: int, icc: float, rho: float, level: str) -> Callable[..., Truth]:
    """G series of T times: a random intercept and first-order errors within each."""

    def draw(rng: np.random.Generator) -> Truth:
        g, t = np.repeat(np.arange(G), T), np.tile(np.arange(T), G)
        x = {
            "group": lambda: rng.standard_normal(G)[g],
            "row": lambda: rng.standard_normal(G * T),
            "ar": lambda: np.concatenate([ar(rng, T, 0.7) for _ in range(G)]),
        }[level]()

        def inside(rho: float) -> Array:
            return np.kron(np.eye(G), toeplitz(T, rho))

        def shared(icc: float) -> Array:
            return icc * same(g) + (1 - icc) * np.eye(G * T)

        V = icc * same(g) + (1 - icc) * inside(rho)
        without = None
        if icc and rho:
            without = {"group": nearest(V, inside), "serial": nearest(V, shared)}
        return Truth(x, V, {"g": [f"g{k}" for k in g], "t": t}, without=without)

    return draw


def places(n: int, practical: float, share: float, predictor: str, repeats: int = 1) -> Callable[..., Truth]:
    """n sites in a square of side 100; exponential field of the given share, row noise besides."""

    def draw(rng: np.random.Generator) -> Truth:
        points = rng.uniform(0, 100, (n, 2))
        code = np.repeat(np.arange(n), repeats)
        N = n * repeats
        K = field(points, practical) if share else np.eye(n)
        V = share * K[np.ix_(code, code)] + (1 - share) * np.eye(N)
        x = smooth(rng, field(points, 60.0))[code] if predictor == "smooth" else rng.standard_normal(N)
        return Truth(x, V, {"east": points[code, 0], "north": points[code, 1]})

    return draw


def missed(G: int, m: int, what: str, follows: bool = False) -> Callable[..., Truth]:
    """Independent rows whose mean lacks a curve in x or z, or a trend in time; x may follow what it lacks."""

    def draw(rng: np.random.Generator) -> Truth:
        n = G * m
        g = np.repeat(np.arange(G), m)
        t = np.arange(n)
        x = rng.standard_normal(n)
        z = np.linspace(-2, 2, n) if what == "z" and not follows else rng.standard_normal(n)
        add = {"x": 0.6 * (x**2 - 1), "z": 0.8 * (z**2 - np.mean(z**2)), "trend": 1.5 * (t / n - 0.5) * 2}
        if follows:
            x = 0.8 * add[what] + 0.6 * x
        return Truth(x, np.eye(n), {"z": z, "g": [f"g{k}" for k in g], "t": t}, mean=add[what])

    return draw


def uneven(G: int, m: int, level: str) -> Callable[..., Truth]:
    """Independent rows whose spread differs from group to group, fourfold between the ends."""

    def draw(rng: np.random.Generator) -> Truth:
        g = np.repeat(np.arange(G), m)
        sd = np.exp(np.linspace(np.log(0.5), np.log(2.0), G))
        x = rng.standard_normal(G)[g] if level == "group" else rng.standard_normal(len(g))
        return Truth(x, np.diag(sd[g] ** 2), {"g": [f"g{k}" for k in g]})

    return draw


def outlier(G: int, m: int) -> Callable[..., Truth]:
    """Independent rows, one of them six standard deviations out."""

    def draw(rng: np.random.Generator) -> Truth:
        g = np.repeat(np.arange(G), m)
        n = G * m

        def noise(rng: np.random.Generator, B: int) -> Array:
            e = rng.standard_normal((n, B))
            e[rng.integers(n, size=B), np.arange(B)] += 6.0
            return e

        return Truth(rng.standard_normal(n), np.eye(n), {"g": [f"g{k}" for k in g]}, noise=noise)

    return draw


def treated(G: int, m: int, arm: int, icc: float) -> Callable[..., Truth]:
    """x is a treatment that ``arm`` of G groups received."""

    def draw(rng: np.random.Generator) -> Truth:
        g = np.repeat(np.arange(G), m)
        x = (g < arm).astype(float)
        return Truth(x, icc * same(g) + (1 - icc) * np.eye(G * m), {"g": [f"g{k}" for k in g]})

    return draw


def nested(A: int, B: int, m: int, a: float, b: float, level: str) -> Callable[..., Truth]:
    """Rows in b in a, both with effects of their own."""

    def draw(rng: np.random.Generator) -> Truth:
        ia = np.repeat(np.arange(A), B * m)
        ib = np.repeat(np.arange(A * B), m)
        n = A * B * m
        x = {
            "a": rng.standard_normal(A)[ia],
            "b": rng.standard_normal(A * B)[ib],
            "row": rng.standard_normal(n),
        }
        V = a * same(ia) + b * same(ib) + (1 - a - b) * np.eye(n)
        return Truth(x[level], V, {"a": [f"a{k}" for k in ia], "b": [f"b{k}" for k in ib]})

    return draw


def crossed(A: int, B: int, a: float, b: float, level: str) -> Callable[..., Truth]:
    """One row for each pair of an a and a b."""

    def draw(rng: np.random.Generator) -> Truth:
        ia, ib = np.repeat(np.arange(A), B), np.tile(np.arange(B), A)
        x = {"a": rng.standard_normal(A)[ia], "row": rng.standard_normal(A * B)}[level]
        V = a * same(ia) + b * same(ib) + (1 - a - b) * np.eye(A * B)
        return Truth(x, V, {"a": [f"a{k}" for k in ia], "b": [f"b{k}" for k in ib]})

    return draw


def fanned(n: int) -> Callable[..., Truth]:
    """Independent rows in groups of 5 whose spread grows with the distance of x from its middle."""

    def draw(rng: np.random.Generator) -> Truth:
        x = rng.standard_normal(n)
        return Truth(x, np.diag(0.2 + x**2), {"g": [f"g{k // 5}" for k in range(n)]})

    return draw


def endogenous(G: int, m: int, tie: float) -> Callable[..., Truth]:
    """Group effects that go with the group means of x: 0.5 is the coefficient within groups."""

    def draw(rng: np.random.Generator) -> Truth:
        g = np.repeat(np.arange(G), m)
        u = rng.standard_normal(G)
        x = rng.standard_normal(G * m) + u[g]
        V = 0.2 * same(g) + 0.8 * np.eye(G * m)
        return Truth(x, V, {"g": [f"g{k}" for k in g]}, mean=tie * u[g])

    return draw


def noisy(n: int, rho: float, share: float, predictor: str) -> Callable[..., Truth]:
    """A slow first-order process under row noise: no first-order process, so the ar1 model is wrong."""

    def draw(rng: np.random.Generator) -> Truth:
        truth = series(n, rho, predictor)(rng)
        return Truth(truth.x, share * truth.V + (1 - share) * np.eye(n), truth.columns)

    return draw


def seasonal(n: int, period: int) -> Callable[..., Truth]:
    """Errors that repeat, fading, after one period: correlated at that lag and hardly before it."""

    def draw(rng: np.random.Generator) -> Truth:
        t = np.arange(n)
        lag = np.abs(t[:, None] - t[None])
        V = np.where(lag % period == 0, 0.7 ** (lag / period), 0.0)
        x = np.concatenate([ar(rng, n, 0.0)[:period]] * (n // period + 1))[:n] + 0.3 * rng.standard_normal(n)
        return Truth(x, V, {"t": t})

    return draw
