"""Every algebra against V written out in full, and against its own meaning."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest

from clingstone.covariance.algebras import Dense
from clingstone.covariance.fits import Fits
from clingstone.covariance.layered import Layered
from clingstone.design.response import Response
from clingstone.maths import reml
from clingstone.needs import Limits, NotSupported
from tests.covariance.worlds import fits

WIDE = Limits(serial_estimate_short=3, serial_estimate_series=3, sites_estimate=10)


def table(n: int, seed: int) -> tuple[np.random.Generator, np.ndarray, np.ndarray]:
    rng = np.random.default_rng(seed)
    return rng, 50 + rng.standard_normal(n), rng.standard_normal(n)


def one_level(weights: bool = False) -> Fits:
    rng, y, x = table(60, 1)
    g = rng.integers(0, 9, 60)
    return fits(y, x, groups={"g": g}, weights=rng.uniform(0.5, 3, 60) if weights else None)


def three_levels(weights: bool = False) -> Fits:
    rng, y, x = table(90, 2)
    c = np.arange(90) // 3
    b = c // 3
    return fits(
        y,
        x,
        groups={"a": b // 2, "a/b": b, "a/b/c": c},
        weights=rng.uniform(0.5, 3, 90) if weights else None,
        limits=WIDE,
    )


def gaps(weights: bool = False) -> Fits:
    rng, y, x = table(60, 3)
    time = np.concatenate([np.sort(rng.choice(40, 20, replace=False)) for _ in range(3)])
    w = rng.uniform(0.5, 3, 60) if weights else None
    return fits(y, x, time=time, series=np.repeat(np.arange(3), 20), weights=w, limits=WIDE)


def irregular(weights: bool = False) -> Fits:
    rng, y, x = table(60, 4)
    w = rng.uniform(0.5, 3, 60) if weights else None
    return fits(
        y,
        x,
        time=rng.uniform(0, 30, 60),
        series=rng.integers(0, 3, 60),
        whole=False,
        weights=w,
        limits=WIDE,
    )


def group_and_order(weights: bool = False) -> Fits:
    rng, y, x = table(80, 5)
    series = np.repeat(np.arange(16), 5)
    w = rng.uniform(0.5, 3, 80) if weights else None
    return fits(
        y,
        x,
        groups={"a": series // 3, "a/b": series},
        time=np.tile([0, 1, 2, 5, 6], 16),
        series=series,
        weights=w,
        limits=WIDE,
    )


def group_and_irregular(weights: bool = False) -> Fits:
    rng, y, x = table(80, 6)
    series = np.repeat(np.arange(16), 5)
    w = rng.uniform(0.5, 3, 80) if weights else None
    return fits(
        y,
        x,
        groups={"g": series // 2},
        time=rng.uniform(0, 9, 80),
        series=series,
        whole=False,
        weights=w,
        limits=WIDE,
    )


def repeats(weights: bool = False, whole: bool = True) -> Fits:
    """Rows that share a time with others of their series."""
    rng, y, x = table(100, 10)
    series = np.repeat(np.arange(10), 10)
    time = np.tile([0, 0, 0, 1, 3, 3, 4, 7, 7, 7], 10) * (1.0 if whole else 0.37)
    w = rng.uniform(0.5, 3, 100) if weights else None
    groups = {"a": series // 2, "a/b": series}
    return fits(y, x, groups=groups, time=time, series=series, whole=whole, weights=w, limits=WIDE)


def uneven_repeats(weights: bool = False) -> Fits:
    return repeats(weights, whole=False)


def repeats_at_places(weights: bool = False) -> Fits:
    rng, y, x = table(100, 11)
    site = np.repeat(np.arange(20), 5)
    w = rng.uniform(0.5, 3, 100) if weights else None
    xy = rng.uniform(size=(20, 2))[site]
    return fits(y, x, xy=xy, time=np.tile([0, 0, 1, 2, 2], 20), series=site, weights=w, limits=WIDE)


def places(weights: bool = False) -> Fits:
    rng, y, x = table(40, 7)
    w = rng.uniform(0.5, 3, 40) if weights else None
    return fits(y, x, xy=rng.uniform(size=(40, 2)), weights=w)


def repeated_places(weights: bool = False) -> Fits:
    rng, y, x = table(100, 8)
    site = np.concatenate([np.arange(25), rng.integers(0, 25, 75)])
    w = rng.uniform(0.5, 3, 100) if weights else None
    return fits(
        y,
        x,
        groups={"region": site // 5},
        xy=rng.uniform(size=(25, 2))[site],
        weights=w,
    )


def everything(weights: bool = False) -> Fits:
    rng, y, x = table(125, 9)
    site = np.repeat(np.arange(25), 5)
    w = rng.uniform(0.5, 3, 125) if weights else None
    return fits(
        y,
        x,
        xy=rng.uniform(size=(25, 2))[site],
        time=np.tile(np.arange(5), 25),
        series=site,
        weights=w,
        limits=WIDE,
    )


WORLDS: dict[str, tuple[Callable[..., Fits], set[str]]] = {
    "one level": (one_level, {"group:g"}),
    "three levels": (three_levels, {"group:a", "group:a/b", "group:a/b/c"}),
    "two of three levels": (three_levels, {"group:a", "group:a/b/c"}),
    "gaps": (gaps, {"serial"}),
    "irregular times": (irregular, {"serial"}),
    "levels and order": (group_and_order, {"group:a", "group:a/b", "serial"}),
    "level and irregular times": (group_and_irregular, {"group:g", "serial"}),
    "repeats": (repeats, {"serial"}),
    "repeats at uneven times": (uneven_repeats, {"serial"}),
    "levels and repeats": (repeats, {"group:a", "group:a/b", "serial"}),
    "repeats, site and place": (repeats_at_places, {"group:site", "serial", "spatial"}),
    "places": (places, {"spatial"}),
    "places that repeat": (repeated_places, {"group:site", "spatial"}),
    "places within regions": (repeated_places, {"group:region", "group:site", "spatial"}),
    "place and order": (everything, {"serial", "spatial"}),
    "site, order and place": (everything, {"group:site", "serial", "spatial"}),
}
CASES = [(name, weights) for name in WORLDS for weights in (False, True)]


def built(name: str, weights: bool = False) -> tuple[Fits, Layered, Dense]:
    make, node = WORLDS[name]
    f = make(weights)
    algebra = f.algebra(node)
    assert isinstance(algebra, Layered)
    return f, algebra, Dense(f.design, algebra.pieces)


def thetas(algebra: Layered, seed: int, count: int = 3) -> np.ndarray:
    """Working parameters over the region in which estimates fall."""
    rng = np.random.default_rng(seed)
    low = np.array([max(p.scan[0], -4.0) for p in algebra.parameters])
    high = np.array([min(p.scan[-1], 2.0) for p in algebra.parameters])
    return low + (high - low) * rng.uniform(size=(count, len(low)))


@pytest.mark.parametrize(("name", "weights"), CASES)
def test_gram_equals_the_dense_one(name: str, weights: bool) -> None:
    f, algebra, dense = built(name, weights)
    rng = np.random.default_rng(0)
    many = Response.of(f.design, 50 + rng.standard_normal((f.design.n, 3)))
    for theta in thetas(algebra, 1):
        for response in (f.response, many):
            fast, slow = algebra.gram(theta, response), dense.gram(theta, response)
            assert fast.logdet == pytest.approx(slow.logdet, abs=1e-10 * f.design.n)
            for a, b in ((fast.QQ, slow.QQ), (fast.QE, slow.QE), (fast.EE, slow.EE)):
                assert np.abs(a - b).max() <= 1e-10 * max(1.0, np.abs(b).max())


@pytest.mark.parametrize(("name", "weights"), CASES)
def test_grams_are_the_same_one_by_one(name: str, weights: bool) -> None:
    f, algebra, _ = built(name, weights)
    many = Response.of(f.design, np.random.default_rng(0).standard_normal((f.design.n, 3)))
    at = thetas(algebra, 2).T
    for together, theta in zip(algebra.grams(at, many), at.T, strict=True):
        alone = algebra.gram(theta, many)
        assert reml.criterion(together, f.design.m) == pytest.approx(
            reml.criterion(alone, f.design.m), abs=1e-9
        )


@pytest.mark.parametrize(("name", "weights"), CASES)
def test_whitening_is_a_square_root_of_the_inverse(name: str, weights: bool) -> None:
    _, algebra, dense = built(name, weights)
    for theta in thetas(algebra, 3):
        V = dense.dense(theta)
        W = algebra.whiten(theta, np.eye(len(V)))
        assert np.abs(W @ V @ W.T - np.eye(len(V))).max() < 1e-9


@pytest.mark.parametrize(("name", "weights"), CASES)
def test_parts_add_up_to_the_whole(name: str, weights: bool) -> None:
    f, algebra, dense = built(name, weights)
    for theta in thetas(algebra, 4):
        sigma2 = 1.7
        variances = algebra.variances(theta[:, None], np.array([sigma2]))
        parts = sum(float(v[0]) * algebra.spread(key, theta) for key, v in variances.items())
        whole = sigma2 * f.design.Q.T @ dense.dense(theta) @ f.design.Q
        assert np.abs(parts - whole).max() < 1e-10 * np.abs(whole).max()
        assert all(float(v[0]) >= 0 for v in variances.values())


@pytest.mark.parametrize("name", WORLDS)
def test_draws_have_the_covariance(name: str) -> None:
    _, algebra, dense = built(name, weights=True)
    theta = thetas(algebra, 5, 1)[0]
    B, sigma2 = 4000, 2.0
    Y = algebra.draw(theta, sigma2, np.random.default_rng(6), B)
    L = np.linalg.cholesky(sigma2 * dense.dense(theta))
    Z = np.linalg.solve(L, Y)
    n = len(Z)
    # Whitened by the full V the draws are independent: the entries of their covariance are standard
    # normal on this scale (variance 2 on the diagonal): none beyond 5, and the mean of their squares is
    # one with a standard error of about 2/n.
    z = (Z @ Z.T / B - np.eye(n)) * np.sqrt(B / (1 + np.eye(n)))
    assert np.abs(z).max() < 5
    assert np.mean(z**2) == pytest.approx(1.0, abs=10 / n)


def test_shares_are_correlations_of_comparable_rows() -> None:
    f, algebra, dense = built("site, order and place")
    # Components in building order: site intercept, order, place (range, ratio); ρ = 0.5.
    theta = np.array([-0.5, np.arctanh(0.5), np.log(0.2), 0.3])
    V = dense.dense(theta)
    variances = algebra.variances(theta[:, None], np.ones(1))
    share = {k: float(v[0]) / V[0, 0] for k, v in variances.items()}
    assert list(share) == ["group:site", "serial", "spatial", "row"]
    assert sum(share.values()) == pytest.approx(1.0)
    place = share["group:site"] + share["spatial"]
    # Rows 0, 1 and 4: one place, visits 0, 1 and 4. Row 5: another place.
    assert V[0, 1] / V[0, 0] == pytest.approx(place + share["serial"])
    assert V[0, 4] / V[0, 0] == pytest.approx(place + share["serial"] * 0.5**3)
    d = f.design.spatial
    assert d is not None
    away = np.linalg.norm(d.xy[d.part.codes[0]] - d.xy[d.part.codes[5]])
    assert V[0, 5] / V[0, 0] == pytest.approx(share["spatial"] * np.exp(-away / 0.2))


def test_repeats_share_what_the_process_has() -> None:
    _, algebra, dense = built("repeats")
    # A rate of ln 2 per step and λ = 3: rows of one time share ¾, rows one step apart ⅜.
    theta = np.array([np.log(np.log(2)), np.log(3)])
    V, share = dense.dense(theta), algebra.variances(theta[:, None], np.ones(1))["serial"][0] / 4
    assert share == pytest.approx(0.75)
    assert V[0, 1] / V[0, 0] == pytest.approx(share)
    assert V[0, 3] / V[0, 0] == pytest.approx(share / 2)


def test_a_ratio_at_its_lower_bound_is_zero() -> None:
    f, algebra, _ = built("one level")
    low = np.array([algebra.parameters[0].low])
    gram = algebra.gram(low, f.response)
    assert algebra.variances(low[:, None], np.ones(1))["group:g"][0] == 0.0
    assert gram.logdet == 0.0
    assert np.array_equal(gram.QQ, np.eye(f.design.p))


def test_what_does_not_stack_is_dense_when_small_and_refused_when_large() -> None:
    rng, y, x = table(120, 10)
    groups = {"judge": rng.integers(0, 8, 120)}
    series, time = np.repeat(np.arange(6), 20), np.tile(np.arange(20), 6)
    where = {"groups": groups, "series": series, "time": time}
    assert isinstance(fits(y, x, **where).algebra({"group:judge", "serial"}), Dense)
    small = fits(y, x, **where, limits=Limits(dense_rows=100))
    with pytest.raises(NotSupported, match=r"judge, t.* cut across one another") as stop:
        small.algebra({"group:judge", "serial"})
    assert "nest" in stop.value.hint
    # What cannot be had together is left out of the joint model, with the reason.
    assert small.full_node == {"group:judge"}
    assert "cut across" in small.left_out["serial"].reason
    assert any("serial is not in the joint model" in line for line in small.full.history)
