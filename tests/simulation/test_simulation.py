"""Sizes of the tests and coverages of the refits are what they should be, world by world.

The ordinary suite reads the quick methods of some worlds of each kind; the slow ones read every method of
every world (minutes). ``python -m tests.simulation.write`` puts the same figures into docs/sizes.md.
"""

from __future__ import annotations

import numpy as np
import pytest

from tests.simulation.cells import COVERS, SIZED, Bound, Cell, World
from tests.simulation.worlds import WORLDS


@pytest.mark.parametrize("world", [w for w in WORLDS if w.fast], ids=str)
def test_quick_methods_hold_their_bounds(world: World) -> None:
    assert faults(world.measured(quick=True)) == []


@pytest.mark.slow
@pytest.mark.parametrize("world", WORLDS, ids=str)
def test_every_method_holds_its_bounds(world: World) -> None:
    assert faults(world.measured()) == []


def faults(cells: list[Cell]) -> list[str]:
    assert cells, "nothing was measured"
    return [str(cell) for cell in cells if not cell.bound.holds(cell)]


def test_a_bound_gives_way_by_four_errors_and_no_more() -> None:
    """√(0.05 · 0.95/1900) = 0.005."""

    def held(k: int, bound: Bound, draws: int = 0) -> bool:
        return bound.holds(Cell("a world", "a method", "", k, 1900, bound, draws))

    assert held(132, SIZED)  # 0.0695
    assert held(58, SIZED)  # 0.0305
    assert not held(134, SIZED)  # 0.0705
    assert not held(56, SIZED)  # 0.0295
    assert held(134, SIZED, draws=999)
    assert held(1768, COVERS)  # 0.9305
    assert not held(1765, COVERS)  # 0.9289
    assert held(1900, COVERS)


def test_worlds_have_names_of_their_own_and_reasons_where_a_bound_is_not_nominal() -> None:
    assert len({world.name for world in WORLDS}) == len(WORLDS)
    for world in WORLDS:
        for method in world.methods:
            bounds = method.bounds.values() if hasattr(method, "bounds") else [method.bound]
            for bound in bounds:
                assert bound.why or (bound.low, bound.high) in ((0.95, 1.0), (0.95, 0.95), (0.05, 0.05))


def test_six_point_weights_of_three_and_three_means_reject_too_often() -> None:
    """The slow twin of a bound: plain means, the null imposed, t of two samples; nothing of this package.

    Restricted wild bootstrap with Webb's weights, 2,000 samples of 3 and 3 normal means, 399 draws each.
    """
    rng = np.random.default_rng(12)
    weights = rng.choice(np.sqrt([0.5, 1.0, 1.5]), (399, 6)) * rng.choice([-1.0, 1.0], (399, 6))

    def t(y: np.ndarray) -> np.ndarray:
        one, two = y[..., :3], y[..., 3:]
        return np.abs(one.mean(-1) - two.mean(-1)) / np.sqrt(one.var(-1) + two.var(-1))

    y = rng.standard_normal((2000, 6))
    drawn = t(weights * (y - y.mean(axis=1, keepdims=True))[:, None])
    p = (1 + np.sum(drawn >= t(y)[:, None], axis=1)) / 400
    assert 0.07 < np.mean(p <= 0.05) < 0.11
