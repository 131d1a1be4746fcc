"""The study itself is held: its worlds are what they say, its counting is right, its page is whole."""

import json
import zlib
from pathlib import Path

import numpy as np
import pytest
import statsmodels.formula.api as smf

from tests.validation import battery, nulls, study, tally, worlds

PAGE = Path(__file__).parents[2] / "docs" / "validation.md"
BY_NAME = {world.name: world for world in battery.WORLDS}


def lines(name: str, count: int) -> list[dict[str, object]]:
    return [study.replicate(BY_NAME[name], r) for r in range(count)]


# ---- worlds --------------------------------------------------------------------------------------


def test_names_are_unique_and_every_covariance_is_one():
    assert len(BY_NAME) == len(battery.WORLDS) > 70
    for world in battery.WORLDS:
        frame, truth = world.table(np.random.default_rng(1))
        assert len(frame) == len(truth.V) == len(truth.x)
        np.testing.assert_allclose(truth.V, truth.V.T, atol=1e-12)
        assert np.linalg.eigvalsh(truth.V)[0] > 1e-6


@pytest.mark.parametrize(
    "name",
    ["ICC 0.2, 12 equal groups, x of groups", "ρ 0.7, 40 times, x a trend", "nested 8 × 3 × 4, x of a"],
)
def test_errors_have_the_covariance_that_is_written_down(name):
    world = BY_NAME[name]
    total, count = 0.0, 3000
    for r in range(count):
        frame, truth = world.table(np.random.default_rng([9, r]))
        e = frame["y"].to_numpy() - 3.0 - 0.5 * truth.x
        total = total + np.outer(e, e)
    # standard error of one entry is at most √(2/3000) = 0.026 (unit variances); 5 of them
    assert np.abs(total / count - truth.V).max() < 0.13


def test_oracle_and_factor_by_hand_for_one_group_effect():
    # Balanced groups, x constant in groups: Var(β̂) = (1 + (m − 1)ρ)/Σ(x − x̄)², the same for GLS and OLS.
    world = BY_NAME["ICC 0.2, 12 equal groups, x of groups"]
    frame, truth = world.table(np.random.default_rng(4))
    found = study.oracle(truth, frame["y"].to_numpy())
    ols = smf.ols("y ~ x", frame).fit()
    inflated = 1 + 5 * 0.2
    spread = np.sum((truth.x - truth.x.mean()) ** 2)
    assert found["estimate"] == pytest.approx(ols.params["x"], rel=1e-8)
    assert found["se"] == pytest.approx(np.sqrt(inflated / spread), rel=1e-8)
    expected = (72 - 2 * inflated) / 70  # E s²: both columns are constant within groups
    assert found["factor"] == pytest.approx(np.sqrt(inflated / expected), rel=1e-8)


# ---- counting ------------------------------------------------------------------------------------


def test_share_and_its_error():
    assert tally.Share(90, 100).value == 0.9
    assert tally.Share(90, 100).error == pytest.approx(np.sqrt((90.5 / 101) * (10.5 / 101) / 100))
    assert tally.Share(90, 100).below(0.95)
    assert not tally.Share(92, 100).below(0.95)
    assert not tally.Share(0, 0).below(0.95)


def test_tally_counts_by_hand():
    truth = {"estimate": 0.5, "se": 0.1, "factor": 1.2}
    common = {
        "world": "w",
        "oracle": truth,
        "cautions": [],
        "structures": ["group"],
        "factor": [1.0, 1.1, 1.3],
    }
    good = {
        **common,
        "state": "supported",
        "remedy": "cluster-robust",
        "at": "g",
        "rows": [
            ["ordinary", "", 0.7, 0.05, 10, 0.6, 0.8, "ok"],
            ["cluster-robust", "g", 0.7, 0.15, 5, 0.4, 1.0, "ok"],
        ],
    }
    stopped = {**good, "state": "not correctable", "remedy": "", "at": ""}
    crashed = {"world": "w", "oracle": truth, "error": "ValueError: no"}
    found = tally.tally("w", [good, stopped, crashed])
    assert (found.n, found.errors) == (3, ("ValueError: no",))
    assert (found.advised, found.ordinary, found.oracle) == (
        tally.Share(1, 1),
        tally.Share(0, 2),
        tally.Share(2, 2),
    )
    assert found.width == pytest.approx(3.0)
    assert found.against_oracle == pytest.approx(0.6 / (2 * tally.Z * 0.1))
    assert found.remedies == {"cluster-robust": 1, "none": 1}
    assert found.factor_held == tally.Share(2, 2)


# ---- a small study -------------------------------------------------------------------------------


def test_replicate_reports_the_examination_and_can_be_repeated():
    name = "independent, 12 groups of 5, x in rows"
    one, again = lines(name, 1)[0], lines(name, 1)[0]
    for line in (one, again):
        line.pop("seconds")
    assert json.dumps(one) == json.dumps(again)  # as text: NaN equals NaN
    frame, _ = BY_NAME[name].table(np.random.default_rng([study.SEED, zlib.crc32(name.encode()), 0]))
    fit = smf.ols("y ~ x", frame).fit()
    naive = next(row for row in one["rows"] if row[0] == "ordinary")
    low, high = fit.conf_int().loc["x"]
    assert naive[2:7] == pytest.approx([fit.params["x"], fit.bse["x"], 58, low, high], rel=1e-9)


def test_group_level_predictor_is_covered_where_the_ordinary_interval_is_not():
    found = tally.tally("", lines("ICC 0.2, 12 equal groups, x of groups", 30))
    assert not found.errors
    assert found.advised.value > 0.95 - 4 * np.sqrt(0.95 * 0.05 / 30)
    assert found.advised.value >= found.ordinary.value
    assert found.width > 1.2
    # The ledger's factor: true 1.43; its own median over replicates moves by about 0.05
    assert found.factor == pytest.approx(found.true_factor, abs=0.2)


def test_two_treated_groups_are_never_given_an_interval():
    found = lines("treatment in 2 of 20 groups, ICC 0.2", 15)
    assert {line["state"] for line in found} == {"not correctable"}
    assert {line["remedy"] for line in found} == {""}


def test_strong_serial_dependence_is_found():
    found = tally.tally("", lines("ρ 0.7, 40 times, x autoregressive", 10))
    assert found.structures.get("serial", 0) >= 9
    assert found.advised.value > 0.95 - 4 * np.sqrt(0.95 * 0.05 / 10)


# ---- the page ------------------------------------------------------------------------------------


def test_page_shows_every_world_and_the_seeds_of_the_study():
    text = PAGE.read_text(encoding="utf-8")
    for world in battery.WORLDS:
        assert f"| {world.name} |" in text
    for design in nulls.DESIGNS:
        assert f"| {design.name} |" in text
    assert str(study.SEED) in text
    assert str(nulls.SEED) in text
    assert worlds.SLOPE == 0.5
