"""Whole paths of many columns at once against the same path of each column alone."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from clingstone.advice.choose import Advice, settle
from clingstone.advice.facts import facts
from clingstone.advice.refitted import compared
from clingstone.advice.rules import PREFER, STATES
from clingstone.advice.shortlist import shortlist_for
from clingstone.covariance.fits import Fits
from clingstone.design.response import Response
from clingstone.evidence.finding import Evidence
from clingstone.evidence.gather import gather
from clingstone.ledger.ledger import weigh
from clingstone.rehearsal.many import ASIDE, Asked, Many
from clingstone.remedies.remedy import Refit
from clingstone.run import one_thread
from rehearsal.worlds import stream, trial
from remedies.cases import ar1, design, fits


def long_way(alone: Fits) -> tuple[Advice, Refit | None]:
    """What an examination without a rehearsal advises: every test, every candidate, the rules."""
    evidence = gather(alone)
    known = facts(alone, evidence, weigh(alone, evidence))
    listed = shortlist_for(known, alone)
    refits = listed.refit(alone)
    advice = settle(listed, known, refits, None)
    return advice, next((r for r in refits if (r.remedy, r.at) == (advice.remedy, advice.at)), None)


def panel(seed: int = 4) -> Fits:
    """24 series of 6 rows in groups of their own, with a covariate by row."""
    rng = np.random.default_rng(seed)
    G, T = 24, 6
    group = np.repeat(np.arange(G), T)
    of = design(
        np.column_stack([np.ones(G * T), rng.normal(size=G * T)]),
        group=group,
        series=group,
        tick=np.tile(np.arange(T), G),
    )
    return fits(of, rng.normal(size=G * T) + rng.normal(size=G)[group])


def curved(seed: int = 5) -> tuple[Fits, np.ndarray]:
    """A bend in x that the model lacks: the mean comes first in most columns."""
    rng = np.random.default_rng(seed)
    G, m = 20, 8
    group = np.repeat(np.arange(G), m)
    x = rng.normal(size=G * m)
    of = design(np.column_stack([np.ones(G * m), x]), group=group)
    return fits(of, rng.normal(size=G * m)), (x**2)[:, None]


def columns(f: Fits, kind: str, B: int) -> np.ndarray:
    """Columns of y of different dependence, from none to much."""
    rng = np.random.default_rng(11)
    n, size = f.design.n, np.linspace(0.0, 0.9, B)
    noise = rng.normal(size=(n, B))
    if kind in ("trial", "panel", "curved"):
        part = f.design.group.levels[0]
        noise += size * rng.normal(size=(part.count, B))[part.codes]
    if kind == "stream":
        noise = np.hstack([ar1(n, rho, 1, rng) for rho in size])
    return noise


def said(alone: Fits, shouting: tuple[str, ...]) -> dict[str, object]:
    """The facts that states and remedies are decided by, with some tests as clear as they can be."""
    clear = {"p": 1e-12, "p_adjusted": 1e-12, "verdict": "present", "estimate": 0.9}
    found = gather(alone)
    told = Evidence(tuple(replace(f, **clear) if f.test in shouting else f for f in found))
    known = facts(alone, told, weigh(alone, told)).known
    read = {name for rule in (*STATES, *PREFER) for name in (*rule.when.names, rule.then.at)}
    return {name: known[name].value for name in sorted(read & set(known))}


@pytest.mark.parametrize("make", [trial, panel, stream])
def test_tests_set_aside_decide_nothing(make):
    f = make()
    with one_thread():
        plain = said(f, ())
        assert said(f, ASIDE) == plain
        assert said(f, ("heteroscedasticity",)) != plain


@pytest.mark.parametrize("kind", ["trial", "stream", "curved", pytest.param("panel", marks=pytest.mark.slow)])
def test_a_batch_is_advised_as_its_columns_alone(kind):
    bend = 0.0
    if kind == "curved":
        f, bend = curved()
    else:
        f = {"trial": trial, "panel": panel, "stream": stream}[kind]()
    B = 6
    Y = columns(f, kind, B) + bend
    many = Many(Fits(Response.of(f.design, Y), f.run, depth="exact"))
    seen = set()
    with one_thread():
        for b in range(B):
            told = many.seen(b)
            found, ordinary = many.advised(b)
            advice, wanted = long_way(Fits(Response.of(f.design, Y[:, b]), f.run))
            assert told.state == advice.state.removesuffix(" with caveat")
            assert (told.structures, told.protected) == (advice.structures, advice.protected)
            assert told.mean_in_doubt == advice.mean_in_doubt
            assert (found is None) == (wanted is None)
            assert ordinary.remedy == "ordinary"
            if found is None or wanted is None:
                continue
            seen.add(found.remedy)
            assert (found.remedy, found.at) == (wanted.remedy, wanted.at)
            for one, other in zip(found.intervals, wanted.intervals, strict=True):
                assert one.term == other.term
                assert (one.low, one.high) == pytest.approx((other.low, other.high), abs=1e-5 * other.se)
    assert seen


def test_facts_of_some_refits_say_nothing_of_others():
    """Asked of the robust refit alone, the model of slopes is not thereby said to have failed."""
    rng = np.random.default_rng(2)
    group = np.repeat(np.arange(8), 10)
    x = rng.normal(size=80)
    of = design(np.column_stack([np.ones(80), x]), group=group)
    f = fits(of, rng.normal(size=80) + (rng.normal(size=8)[group] + rng.normal(size=8)[group] * x))
    known = facts(f, evidence := gather(f), weigh(f, evidence))
    every = {r.remedy: r for r in shortlist_for(known, f).refit(f)}
    asked = Asked(known, lambda what, _: iter([every[what]] if what in every else []))
    assert (
        asked["df of the robust refit"].value
        == compared(known, tuple(every.values())).known["df of the robust refit"].value
    )
    assert "slope model settled" not in asked
