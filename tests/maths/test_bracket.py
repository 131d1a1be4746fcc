"""Brackets close on a parabola at once, and on what is none by halving."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import numpy.typing as npt
import pytest

from clingstone.maths.bracket import Bracket

Floats = npt.NDArray[np.float64]
CLOSE = 0.01


def closed(f: Callable[[Floats], Floats], high: float, last: float) -> tuple[float, int]:
    """The step that a bracket from 0 to ``high`` closes on, and the values that took."""
    calls = 0

    def value(_: npt.NDArray[np.int64], step: Floats) -> Floats:
        nonlocal calls
        calls += 1
        return f(step)

    ends = [np.array([x]) for x in (0.0, high, last)]
    low, far, third = ends
    before = f(third) if np.isfinite(last) else np.array([np.nan])
    found = Bracket(low, f(low), far, f(far), third, before).closed(value, CLOSE, 9)
    return float(found[0]), calls


@pytest.mark.parametrize("high", [1.5, 4.0])
def test_one_value_on_a_parabola(high: float) -> None:
    # 2 − 2t² comes down to half of 0.01 at √(1 − 0.0025), by hand.
    step, calls = closed(lambda t: 2 - 2 * t * t, high, -0.7)
    assert calls == 1
    assert step == pytest.approx(np.sqrt(1 - 0.0025), abs=1e-12)


@pytest.mark.parametrize("last", [np.nan, -0.5])
def test_ends_inside_and_close(last: float) -> None:
    def f(t: Floats) -> Floats:
        return 1.92 - 0.3 * np.expm1(2 * np.maximum(t, 0.0))

    step, calls = closed(f, 6.0, last)
    # The zero, by hand: ½ ln(1 + 1.92/0.3) = 1.0007.
    assert step == pytest.approx(1.0007, abs=0.06)
    assert step < 1.0008
    assert calls <= 9


def test_a_cliff_is_halved() -> None:
    # −∞ outside, as where a covariance is not positive definite: only halving comes near.
    step, _ = closed(lambda t: np.where(t < 0.83, 1.0, -np.inf), 1.0, np.nan)
    assert 0.83 - 1 / 2**8 <= step < 0.83
