"""Facts read from designs: effective clusters, arms, levels, between against within."""

from __future__ import annotations

import numpy as np
import pytest

from clingstone.advice.facts import Facts, facts
from clingstone.advice.groups import effective_clusters
from clingstone.covariance.fits import Fits
from clingstone.evidence import gather
from clingstone.ledger.ledger import weigh
from clingstone.run import Settings, one_thread
from tests.ledger import factories as make


def facts_of(fits: Fits) -> Facts:
    with one_thread():
        evidence = gather(fits)
        return facts(fits, evidence, weigh(fits, evidence))


def test_equal_groups_count_in_full():
    clinic = np.repeat(np.arange(12), 10)
    design = make.design({}, groups={"clinic": clinic})
    part = design.group.levels[0]
    for icc in (0.0, 0.3, 1.0):
        assert effective_clusters(design, part, np.array([1.0]), icc) == pytest.approx(12)


def test_effective_clusters_of_a_mean_by_hand():
    """Carter, Schnepel & Steigerwald 2017: for a mean at ρ = 1, γ_g ∝ N_g², here sizes 1, 2, 3."""
    clinic = np.repeat(np.arange(3), [1, 2, 3])
    design = make.design({}, groups={"clinic": clinic})
    gamma = np.array([1.0, 4.0, 9.0])
    spread = np.mean((gamma - gamma.mean()) ** 2) / gamma.mean() ** 2
    got = effective_clusters(design, design.group.levels[0], np.array([1.0]), 1.0)
    assert got == pytest.approx(3 / (1 + spread))


def test_arms_level_and_focus():
    rng = np.random.default_rng(1)
    clinic = np.repeat(np.arange(10), 8)
    law = (clinic < 3).astype(float)
    found = facts_of(
        make.fits(
            make.design({"law": law, "x": rng.standard_normal(80)}, groups={"clinic": clinic}),
            rng.standard_normal(10)[clinic] + rng.standard_normal(80),
        )
    )
    assert found["groups in the smaller arm"].value == 3
    assert found.word("term of the smaller arm") == "law"
    assert found.says("focus at group level")
    assert found["groups"].value == 10
    assert found.word("group level") == "clinic"
    assert found["effective clusters"].unit == "for law"


def test_within_focus_is_not_at_group_level():
    rng = np.random.default_rng(2)
    clinic = np.repeat(np.arange(10), 8)
    law = (clinic < 3).astype(float)
    design = make.design({"law": law, "x": rng.standard_normal(80)}, groups={"clinic": clinic}, focus=("x",))
    found = facts_of(make.fits(design, rng.standard_normal(80)))
    assert not found.says("focus at group level")
    assert "groups in the smaller arm" not in found


@pytest.mark.parametrize(("between", "differs"), [(2.0, True), (0.0, False)])
def test_between_against_within(between, differs):
    rng = np.random.default_rng(3)
    clinic = np.repeat(np.arange(40), 8)
    centre = rng.standard_normal(40)
    x = centre[clinic] + rng.standard_normal(320)
    y = x + between * centre[clinic] + 0.7 * rng.standard_normal(40)[clinic] + rng.standard_normal(320)
    found = facts_of(make.fits(make.design({"x": x}, groups={"clinic": clinic}), y))
    assert found.says("between differs from within") is differs
    assert found.word("term that differs") == "x"


def test_between_test_keeps_its_size():
    """5 % over 200 data sets with group effects unrelated to x; Monte-Carlo error 1.5 points."""
    from clingstone.advice.groups import _between
    from clingstone.ledger.ledger import focus_terms

    rng = np.random.default_rng(4)
    clinic = np.repeat(np.arange(20), 6)
    x = rng.standard_normal(20)[clinic] + rng.standard_normal(120)
    design = make.design({"x": x}, groups={"clinic": clinic})
    part, rejected = design.group.levels[0], 0
    with one_thread():
        for _ in range(200):
            f = make.fits(design, rng.standard_normal(20)[clinic] + rng.standard_normal(120))
            (answer, _) = _between(f, part, focus_terms(design), "group:clinic")
            rejected += bool(answer.value)
    assert rejected / 200 == pytest.approx(0.05, abs=0.045)


def test_nested_levels_are_corrected_at_the_coarsest_that_matters():
    rng = np.random.default_rng(5)
    ward = np.repeat(np.arange(48), 6)
    hospital = ward // 4
    y = rng.standard_normal(12)[hospital] + rng.standard_normal(48)[ward] + rng.standard_normal(288)
    levels = {"hospital": hospital, "hospital/ward": ward}
    found = facts_of(
        make.fits(make.design({"x": rng.standard_normal(288)}, groups=levels, arrangement="nested"), y)
    )
    assert found.word("group level") == "hospital"
    assert found.word("mixed level") == "hospital + hospital/ward"


def test_series_and_sites():
    rng = np.random.default_rng(6)
    subject, day = np.repeat(np.arange(9), 6), np.tile(np.arange(6), 9)
    design = make.design({"x": rng.standard_normal(54)}, groups={"s": subject}, series=subject, tick=day)
    found = facts_of(make.fits(design, rng.standard_normal(54)))
    assert (found["series"].value, found["rows in the longest series"].value) == (9, 6)
    assert found.says("serial estimable")
    assert found.says("series within groups")
    assert found.says("regular times")


def test_material_needs_the_interval_and_reads_the_band():
    f = make.trial(np.random.default_rng(7), icc=0.2)
    with one_thread():
        evidence = gather(f)
        book = weigh(f, evidence)
        strict, loose = (
            facts(f, evidence, book, Settings(material=band)) for band in ((0.95, 1.1), (0.01, 100.0))
        )
    assert strict.says("material: arm")
    assert not strict.says("material: x")
    assert not loose.says("material: arm")


def test_unknown_names_are_harmless():
    found = facts_of(make.trial(np.random.default_rng(8)))
    assert found.text("no such fact") == "not known"
    assert found.word("no such fact") == ""
    assert not found.says("no such fact")
    assert len(found) == len(list(found))
