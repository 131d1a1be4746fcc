"""Slopes that differ, told from slopes that a process in time or a finer level makes."""

from __future__ import annotations

import numpy as np
import pytest

from clingstone.covariance.fits import Fits
from clingstone.design.response import Response
from clingstone.evidence.rough import inner_models, inner_node
from clingstone.evidence.slopes import SlopeVariation
from clingstone.maths.once import Array
from clingstone.run import Run, one_thread

from .factories import design, fits

TEST = SlopeVariation()


def process(rng: np.random.Generator, G: int, n: int, B: int, reach: float) -> Array:
    """(Gn, B) an exponential process in each of G series."""
    t = np.arange(n)
    L = np.linalg.cholesky(np.exp(-np.abs(np.subtract.outer(t, t)) / reach))
    return np.concatenate([L @ rng.standard_normal((n, B)) for _ in range(G)])


def panels(B: int, *, order: float, slopes: float, seed: int = 3, G: int = 25, n: int = 9) -> Fits:
    """Intercepts, a process and row noise of variance 1, ``order`` and 0.5; slopes of their own in time."""
    rng = np.random.default_rng(seed)
    g, t = np.repeat(np.arange(G), n), np.tile(np.arange(n, dtype=float), G)
    y = rng.standard_normal((G, B))[g] + np.sqrt(0.5) * rng.standard_normal((G * n, B))
    y = y + np.sqrt(order) * process(rng, G, n, B, 4.0) + slopes * rng.standard_normal((G, B))[g] * t[:, None]
    return Fits(Response.of(design(t, groups={"patient": g}, time=t, who=g), y), Run())


def share(made: Fits, given: bool) -> float:
    about = TEST.abouts(made.design)[0]
    with one_thread():
        p = TEST.read(made, about, TEST.givens(made, about)[0] if given else frozenset()).p
    return float(np.mean(p < 0.05))


def test_size_under_a_process_in_time() -> None:
    """At 5 % four or more of 16 panels have a chance of 1 %; alone the process passes for slopes."""
    made = panels(16, order=1.0, slopes=0.0)
    assert share(made, given=False) > 0.6
    assert share(made, given=True) <= 3 / 16


@pytest.mark.slow
def test_size_and_power_under_a_process_in_time_at_length() -> None:
    """In 60 panels each: the Monte-Carlo error at 5 % is 2.8 points."""
    assert share(panels(60, order=1.0, slopes=0.0), given=True) <= 0.14
    assert share(panels(60, order=0.0, slopes=0.0), given=True) <= 0.14
    assert share(panels(60, order=0.5, slopes=0.5), given=True) > 0.8


def test_power_for_slopes_that_are_there() -> None:
    assert share(panels(6, order=0.0, slopes=0.5), given=True) > 0.8


def test_given_is_least_squares_on_whitened_rows_written_out() -> None:
    """A dummy and a slope for every group, rows multiplied by the inverse root of V."""
    made = panels(1, order=1.0, slopes=0.1, G=12)
    about = TEST.abouts(made.design)[0]
    with one_thread():
        node = TEST.givens(made, about)[0]
        reading = TEST.read(made, about, node)
        models = inner_models(made, node)
    V = models.algebra.dense(models.theta[:, 0])
    W = np.linalg.inv(np.linalg.cholesky(V))
    Z = made.design.partitions["patient"].codes[:, None] == np.arange(12)
    x = np.asarray(made.design.covariates["x1"], dtype=float)
    y = made.design.Q @ made.response.coef[:, 0] + made.response.residual[:, 0]

    def rss(X: Array) -> tuple[float, int]:
        found = np.linalg.lstsq(W @ X, W @ y, rcond=None)
        r = W @ y - W @ X @ found[0]
        return float(r @ r), int(found[2])

    (one, p1), (each, p2) = rss(np.column_stack([Z, x])), rss(np.column_stack([Z, x[:, None] * Z]))
    F = (one - each) / (p2 - p1) / (each / (len(y) - p2))
    assert reading.df == p2 - p1
    assert reading.df2 == len(y) - p2
    assert reading.statistic[0] == pytest.approx(F, rel=1e-6)


def test_nothing_is_given_where_nothing_goes_on_within_groups() -> None:
    rng = np.random.default_rng(4)
    g = np.repeat(np.arange(10), 6)
    made = fits(design(rng.standard_normal(60), groups={"g": g}), rng.standard_normal(60))
    assert inner_node(made, made.design.partitions["g"]) == frozenset()
    assert TEST.givens(made, TEST.abouts(made.design)[0]) == ()
