"""The study itself is held: its worlds are what they say, its counting is right, its page is whole."""

import json
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
import statsmodels.formula.api as smf
from scipy import stats

from tests.validation import battery, nulls, study, tally, worlds
from tests.validation.oracle import detected, oracle, power
from tests.validation.write import page

PAGE = Path(__file__).parents[2] / "docs" / "validation.md"
BY_NAME = {world.name: world for world in battery.WORLDS}


def lines(name: str, designs: int) -> list[study.Line]:
    return [study.measure(study.RULES, name, d) for d in range(designs)]


# ---- worlds --------------------------------------------------------------------------------------


def test_names_are_unique_and_every_covariance_is_one():
    assert len(BY_NAME) == len(battery.WORLDS) > 70
    for world in battery.WORLDS:
        truth = world.draw(np.random.default_rng(1))
        Y = truth.y(np.random.default_rng(2), 3)
        assert Y.shape == (len(truth.table(Y[:, 0])), 3) == (len(truth.V), 3)
        np.testing.assert_allclose(truth.V, truth.V.T, atol=1e-12)
        assert np.linalg.eigvalsh(truth.V)[0] > 1e-6


@pytest.mark.parametrize(
    "name",
    [
        "ICC 0.2, 12 equal groups, x of groups",
        "ρ 0.7, 40 times, x a trend",
        pytest.param("nested 8 × 3 × 4, x of a", marks=pytest.mark.slow),
    ],
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
    found = oracle(truth, frame[["y"]].to_numpy())
    ols = smf.ols("y ~ x", frame).fit()
    inflated = 1 + 5 * 0.2
    spread = np.sum((truth.x - truth.x.mean()) ** 2)
    assert found["estimates"][0] == pytest.approx(ols.params["x"], rel=1e-8)
    assert found["se"] == pytest.approx(np.sqrt(inflated / spread), rel=1e-8)
    expected = (72 - 2 * inflated) / 70  # E s²: both columns are constant within groups
    assert found["factor"] == pytest.approx(np.sqrt(inflated / expected), rel=1e-8)


def test_the_oracle_finds_what_the_f_test_of_groups_finds():
    """With one level of equal groups and the constant alone, the ratio falls as the F of groups rises."""
    g = np.repeat(np.arange(12), 5)
    x = np.arange(60.0) % 5  # the same in every group: it takes nothing from between groups
    truth = worlds.Truth(x, 0.2 * worlds.same(g) + 0.8 * np.eye(60), {"g": g})
    Y = truth.y(np.random.default_rng(3), 400)
    found = detected(truth, "group", np.column_stack([np.ones(60), x]), Y)
    means = Y.reshape(12, 5, -1).mean(axis=1)
    between = 5 * ((means - means.mean(axis=0)) ** 2).sum(axis=0)
    X = np.column_stack([np.ones(60), x])
    whole = Y - X @ np.linalg.lstsq(X, Y, rcond=None)[0]
    F = between / 11 / (((whole**2).sum(axis=0) - between) / 47)
    assert F[found].min() > F[~found].max()
    assert abs(stats.f.sf(F[found].min(), 11, 47) - 0.05) < 0.02  # 2,000 draws give the 5 % point


def test_the_oracle_rejects_at_its_level_when_the_other_structure_is_all_there_is():
    both = worlds.panel(15, 8, 0.3, 0.5, "ar")(np.random.default_rng(1))
    X = np.column_stack([np.ones(120), both.x])
    rng = np.random.default_rng(2)
    for family, V in both.without.items():
        E = np.linalg.cholesky(V) @ rng.standard_normal((120, 2000))
        assert np.mean(detected(both, family, X, E)) == pytest.approx(0.05, abs=0.02)  # 4 errors of 0.005


def test_power_is_that_of_the_f_test_where_the_two_are_one():
    """Equal groups, x the same in each: F over 1 + 5 · 0.2/0.8 has 11 and 47 df (one of rows is x's)."""
    g = np.repeat(np.arange(12), 5)
    truth = worlds.Truth(np.arange(60.0) % 5, 0.2 * worlds.same(g) + 0.8 * np.eye(60), {"g": g})
    exact = stats.f.sf(stats.f.isf(0.05, 11, 47) / (1 + 5 * 0.25), 11, 47)
    # 2,000 draws give the 5 % point (0.005, some 0.012 in power) and 2,000 the power (0.01): 3 errors
    assert power(truth, {"group"}) == pytest.approx(exact, abs=0.05)


def test_the_nearest_covariance_is_the_member_itself_and_has_the_least_power():
    def chain(rho: float) -> worlds.Array:
        return np.kron(np.eye(15), worlds.toeplitz(8, rho))

    np.testing.assert_allclose(worlds.nearest(chain(0.4), chain), chain(0.4), atol=1e-4)
    both = worlds.panel(15, 8, 0.3, 0.5, "ar")(np.random.default_rng(1))
    X = np.column_stack([np.ones(120), both.x])
    E = np.linalg.cholesky(both.V) @ np.random.default_rng(2).standard_normal((120, 2000))
    others = [replace(both, without={"group": chain(rho)}) for rho in (0.5, 0.8)]
    least = min(np.mean(detected(other, "group", X, E)) for other in others)
    assert np.mean(detected(both, "group", X, E)) < least - 0.1


# ---- counting ------------------------------------------------------------------------------------


def test_share_and_its_error():
    one = tally.Share(((90, 100),))
    assert (one.k, one.n, one.value) == (90, 100, 0.9)
    assert one.error == pytest.approx(np.sqrt((90.5 / 101) * (10.5 / 101) / 100))
    assert one.below(0.97)
    assert not one.below(0.95)
    assert not tally.Share(()).below(0.95)


def test_designs_that_differ_make_a_share_less_certain():
    # Two designs of 50: 40 and 50. As clusters: sqrt(2 (5² + 5²))/100 = 0.1; as independent draws 0.03.
    assert tally.Share(((40, 50), (50, 50))).error == pytest.approx(0.1)
    assert tally.Share(((45, 50), (45, 50))).error == tally.Share(((90, 100),)).error


def test_tally_counts_by_hand():
    good = {
        "state": "supported",
        "remedy": "cluster-robust",
        "at": "g",
        "structures": ["group"],
        "protected": [],
        "doubt": False,
        "advised": [0.4, 1.0],
        "ordinary": [0.6, 0.8],
        "factor": [1.0, 1.1, 1.3],
    }
    stopped = {**good, "state": "not correctable", "remedy": "", "at": "", "advised": None, "doubt": True}
    twice = {**good, "structures": ["group", "serial"]}
    line = {
        "arm": "rules",
        "world": "w",
        "design": 0,
        "oracle": {"estimates": [0.5, 0.6, 0.8], "se": 0.1, "factor": 1.2},
        "agreed": True,
        "seconds": 0.3,
        "columns": [good, stopped, twice],
    }
    crashed = {"arm": "rules", "world": "w", "design": 1, "error": "ValueError: no", "seconds": 0.1}
    world = worlds.World("w", worlds.groups(2, 2, 0.2, "row"), battery.GROUP, battery.G)
    found = tally.tally(world, [line, crashed])
    assert (found.n, found.designs, found.faults) == (3, 2, ("ValueError: no",))
    counts = (found.exact, found.false, found.missed, found.doubted, found.refused)
    assert [one.k for one in counts] == [2, 1, 0, 1, 1]
    assert all(one.n == 3 for one in counts)
    intervals = (found.advised, found.ordinary, found.oracle)
    assert [(one.k, one.n) for one in intervals] == [(2, 2), (0, 3), (2, 3)]
    assert found.width == pytest.approx(3.0)
    assert found.against_oracle == pytest.approx(0.6 / (2 * tally.Z * 0.1))
    assert found.remedies == {"cluster-robust": 2, "none": 1}
    assert (found.factor_held.k, found.agreed.k, found.by_remedy["cluster-robust g"].n) == (3, 1, 2)
    assert found.seconds == pytest.approx(0.1)


def test_what_has_been_measured_is_not_measured_again():
    some = [world for world in battery.WORLDS if world.batch == 50][:2]
    line = {"arm": study.RULES, "world": some[0].name, "design": 0, "seconds": 3.0}
    queue = study.Queue(some, study.RULES, 100, [line])
    jobs = iter(queue.take, None)
    assert [(name, d) for _, name, d in jobs] == [(some[1].name, 0), (some[1].name, 1), (some[0].name, 1)]


# ---- a small study -------------------------------------------------------------------------------

CHECKED = (
    "independent, 12 groups of 5, x in rows",
    "ρ 0.7, 40 times, x autoregressive",
    "missed curve in x, 12 groups",
)


@pytest.mark.parametrize("name", CHECKED)
def test_columns_together_are_examined_as_at_the_front_door(name):
    world = BY_NAME[name]
    truth = world.draw(np.random.default_rng(7))
    Y = truth.y(np.random.default_rng(8), 4)
    for b, one in enumerate(study.together(world, truth, Y, 7)):
        assert study.agree(one, study.through_the_door(world, truth.table(Y[:, b]), 7, "none"))


def test_a_difference_between_the_two_ways_would_be_seen():
    world = BY_NAME[CHECKED[0]]
    truth = world.draw(np.random.default_rng(7))
    Y = truth.y(np.random.default_rng(8), 2)
    one, other = study.together(world, truth, Y, 7)
    assert study.agree(one, one)
    assert not study.agree(one, other)
    assert not study.agree(one, {**one, "structures": ["group"]})


def test_a_design_reports_its_columns_and_can_be_repeated():
    name = "independent, 12 groups of 5, x in rows"
    one, again = lines(name, 1)[0], lines(name, 1)[0]
    assert one["agreed"] is True
    for line in (one, again):
        line.pop("seconds")
    assert json.dumps(one) == json.dumps(again)  # as text: NaN equals NaN
    world = BY_NAME[name]
    truth, rng = world.design(0)
    Y = truth.y(rng, world.batch)
    for b in (0, 49):
        fit = smf.ols("y ~ x", truth.table(Y[:, b])).fit()
        assert one["columns"][b]["ordinary"] == pytest.approx(list(fit.conf_int().loc["x"]), rel=1e-9)


def test_group_level_predictor_is_covered_where_the_ordinary_interval_is_not():
    name = "ICC 0.2, 12 equal groups, x of groups"
    found = tally.tally(BY_NAME[name], lines(name, 2))
    assert not found.faults
    assert found.advised.value > 0.95 - 4 * np.sqrt(0.95 * 0.05 / 100)
    assert found.advised.value >= found.ordinary.value
    assert found.width > 1.2
    # The ledger's factor: true 1.43; its own median over replicates moves by about 0.05
    assert found.factor == pytest.approx(found.true_factor, abs=0.2)


def test_two_treated_groups_are_never_given_an_interval():
    (line,) = lines("treatment in 2 of 20 groups, ICC 0.2", 1)
    assert {one["state"] for one in line["columns"]} == {"not correctable"}
    assert {one["advised"] for one in line["columns"]} == {None}


@pytest.mark.slow
def test_strong_serial_dependence_is_found():
    name = "ρ 0.7, 40 times, x autoregressive"
    found = tally.tally(BY_NAME[name], lines(name, 1))
    assert found.exact.value >= 0.9
    assert found.advised.value > 0.95 - 4 * np.sqrt(0.95 * 0.05 / 20)


# ---- the page ------------------------------------------------------------------------------------


def test_page_shows_every_world_and_the_seeds_of_the_study():
    text = PAGE.read_text(encoding="utf-8")
    for world in battery.WORLDS:
        assert f"| {world.name} |" in text
    for design in nulls.DESIGNS:
        assert f"| {design.name} |" in text
    assert str(worlds.SEED) in text
    assert str(nulls.SEED) in text
    assert worlds.SLOPE == 0.5


def test_the_page_is_made_from_the_lines_of_a_study(tmp_path):
    names = ("independent, 12 groups of 5, x in rows", "treatment in 2 of 20 groups, ICC 0.2")
    some = [line for name in names for line in lines(name, 1)]
    nothing = tmp_path / "nulls.jsonl"
    nothing.write_text("", encoding="utf-8")
    text, families = page(some, nothing, "abc")
    assert [len(found) for found in families.values()] == [1, 1, 0, 0, 0, 0, 0]
    assert "on 2 tables and was so on 2" in " ".join(text.split())
    assert f"| {names[1]} | 50 (1) |" in text
    assert "at commit abc" in text
