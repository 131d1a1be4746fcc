"""Facts about places: how far likeness reaches, along which axis, and what the neighbours were given as."""

from __future__ import annotations

import numpy as np

from clingstone.advice.groups import constant_in
from clingstone.advice.named import Fact, named, words, yes
from clingstone.advice.structures import covered, needed
from clingstone.covariance.components import SITE
from clingstone.covariance.fits import Fits
from clingstone.display import p_value, percent
from clingstone.evidence.finding import Evidence
from clingstone.ledger.ledger import Ledger, focus_rows, focus_terms
from clingstone.ledger.standing import LEVEL
from clingstone.needs import Limits

GIVEN = ("contiguity", "rook", "pairs")  # graphs that say which places touch, not how far apart they are
SETTLED = 1.25  # by which a standard error may move between the ends of the range's interval and its estimate
CLEAR = 0.01  # p of a score test of neighbours' outcomes; one of several looks at places


def place_facts(fits: Fits, evidence: Evidence, ledger: Ledger, limits: Limits) -> list[Fact]:
    """Nothing without places."""
    design = fits.design
    if design.spatial is None:
        return []
    sites = design.spatial.count
    graph = design.neighbours[0].key.split(":")[0] if design.neighbours else ""
    return [
        named("sites", sites),
        yes("spatial estimable", sites >= limits.sites_estimate, "enough sites for a covariance"),
        yes("neighbours by borders or pairs", graph in GIVEN, f"neighbours: {graph or 'none'}"),
        *_rows_of_places(fits, ledger),
        *_reach(fits, ledger),
        *_seen(evidence),
    ]


def _rows_of_places(fits: Fits, ledger: Ledger) -> list[Fact]:
    """Whether places are to be covered only as groups of rows, and the focus varies within them."""
    design = fits.design
    assert design.spatial is not None
    part = design.spatial.part
    alone = "spatial" not in needed(ledger) and SITE in needed(ledger)
    inside = design.known and not any(constant_in(design, t, part) for t in focus_terms(design))
    return [
        yes("rows of one place alone", alone, "of places only the rows of one are to be covered"),
        yes("focus varies within places", inside, "every focus term varies within places"),
        words("site level", part.key),
    ]


def _reach(fits: Fits, ledger: Ledger) -> list[Fact]:
    reach, standing = ledger.parameter("spatial", "practical range"), ledger.of("spatial")
    sites = fits.design.spatial
    if sites is None or reach is None or standing is None or not covered(standing):
        return []
    if not sites.extent > 0 or not np.isfinite(reach.estimate):
        return []
    ratio = reach.estimate / sites.extent
    told = percent(ratio) if ratio < 1 else "more than 100 %"
    return [
        named("range over extent", ratio, "of the map's width", told),
        yes(
            "range at its bound",
            _at_bound(fits, ledger),
            "the range lies at the end of what is tried",
        ),
        yes(
            "focus settled at any range",
            _settled(fits, ledger),
            f"the standard errors in focus move by a factor of at most {SETTLED:g} with the range",
        ),
    ]


def _settled(fits: Fits, ledger: Ledger) -> bool:
    """Whether the focus varies at distances so short that its intervals hardly lean on the range.

    A difference between near places is known as well under a dependence that fades past the map as
    under one that has no end: only what varies as slowly as the dependence needs the range.
    """
    focus = focus_rows(fits)
    mine = [each for each in ledger.inflation if each.key == "total" and each.term in focus]
    moved = [max(each.high / each.estimate, each.estimate / each.low) for each in mine]
    return bool(moved) and max(moved) <= SETTLED


def _at_bound(fits: Fits, ledger: Ledger) -> bool:
    node = frozenset(ledger.model)
    if "spatial" not in node:
        return False
    model = fits[node]
    place = [i for i, name in enumerate(model.names) if name == "spatial.log_range"]
    return any(bool(model.at_bound[i, 0]) for i in place)


def _seen(evidence: Evidence) -> list[Fact]:
    """Likeness along one axis, and outcomes of neighbours in the mean beside what errors do."""
    out = []
    looked = [f for f in evidence if f.test == "direction" and np.isfinite(f.p)]
    axis = [f for f in looked if f.given] or looked
    if axis:
        out.append(yes("likeness along one axis", min(f.p for f in axis) < LEVEL, axis[0].sentence))
    lag = [f for f in evidence if f.test == "robust-lm-lag" and np.isfinite(f.p)]
    if lag:
        said = f"outcomes of neighbours beside their errors: {p_value(lag[0].p)}"
        out.append(yes("outcomes of neighbours", lag[0].p < CLEAR, said))
        out.append(named("p of the outcomes of neighbours", lag[0].p, text=p_value(lag[0].p)))
    return out
