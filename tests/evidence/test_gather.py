"""Everything run together: which tests, adjusted p, verdicts, words, refusals."""

from __future__ import annotations

import math
import re
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from clingstone.covariance.fits import Fits
from clingstone.design.response import Response
from clingstone.evidence import TESTS, VERDICTS, by_id, gather, read_columns
from clingstone.evidence.finding import Evidence
from clingstone.evidence.matter import (
    GRID,
    factor_at,
    focus_directions,
    group_factors,
    serial_factors,
    spatial_factors,
)
from clingstone.evidence.read import holm
from clingstone.evidence.spatial import moran_form, site_design
from clingstone.needs import Limits
from clingstone.run import Run

from .factories import ar1, design, fits

FORBIDDEN = re.compile(r"significan|\babsent\b|\bpassed\b|assumption|!|\*|nan|-\d", re.IGNORECASE)


def everything(seed: int = 1, **how: Any) -> Fits:
    """20 wells of 10 days in 20 clinics, with a little of each structure and a missed curve."""
    rng = np.random.default_rng(seed)
    G, T = 24, 10
    g, t = np.repeat(np.arange(G), T), np.tile(np.arange(T), G)
    xy, x = rng.uniform(size=(G, 2)) * 30, rng.standard_normal(G * T)
    e = ar1(0.4, (T, G), rng).T.ravel() + 0.7 * rng.standard_normal(G)[g]
    made = design(x, groups={"clinic": g}, time=t, who=g, xy=xy, site=g)
    return fits(made, 1 + x + 0.4 * x**2 + e, **how)


def test_every_registered_test_has_its_words_and_source() -> None:
    ids = [t.id for t in TESTS]
    assert len(set(ids)) == len(ids)
    for test in TESTS:
        assert test.null.endswith(".")
        assert test.alternative.endswith(".")
        assert by_id(test.id) is test
        assert re.fullmatch(r"[a-z-]+-\d{4}", test.source) or test.id == "duplicates"
    assert {t.family for t in TESTS if t.primary} == {"group", "serial", "spatial"}


def test_all_families_are_read_alone_and_given_the_others() -> None:
    found = gather(everything())
    tests = {f.test for f in found}
    assert {"group-f", "intraclass-correlation", "panel-durbin-watson", "moran", "variogram"} <= tests
    assert {"functional-form", "trend", "trend-surface", "heteroscedasticity", "duplicates"} <= tests
    assert "durbin-watson" not in tests
    assert {f.test for f in found if f.given} >= {"group-f", "panel-durbin-watson", "functional-form"}
    curve = next(f for f in found if f.test == "functional-form" and f.given)
    assert curve.verdict == "present"
    assert curve.p_adjusted == pytest.approx(curve.p)  # one covariate
    assert found.get("group-f", "clinic") is not None
    assert len(found.to_frame()) == len(found)


def test_sentences_lead_with_the_effect_and_stay_plain() -> None:
    for finding in gather(everything()):
        text = finding.sentence
        assert not FORBIDDEN.search(text), text
        assert text[0].isupper()
        assert text.rstrip().endswith(".")
        effect = re.search(r"\d", text)
        shown = re.search(r"\bp (=|below)", text)
        assert shown is None or (effect is not None and effect.start() < shown.start()), text


def test_primary_tests_are_adjusted_by_holm_over_the_structures() -> None:
    found = [f for f in gather(everything()) if f.primary]
    assert {f.structure for f in found} == {"group", "serial", "spatial"}
    expected = holm(np.array([f.p for f in found]))
    assert [f.p_adjusted for f in found] == pytest.approx(expected.tolist())
    assert all(f.p_adjusted is None for f in gather(everything()) if f.test in ("geary", "outliers"))


@given(st.lists(st.floats(0, 1), min_size=1, max_size=8))
def test_holm_equals_the_step_by_step_rule(p: list[float]) -> None:
    out, worst = [0.0] * len(p), 0.0
    for step, i in enumerate(sorted(range(len(p)), key=lambda i: p[i])):
        worst = max(worst, min(1.0, (len(p) - step) * p[i]))
        out[i] = worst
    np.testing.assert_allclose(holm(np.array(p)), out, atol=1e-12)


def test_holm_leaves_out_what_is_not_known() -> None:
    out = holm(np.array([[0.01, 0.02], [np.nan, 0.04], [0.03, np.nan]]))
    np.testing.assert_allclose(out, [[0.02, 0.04], [np.nan, 0.04], [0.03, np.nan]])


def test_many_columns_say_what_one_column_says() -> None:
    one = everything()
    y = one.design.Q @ one.response.coef[:, 0] + one.response.residual[:, 0]
    many = Fits(Response.of(one.design, np.column_stack([y, np.roll(y, 7), y[::-1]])), Run())
    alone, columns = read_columns(one, given=True), read_columns(many, given=True)
    assert [(i.test.id, i.about.key, i.given) for i in alone.items] == [
        (i.test.id, i.about.key, i.given) for i in columns.items
    ]
    assert columns.p.shape == (len(columns.items), 3)
    drawn = {"intraclass-correlation", "variogram", "breusch-godfrey", "ljung-box"}
    for k, item in enumerate(alone.items):
        if item.test.id not in drawn and not item.given:
            assert columns.p[k, 0] == pytest.approx(alone.p[k, 0], rel=2e-2, abs=1e-6, nan_ok=True)
            assert columns.verdict[k, 0] == alone.verdict[k, 0]


def test_same_seed_same_findings() -> None:
    first, second = gather(everything()), gather(everything())
    for a, b in zip(first, second, strict=True):
        assert (a.sentence, a.curve) == (b.sentence, b.curve)
        assert a.p == b.p or (math.isnan(a.p) and math.isnan(b.p))


# ---- verdicts ---------------------------------------------------------------------------


def verdict(found: Evidence, test: str) -> str:
    return next(f.verdict for f in found if f.test == test)


def test_silence_is_unclear_while_the_effect_could_matter_and_not_afterwards() -> None:
    rng = np.random.default_rng(2)
    few = np.repeat(np.arange(6), 12)
    between = np.repeat(rng.standard_normal(6), 12)  # a focus term at the level of the clinic
    y = rng.standard_normal(72)
    y -= np.bincount(few, y)[few] / 12
    s2, means = float(y @ y) / 66, rng.standard_normal(6)
    means *= np.sqrt(1.2 * s2 / 12 / np.var(means, ddof=1))  # so that F is 1.2 without covariates
    y += means[few]
    assert verdict(gather(fits(design(between, groups={"clinic": few}), y)), "group-f") == "unclear"
    # The same rows, but the term varies within clinics: its interval would hardly move.
    within = rng.standard_normal(72)
    within -= np.bincount(few, within)[few] / 12
    found = gather(fits(design(within, groups={"clinic": few}), y))
    assert verdict(found, "group-f") == "not detected"


def test_few_sites_are_unclear_at_best() -> None:
    rng = np.random.default_rng(3)
    xy = rng.uniform(size=(12, 2))
    made = fits(design(n=12, xy=xy), 8 * xy[:, 0] + 0.1 * rng.standard_normal(12))
    found = gather(made)
    moran = next(f for f in found if f.test == "moran")
    assert moran.p < 0.05
    assert moran.verdict == "unclear"
    assert any("too few for a verdict" in c for c in moran.caveats)


def test_a_perfect_fit_is_not_an_error() -> None:
    t = np.arange(30.0)
    found = gather(fits(design(t, groups={"g": t // 5}, time=t), 3 + 2 * t))
    tested = [f for f in found if f.test != "duplicates"]
    assert tested
    assert {f.verdict for f in tested} == {"not applicable"}
    assert all(math.isnan(f.p) for f in tested)
    assert any("leaves nothing over" in f.sentence for f in tested)


def test_refusals_become_findings_with_their_reason() -> None:
    rng = np.random.default_rng(4)
    found = gather(fits(design(n=6, time=np.arange(6), groups={"g": np.arange(6)}), rng.standard_normal(6)))
    order = next(f for f in found if f.structure == "serial")
    assert order.verdict == "not applicable"
    assert "longest series has 6 rows" in order.sentence
    group = next(f for f in found if f.test == "group-f")
    assert "every g has a single row" in group.sentence


def test_undeclared_structures_are_not_mentioned() -> None:
    rng = np.random.default_rng(5)
    found = gather(fits(design(rng.standard_normal(40)), rng.standard_normal(40)))
    assert {f.structure for f in found} == {"mean", "lookalike"}


def test_residuals_alone_carry_their_caveat() -> None:
    rng = np.random.default_rng(6)
    made = design(n=60, groups={"g": np.repeat(np.arange(10), 6)}, time=np.arange(60), known=False)
    found = gather(fits(made, rng.standard_normal(60)))
    assert all(any("Only residuals" in c for c in f.caveats) for f in found if f.primary)
    mean = next(f for f in found if f.test == "trend")
    assert mean.verdict == "not applicable"


def test_verdict_codes_are_ordered() -> None:
    assert VERDICTS == ("not applicable", "not detected", "unclear", "present")
    assert Limits().sites_verdict == 20


# ---- could it matter --------------------------------------------------------------------


def test_factors_equal_dense_variances() -> None:
    rng = np.random.default_rng(7)
    who = np.repeat(np.arange(8), 6)
    time = np.tile(np.arange(6), 8)
    xy = rng.uniform(size=(8, 2))
    made = design(
        rng.standard_normal(48), rng.standard_normal(8)[who], groups={"g": who}, time=time, who=who,
        xy=xy, site=who,
    )  # fmt: skip
    a = focus_directions(made)
    apart = np.abs(np.subtract.outer(time, time))
    group, serial = group_factors(made, "g"), serial_factors(made)
    for i, rho in enumerate(GRID):
        V = np.eye(48) * (1 - rho) + rho * np.equal.outer(who, who)
        assert group[i] ** 2 == pytest.approx(max(np.diag(a.T @ V @ a)))
        V = np.where(np.equal.outer(who, who), rho**apart if rho else np.eye(48), 0.0)
        assert serial[i] ** 2 == pytest.approx(max(np.diag(a.T @ V @ a)), rel=2e-2)
    alone = design(xy[:, 0], n=8, xy=xy)
    W, b = alone.neighbours[0].W.toarray(), focus_directions(alone)
    factors = spatial_factors(alone, "knn:4", np.random.default_rng(0))
    form = moran_form(site_design(alone), "knn:4")
    reach = max(abs(form.low), form.high, 1.0)
    for i, lam in enumerate(GRID):
        A = np.linalg.inv(np.eye(8) - lam * W / reach)
        V = A @ A.T
        expected = max(np.diag(b.T @ V @ b)) / (np.trace(V) / 8)
        assert factors[i] ** 2 == pytest.approx(expected, rel=1e-8)


def test_factor_between_grid_points_never_falls() -> None:
    factors = np.linspace(1, 2, len(GRID))
    factors[5] = 1.0
    out = factor_at(factors, np.linspace(0, 1, 50))
    assert np.all(np.diff(out) >= 0)
    assert factor_at(factors, np.array([-0.3]))[0] == 1.0


# ---- anything goes ----------------------------------------------------------------------


def odd_design(rng: np.random.Generator) -> Any:
    """Small designs of every mixture: ties, gaps, lone rows, weights, nested and crossed groups."""
    n = int(rng.integers(6, 60))
    g = np.sort(rng.integers(0, int(rng.integers(1, n // 2 + 1)), n))
    how: dict[str, Any] = {}
    if rng.random() < 0.6:
        how["groups"] = {"a": g // 2, "a/b": g} if rng.random() < 0.5 else {"a": rng.integers(0, 4, n)}
    if rng.random() < 0.6:
        who, whole = g if rng.random() < 0.6 else np.zeros(n, int), bool(rng.random() < 0.7)
        steps = rng.integers(0 if rng.random() < 0.2 else 1, 3, n) if whole else rng.exponential(1, n)
        time = np.concatenate([np.cumsum(steps[who == k]) for k in np.unique(who)])
        how.update(time=time, who=who, whole=whole)
    site = np.unique(rng.integers(0, n, n), return_inverse=True)[1]
    if rng.random() < 0.6 and site.max() > 5:
        how.update(xy=rng.uniform(size=(site.max() + 1, 2)), site=site)
    if rng.random() < 0.25:
        how["weights"] = rng.uniform(0.2, 3, n)
    return design(*(rng.standard_normal(n) for _ in range(int(rng.integers(0, 3)))), n=n, **how)


@pytest.mark.filterwarnings("error")
@pytest.mark.parametrize("seed", range(24))
def test_no_design_breaks_the_tests_and_every_interval_holds_its_estimate(seed: int) -> None:
    rng = np.random.default_rng(seed)
    made = odd_design(rng)
    y = (rng.standard_normal(made.n), rng.integers(0, 2, made.n), 1e8 + rng.standard_normal(made.n))[seed % 3]
    for f in gather(fits(made, y)):
        assert math.isnan(f.p) or 0 <= f.p <= 1
        assert "not known" not in f.sentence
        assert " nan" not in f.sentence
        if not math.isnan(f.low):
            assert f.low <= f.estimate + 1e-9, f.test
            assert f.estimate <= f.high + 1e-9, f.test
