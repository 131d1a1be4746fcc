"""The table: every rule is well formed, is reached, and no convention decides."""

from __future__ import annotations

import numpy as np
import pytest

from clingstone.advice.expressions import fact
from clingstone.advice.facts import facts
from clingstone.advice.rules import CAVEATS, NO_REMEDY, PREFER, RULES, STATES, Rule, Then, rule_table
from clingstone.evidence import gather
from clingstone.ledger.ledger import weigh
from clingstone.remedies import REMEDIES
from clingstone.run import one_thread
from tests.ledger import factories as make

STRENGTHS = {"strong", "moderate", "weak", "convention"}
# Facts that settle() adds once there are refits.
LATE = {
    "lowest df of the advised refit",
    "advised refit at its bound",
    "advised refit did not converge",
    "plausible structure not covered",
    "names not covered",
    "coefficient moves",
    "term that moves",
    "some refit covers it",
    "df of the robust refit",
    "robust over mixed standard error",
    "robust over advised standard error",
    "advised refit has no variance between groups",
    "advised refit models the order in time",
    "widest second opinion",
    "name of the widest second opinion",
    "term of the widest second opinion",
    "another order fits better",
    "randomisation stands beside",
    "advised refit allows unequal spread",
    "slope model settled",
    "mixed refit at its bound",
    "advised refit sums over each time",
    "rehearsal fell short",
    "rehearsal leaves a doubt",
    "no rehearsed remedy held",
    "rehearsed coverage",
    "best rehearsed coverage",
    "promised coverage",
    "name of the advised refit",
    "advised refit not rehearsed",
    "held as fitted",
    "truth of the rehearsed coverage",
    "robust over ordered standard error",
    "df of the robust refit over places",
    "df of the robust refit over whole series",
}


def test_ids_are_unique_and_every_line_is_filled():
    ids = [r.id for r in RULES]
    assert len(set(ids)) == len(ids)
    for rule in RULES:
        assert rule.source
        assert rule.strength in STRENGTHS
        assert rule.because.endswith(".")
        assert rule.when.names


def test_no_convention_decides():
    for rule in (*STATES, NO_REMEDY, *PREFER):
        assert rule.strength != "convention"
    with pytest.raises(ValueError, match="never decide alone"):
        Rule(
            "x", fact("groups") < 50, Then("prefer", "cluster-robust"), "Few.", "somebody-2000", "convention"
        )


def test_every_preferred_remedy_is_registered():
    assert {r.then.what for r in PREFER} <= {r.id for r in REMEDIES}


def test_every_state_rule_that_refuses_says_what_would_be_needed():
    for rule in (*STATES, NO_REMEDY):
        if rule.then.what == "not correctable":
            assert rule.then.needed


def test_words_avoid_what_nobody_should_write():
    for rule in RULES:
        for word in ("absent", "significant", "passed", "!"):
            assert word not in rule.because


def known_facts() -> set[str]:
    """Names that facts() gives on designs with groups, series and sites, a curve missing."""
    rng = np.random.default_rng(1)
    site = np.repeat(np.arange(24), 6)
    tick = np.tile(np.arange(6), 24)
    xy = rng.uniform(size=(24, 2))
    x, z = rng.standard_normal((2, 144))
    y = 2 * x**2 + rng.standard_normal(24)[site] + rng.standard_normal(144)
    names: set[str] = set()
    arm = (site % 2).astype(float)
    for more in ({"xy": xy, "site": site}, {"series": site, "tick": tick}):
        design = make.design({"arm": arm, "x": x, "z": z}, groups={"well": site}, **more)
        f = make.fits(design, y)
        with one_thread():
            evidence = gather(f)
            names |= set(facts(f, evidence, weigh(f, evidence)))
    rows, columns = np.divmod(np.arange(144), 12)
    times = make.design({"x": x}, series=rows, tick=columns)
    f = make.fits(times, rng.standard_normal(12)[columns] + make.ar1(rng, 12, 12, 0.5))
    with one_thread():
        evidence = gather(f)
        names |= set(facts(f, evidence, weigh(f, evidence)))
    crossed = make.design({"x": x}, groups={"row": rows, "column": columns}, arrangement="crossed")
    y = rng.standard_normal(12)[rows] + rng.standard_normal(12)[columns] + 0.3 * rng.standard_normal(144)
    f = make.fits(crossed, y)
    with one_thread():
        evidence = gather(f)
        return names | set(facts(f, evidence, weigh(f, evidence)))


def test_every_fact_in_the_table_is_one_that_facts_gives():
    """A misspelt fact would make its rule silent for ever."""
    given = (
        known_facts()
        | LATE
        | {
            "range over extent",
            "range at its bound",
            "focus settled at any range",
            "likeness along one axis",  # more sites than these designs have
        }
    )
    for rule in RULES:
        inside = {part.split("}")[0] for part in rule.because.split("{")[1:]}
        assert set(rule.when.names) | inside | ({rule.then.at} - {""}) <= given, rule.id


def test_the_table_prints_for_the_docs():
    table = rule_table()
    assert len(table) == len(RULES)
    few = next(row for row in table if row[0] == "few-groups")
    assert "groups < 40" in few[1]
    assert few[2] == "prefer mixed-intercept at the mixed level"
    assert all(len(row) == 6 and all(row) for row in table)


def test_caveats_lower_and_cautions_warn():
    assert {r.then.kind for r in CAVEATS} == {"caveat", "caution"}
    assert {r.then.kind for r in PREFER} == {"prefer"}
    assert {r.then.kind for r in STATES} == {"state"}
