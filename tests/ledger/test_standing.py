"""Reading the table of alone × given all the others, restricted likelihood ratios, the adequate set."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy import stats

from clingstone.evidence import TESTS, gather
from clingstone.ledger.ledger import weigh
from clingstone.ledger.standing import Seen, judge, restricted_lr
from clingstone.run import one_thread
from tests.ledger import factories as make

NAN = float("nan")


def seen(key: str, alone: float, given: float, widens: bool = False, matters: bool = False) -> Seen:
    family = "group" if key.startswith("group:") else key
    return Seen(
        key, family, key.split(":")[-1], alone, alone, given, (), "", widens or matters, 1.5, "x", widens
    )


def verdicts(*rows: Seen) -> list[tuple[str, str]]:
    return [(s.verdict, s.because) for s in judge(rows)]


def test_alone_and_given_is_present():
    (group, _), (serial, _) = verdicts(seen("group:ward", 0.001, 0.002), seen("serial", 0.6, 0.7))
    assert (group, serial) == ("present", "not detected")


def test_a_signal_that_another_explains_is_not_a_second_structure():
    (serial, because), _ = verdicts(seen("serial", 0.001, 0.4), seen("group:ward", 0.001, 0.001))
    assert serial == "not detected"
    assert "explained by ward" in because


def test_an_explained_signal_that_could_still_matter_is_unclear():
    (serial, because), _ = verdicts(seen("serial", 0.001, 0.4, widens=True), seen("group:ward", 0.001, 0.001))
    assert serial == "unclear"
    assert "may be explained by ward" in because
    assert "1.5 times" in because


def test_two_that_cannot_be_told_apart_are_both_present():
    out = verdicts(seen("serial", 0.001, 0.3), seen("group:ward", 0.002, 0.2))
    assert [v for v, _ in out] == ["present", "present"]
    assert all("cannot say which" in b for _, b in out)


@pytest.mark.parametrize(("p", "verdict"), [(0.02, "unclear"), (0.001, "present")])
def test_a_masked_structure_needs_more(p, verdict):
    (serial, _), _ = verdicts(seen("serial", 0.4, p), seen("group:ward", 0.001, 0.001))
    assert serial == verdict


def test_alone_without_others_rests_on_its_own_test():
    assert verdicts(seen("group:ward", 0.001, NAN))[0][0] == "present"
    assert verdicts(seen("group:ward", 0.3, NAN))[0][0] == "not detected"
    assert verdicts(seen("group:ward", 0.3, NAN, widens=True))[0][0] == "unclear"


def test_what_could_only_narrow_an_interval_is_not_called_unclear():
    """The rule of the tests: only an interval that would be too short is a reason for protection."""
    assert verdicts(seen("spatial", 0.3, NAN, matters=True))[0][0] == "not detected"


def test_a_component_without_a_test_of_its_own_rests_on_the_joint_fit():
    (site, _), _ = verdicts(seen("group:site", NAN, 0.001), seen("spatial", 0.001, 0.001))
    assert site == "present"


def repeated(rng, S: int = 25, m: int = 4, share: float = 0.5):
    """Places that each have an effect of their own, and no likeness of neighbours."""
    site, xy = np.repeat(np.arange(S), m), rng.uniform(0, 10, (S, 2))
    y = np.sqrt(share) * rng.standard_normal(S)[site] + np.sqrt(1 - share) * rng.standard_normal(S * m)
    return make.fits(make.design({"x": rng.standard_normal(S * m)}, xy=xy, site=site), y)


def test_rows_of_one_place_have_a_test_of_their_own():
    """The F of an analysis of variance by place, and Bonferroni's factor for one more structure."""
    f = repeated(np.random.default_rng(5))
    with one_thread():
        evidence = gather(f)
        found = weigh(f, evidence).of("group:site")
    d, Z = f.design, np.eye(25)[f.design.spatial.part.codes]
    y = f.response.residual[:, 0]
    both = np.column_stack([d.Q, Z])
    inside = y - both @ np.linalg.lstsq(both, y, rcond=None)[0]
    F = ((y @ y - inside @ inside) / 24) / (inside @ inside / 74)
    assert evidence.get("site-f").p == pytest.approx(stats.f.sf(F, 24, 74), rel=1e-9)
    assert found.p_alone == evidence.get("site-f").p < 1e-4
    assert found.verdict == "present"


def test_rows_of_one_place_without_likeness():
    f = repeated(np.random.default_rng(6), share=0.0)
    with one_thread():
        found = weigh(f, gather(f)).of("group:site")
    assert found.p_alone > 0.05
    assert found.verdict != "present"


def test_place_and_its_rows_seen_alone_and_neither_given_the_other_are_both_present():
    (site, because), (spatial, _) = verdicts(seen("group:site", 1e-8, 0.3), seen("spatial", 1e-4, 0.2))
    assert (site, spatial) == ("present", "present")
    assert "cannot say which" in because


def test_no_sentence_says_that_a_structure_is_absent():
    for alone in (0.001, 0.3):
        for given in (0.001, 0.3, NAN):
            for because in (
                b for _, b in verdicts(seen("serial", alone, given), seen("group:a", 0.2, given))
            ):
                assert "absent" not in because
                assert "significant" not in because


def panel(rng, tau: float, rho: float, G: int = 40, n: int = 6):
    subject, day = np.repeat(np.arange(G), n), np.tile(np.arange(n), G)
    y = tau * rng.standard_normal(G)[subject] + make.ar1(rng, G, n, rho)
    design = make.design(
        {"x": rng.standard_normal(G * n)}, groups={"subject": subject}, series=subject, tick=day
    )
    return make.fits(design, y)


def test_restricted_lr_is_the_difference_of_two_fits():
    f = panel(np.random.default_rng(1), 0.5, 0.4)
    p, method = restricted_lr(f, "serial")
    statistic = 2 * float(f.full.loglik[0] - f[{"group:subject"}].loglik[0])
    assert p == pytest.approx(stats.chi2.sf(statistic, 1), rel=1e-12)
    assert "1 df" in method


@pytest.mark.parametrize(("key", "tau", "rho"), [("serial", 0.8, 0.0), ("group:subject", 0.0, 0.4)])
def test_size_given_the_other_structure(key, tau, rho):
    """At 5 %, one structure strong and the other not there; 400 columns, Monte-Carlo error 1.1 points."""
    rng = np.random.default_rng(5)
    f = panel(rng, tau, rho)
    with one_thread():
        # one strong structure, drawn from its own law
        node = f.full_node - {key}
        many = f.redraw(node, 400, "size of the restricted likelihood ratio")
        lr = np.maximum(0.0, 2 * (many[f.full_node].loglik - many[node].loglik))
    p = stats.chi2.sf(lr, 1) * (1.0 if key == "serial" else 0.5)
    assert np.mean(p < 0.05) == pytest.approx(0.05, abs=0.035)


def test_size_of_a_spatial_variance_is_conservative():
    """½χ²₀ + ½χ²₂ at 5 % under independence; 800 columns, Monte-Carlo error 0.8 points."""
    rng = np.random.default_rng(3)
    xy = rng.uniform(size=(50, 2))
    f = make.fits(make.design({"x": rng.standard_normal(50)}, xy=xy), rng.standard_normal(50))
    with one_thread():
        many = f.redraw(frozenset(), 800, "size of the spatial likelihood ratio")
        lr = np.maximum(0.0, 2 * (many[{"spatial"}].loglik - many[frozenset()].loglik))
    size = np.mean(0.5 * stats.chi2.sf(lr, 2) < 0.05)
    assert size <= 0.05 + 0.02
    assert size > 0.005


def test_few_units_get_a_bootstrap_and_it_agrees_with_the_mixture_roughly():
    rng = np.random.default_rng(4)
    ward = np.repeat(np.arange(24), 8)
    hospital = ward // 3
    y = (
        0.35 * rng.standard_normal(8)[hospital]
        + 0.3 * rng.standard_normal(24)[ward]
        + rng.standard_normal(192)
    )
    f = make.fits(
        make.design(
            {"x": rng.standard_normal(192)}, groups={"hospital": hospital, "ward": ward}, arrangement="nested"
        ),
        y,
    )
    p, method = restricted_lr(f, "group:ward")
    statistic = 2 * float(f.full.loglik[0] - f[{"group:hospital"}].loglik[0])
    mixture = 0.5 * float(stats.chi2.sf(statistic, 1))
    assert statistic > 1
    assert mixture > 1 / 200
    assert "199 draws" in method
    assert p == pytest.approx(mixture, abs=0.06)


def test_a_subject_effect_is_not_serial_dependence():
    """Strong subject effects raise the serial statistic; the ledger says that they explain it."""
    f = panel(np.random.default_rng(12), 1.5, 0.0, G=60, n=8)
    with one_thread():
        ledger = weigh(f, gather(f))
    assert ledger.of("group:subject").verdict == "present"
    serial = ledger.of("serial")
    assert serial.p_alone < 0.001
    assert serial.verdict != "present"
    assert ledger.model == ("group:subject",) or serial.verdict == "unclear"


def test_what_is_left_out_is_recorded_and_still_shown():
    f = panel(np.random.default_rng(14), 1.0, 0.0, G=150, n=6)
    with one_thread():
        ledger = weigh(f, gather(f))
    assert ledger.model == ("group:subject",)
    assert any("left out day" in line for line in ledger.history)
    assert sum(s.share for s in ledger.shares) == pytest.approx(1.0, abs=1e-9)
    share = ledger.share("serial")
    assert (share.share, share.low) == (0.0, 0.0)
    assert 0 < share.high < 0.3
    assert share.note


def test_a_level_that_the_design_fixes_is_never_left_out():
    rng = np.random.default_rng(15)
    clinic = np.repeat(np.arange(80), 10)
    design = make.design({"x": rng.standard_normal(800)}, groups={"clinic": clinic}, assigned={"x": "clinic"})
    f = make.fits(design, rng.standard_normal(800))
    with one_thread():
        ledger = weigh(f, gather(f))
    assert ledger.of("group:clinic").fixed
    assert ledger.model == ("group:clinic",)


def test_a_series_that_hangs_together_only_a_season_apart_is_present():
    rng = np.random.default_rng(37)
    e = rng.standard_normal(132)
    for t in range(12, 132):
        e[t] = 0.8 * e[t - 12] + 0.6 * e[t]
    f = make.fits(make.design({"x": rng.standard_normal(132)}, tick=np.arange(132)), e)
    with one_thread():
        evidence = gather(f)
        found = weigh(f, evidence).of("serial")
    assert evidence.get("durbin-watson").p > 0.05
    assert found.verdict == "present"
    assert "several steps apart" in found.because
    assert "steps apart its residuals are correlated" in found.because


@pytest.mark.slow
def test_an_independent_series_is_not_present_more_often_than_its_level():
    rng = np.random.default_rng(32)
    d, hits = make.design({"x": rng.standard_normal(60)}, tick=np.arange(60)), 0
    tests = tuple(t for t in TESTS if t.id in ("durbin-watson", "ljung-box"))
    with one_thread():
        for _ in range(60):
            f = make.fits(d, rng.standard_normal(60))
            hits += weigh(f, gather(f, tests), tests).of("serial").verdict == "present"
    assert hits <= 11  # 5 % and at most 2.5 % more, with a binomial tail of one in a thousand


def crossed(rng, plates: int = 12, samples: int = 5, by_plate: float = 0.8, by_sample: float = 3.0):
    """Every plate with every sample; the variance between samples hides that between plates."""
    plate, sample = np.repeat(np.arange(plates), samples), np.tile(np.arange(samples), plates)
    y = by_plate * rng.standard_normal(plates)[plate] + by_sample * rng.standard_normal(samples)[sample]
    y = y + 0.3 * rng.standard_normal(len(plate))
    d = make.design({}, groups={"plate": plate, "sample": sample}, arrangement="crossed")
    return make.fits(d, y)


def test_a_crossed_factor_hidden_by_another_is_present_and_kept_in_the_shares():
    """A bootstrap of 199 draws ends at 0.005; what the mixture puts far below is not held back by that."""
    f = crossed(np.random.default_rng(11))
    with one_thread():
        found = weigh(f, gather(f))
    plate = found.of("group:plate")
    statistic = 2 * float(f.full.loglik[0] - f.without("group:plate").loglik[0])
    assert plate.p_alone > 0.05
    assert statistic > 30
    assert plate.p_given == pytest.approx(0.5 * stats.chi2.sf(statistic, 1), rel=1e-9)
    assert plate.verdict == "present"
    assert "group:plate" in found.model
    assert found.share("group:plate").share == pytest.approx(float(f.full.shares()["group:plate"][0]))


def short_series(rng, rho: float, group: float, G: int = 27):
    """Four rows each, too few to size a correlation from one row to the next."""
    subject, tick = np.repeat(np.arange(G), 4), np.tile(np.arange(4), G)
    y = group * rng.standard_normal(G)[subject] + make.ar1(rng, G, 4, rho)
    d = make.design({"x": rng.standard_normal(4 * G)}, groups={"subject": subject}, series=subject, tick=tick)
    return make.fits(d, y)


def test_what_has_no_size_and_is_explained_by_groups_is_not_present():
    f = short_series(np.random.default_rng(3), 0.0, 1.5)
    with one_thread():
        serial = weigh(f, gather(f)).of("serial")
    assert serial.p_alone < 1e-4
    assert serial.given == ("subject",)
    assert serial.p_given > 0.05
    assert serial.verdict in ("not detected", "unclear")
    assert "explained by subject" in serial.because


def test_what_has_no_size_and_still_shows_beside_groups_is_present():
    f = short_series(np.random.default_rng(4), 0.8, 1.0)
    with one_thread():
        serial = weigh(f, gather(f)).of("serial")
    assert serial.p_given < 0.05
    assert serial.verdict == "present"
    assert "still with subject" in serial.because


def test_a_factor_without_bound_is_told_as_more_than_so_many():
    near = replace(seen("serial", 0.3, NAN, widens=True), worst=1.4e7)
    (found,) = judge((near,))
    assert "more than 20 times that without it" in found.because
