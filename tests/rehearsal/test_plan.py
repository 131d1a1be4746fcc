"""Plans against textbook formulas, dense matrices and the design at hand."""

from __future__ import annotations

import io

import numpy as np
import pandas as pd
import pytest
from scipy import stats

import clingstone
from clingstone.display import significant
from clingstone.needs import InputError, NotSupported
from clingstone.rehearsal.enlarge import enlarged, units
from clingstone.rehearsal.plan import Basics, planned, stated, width_of
from clingstone.run import Run
from clingstone.writeup.planned import plate
from rehearsal.test_verbs import call
from rehearsal.worlds import stream, trial, wells


def basics(f, node, term):
    model = f[frozenset(node)]
    held = tuple(np.flatnonzero(model.at_bound[:, 0]).tolist())
    return Basics(f.design, model.node, model.theta[:, 0], float(model.sigma2[0]), term, (), held)


# ---- formulas ------------------------------------------------------------------------------------


@pytest.mark.parametrize(("G", "m", "icc"), [(10, 5, 0.02), (24, 30, 0.1), (40, 8, 0.5)])
def test_a_two_arm_cluster_trial_has_the_design_effect_of_the_textbook(G, m, icc):
    """Var = 4σ²[1 + (m − 1)ρ]/(Gm) and G − 2 df (Donner & Klar 2000, Design and Analysis of Cluster
    Randomization Trials, chapter 5)."""
    found = clingstone.plan(groups=[G], rows=[m], icc=icc, sd=3.0).scenarios[0]
    want = np.sqrt(4 * 9 * (1 + (m - 1) * icc) / (G * m))
    assert found.se == pytest.approx(want, rel=1e-9)
    assert found.df == pytest.approx(G - 2, rel=1e-6)
    assert found.width == pytest.approx(2 * stats.t.ppf(0.975, G - 2) * want, rel=1e-6)


def test_an_arm_within_groups_gains_from_likeness():
    """Var = 4σ²(1 − ρ)/(Gm) where the arms alternate inside each group."""
    found = clingstone.plan(groups=[12], rows=[10], icc=0.3, varies="row").scenarios[0]
    assert found.se == pytest.approx(np.sqrt(4 * 0.7 / 120), rel=1e-9)


@pytest.mark.parametrize("rho", [0.2, 0.8, -0.3])
def test_visits_count_for_less_the_more_they_repeat_each_other(rho):
    """Under AR(1) the information on a mean is 1'R⁻¹1 = (T − (T − 2)ρ)/(1 + ρ)."""
    T, G = 9, 20
    found = clingstone.plan(groups=[G], rows=[T], rho=rho).scenarios[0]
    each = (T - (T - 2) * rho) / (1 + rho)
    assert found.se == pytest.approx(np.sqrt(4 / (G * each)), rel=1e-9)


def test_places_agree_with_the_dense_formula():
    given = stated(30, 1, icc=None, rho=None, reach=0.4, sd=1.0, varies="unit")
    se, df, width = width_of(given.design, given, Run())
    sites = given.design.spatial
    D = np.sqrt(((sites.xy[:, None] - sites.xy[None]) ** 2).sum(axis=2))
    V = 0.9 * np.exp(-2.99573 * D / 0.4) + 0.1 * np.eye(30)
    X = given.design.Q @ given.design.basis.R
    phi = np.linalg.inv(X.T @ np.linalg.solve(V, X))
    assert se == pytest.approx(np.sqrt(phi[1, 1]), rel=1e-9)
    assert 1 <= df <= 28
    assert width > 2 * se


# ---- a design made larger ----------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("world", "node", "term"),
    [(trial, ["group:clinic"], "arm"), (stream, ["serial"], "trend"), (wells, ["spatial"], "east")],
)
def test_the_size_at_hand_is_the_design_at_hand(world, node, term):
    f = world()
    given = basics(f, node, term)
    same = enlarged(f.design, units(f.design).count, 1.0)
    here = width_of(f.design, given, f.run)
    assert width_of(same, given, f.run)[0] == pytest.approx(here[0], rel=1e-9)
    found = planned(given, f.run, None, None, None, None)
    assert found.scenarios[0].relative == 1.0
    assert found.scenarios[0].se == pytest.approx(here[0], rel=1e-9)


def test_twice_the_groups_halve_the_variance_and_twice_the_rows_do_not():
    f = trial(G=12, m=10)
    given = basics(f, ["group:clinic"], "arm")
    here = width_of(f.design, given, f.run)[0]
    groups = width_of(enlarged(f.design, 24, 1.0), given, f.run)[0]
    rows = width_of(enlarged(f.design, 12, 2.0), given, f.run)[0]
    assert groups == pytest.approx(here / np.sqrt(2), rel=1e-9)
    assert groups < rows < here
    said = planned(given, f.run, [24], [20.0], None, None).better
    assert "More clinics buy more precision" in said


def test_added_visits_follow_the_last_one_and_added_places_lie_on_the_map():
    f = stream(n=12)
    longer = enlarged(f.design, 1, 2.0).serial
    assert longer.tick.tolist() == list(range(24))
    f = wells(S=25)
    more = enlarged(f.design, 60, 1.0)
    assert more.spatial.count == 60
    low, high = f.design.spatial.xy.min(axis=0), f.design.spatial.xy.max(axis=0)
    assert np.all(more.spatial.xy >= low)
    assert np.all(more.spatial.xy <= high)
    old = {tuple(p) for p in f.design.spatial.xy}
    assert sum(tuple(p) in old for p in more.spatial.xy) == 25
    # A copied place has the easting of the place nearest to it, so the predictor stays smooth.
    x = (more.Q @ more.basis.R)[:, 1]
    where = more.spatial.xy[more.spatial.part.codes][:, 0]
    assert np.corrcoef(x, where)[0, 1] > 0.8


def test_what_a_group_repeats_is_its_own():
    f = trial(G=6, m=6)
    more = enlarged(f.design, 12, 1.0)
    assert more.group.levels[0].count == 12
    X, Y = f.design.Q @ f.design.basis.R, more.Q @ more.basis.R
    assert np.sort(Y[:, 2]) == pytest.approx(np.sort(np.r_[X[:, 2], X[:, 2]]))


def test_costs_name_the_best_buy():
    found = clingstone.plan(groups=[10, 20], rows=[5, 50], icc=0.1, cost_group=1000, cost_row=1)
    costs = {(s.units, s.rows): s.cost for s in found.scenarios}
    assert costs[(20, 50.0)] == 20 * 1000 + 1000
    best = min(found.scenarios, key=lambda s: s.cost * s.width**2)
    assert f"For the money, {best.units} units of {best.rows:.0f}" in found.better
    frame = found.to_frame()
    assert isinstance(frame, pd.DataFrame)
    assert list(frame["units"]) == [s.units for s in found.scenarios]
    assert "cost" in str(found)


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        ({"groups": [10], "rows": [5]}, "state one of"),
        ({"groups": [10], "rows": [5], "icc": 0.1, "rho": 0.1}, "state one of"),
        ({"groups": [10], "rows": [5], "icc": 1.0}, "lies outside"),
        ({"groups": [10], "rows": [5], "rho": -1.0}, "lies outside"),
        ({"groups": [10], "rows": [5], "range": 0.0}, "not positive"),
        ({"groups": [10], "rows": [5], "icc": 0.1, "sd": -1.0}, "not positive"),
        ({"groups": [1], "rows": [5], "icc": 0.1}, "cannot be planned"),
        ({"icc": 0.1}, "needs groups and rows"),
        ({"groups": [10], "rows": [5], "icc": 0.1, "varies": "tree"}, "not 'unit' or 'row'"),
    ],
)
def test_numbers_that_cannot_be_planned_are_refused(arguments, words):
    with pytest.raises(InputError, match=words):
        clingstone.plan(**arguments)


def test_too_few_groups_for_the_model_are_left_out_with_the_reason():
    f = trial(G=12, m=6)
    found = planned(basics(f, ["group:clinic"], "arm"), f.run, [3], None, None, None)
    assert all(s.units == 12 for s in found.scenarios)
    assert any("3 ×" in line and "left out" in line for line in found.assumptions)
    with pytest.raises(NotSupported, match="cannot tell"):
        enlarged(f.design, 1, 1.0)


def test_a_term_that_is_not_there_and_numbers_beside_data_are_refused():
    rng = np.random.default_rng(0)
    table = pd.DataFrame({"y": rng.normal(size=60), "x": rng.normal(size=60), "g": np.repeat(range(10), 6)})
    found = clingstone.examine(table, model="y ~ x", group="g", rehearsal="none")
    made = clingstone.plan(found, groups=[20], rows=[6])
    assert made.term == "x"
    assert made.scenarios[-1].relative < 0.8
    with pytest.raises(InputError, match="no coefficient 'z'"):
        clingstone.plan(found, term="z")
    with pytest.raises(InputError, match="stated where there are no data"):
        clingstone.plan(found, icc=0.1)


def test_the_command_prints_a_plan(capsys):
    assert call("plan", "--icc", "0.05", "--groups", "20,40", "--rows", "10") == 0
    assert "More units buy more precision" in " ".join(capsys.readouterr().out.split())
    assert call("plan", "--icc", "0.05", "--groups", "20,40", "--rows", "10", "--csv") == 0
    assert capsys.readouterr().out.startswith("units,rows,df,width,relative")
    assert call("plan", "--icc", "0.05", "--groups", "20,x", "--rows", "10") == 2
    assert "no list of whole numbers" in capsys.readouterr().err
    assert call("plan", "nowhere.csv", "--model", "y ~ x") == 2
    assert "nowhere.csv" in capsys.readouterr().err
    assert call("plan", "--model", "y ~ x", "--groups", "20", "--rows", "10", "--icc", "0.1") == 2
    assert "but no data" in capsys.readouterr().err
    assert call("plan", "--icc", "0.05", "--groups", "20", "--rows", "10", "--figure", "plan.pdf") == 2
    assert "Name it with .svg or .png" in capsys.readouterr().err


def test_the_command_plans_from_a_file_and_draws(tmp_path, monkeypatch, capsys):
    """The same widths as from an examination of the file; the figure is drawn and says them in words."""
    monkeypatch.chdir(tmp_path)
    rng = np.random.default_rng(1)
    g = np.repeat(range(10), 6)
    table = pd.DataFrame(
        {"y": rng.normal(size=60) + rng.normal(size=10)[g], "x": rng.normal(size=60), "g": g}
    )
    table.to_csv("rows.csv", index=False)
    words = ["plan", "rows.csv", "--model", "y ~ x", "--group", "g", "--groups", "20", "--rows", "6,12"]
    assert call(*words, "--csv", "--figure", "plan.svg", "--quiet") == 0
    shown = pd.read_csv(io.StringIO(capsys.readouterr().out))
    found = clingstone.examine("rows.csv", model="y ~ x", group="g", rehearsal="none")
    want = clingstone.plan(found, groups=[20], rows=[6, 12]).to_frame()
    np.testing.assert_allclose(shown["width"], want["width"])
    svg = (tmp_path / "plan.svg").read_text()
    assert "12 rows</text>" in svg
    assert f"is expected to be {significant(want['width'][0], 3)} wide" in svg
    assert "saved" not in [p.name for p in tmp_path.iterdir()]


def test_the_figure_of_one_series_runs_along_its_rows():
    f = stream()
    made = planned(basics(f, ["serial"], "rain"), f.run, None, None, None, None)
    (line,) = plate(made).paint(660.0).axes[0].lines[:1]
    assert line.get_xdata().tolist() == sorted(s.rows for s in made.scenarios)
    assert "series of 60 rows" in plate(made).alt
