"""Structures as the advice sees them: which have to be covered, by what, and how a sentence names them."""

from __future__ import annotations

from clingstone.covariance.components import SITE
from clingstone.covariance.fits import Fits
from clingstone.ledger.ledger import Ledger, Standing
from clingstone.remedies.gls import TOGETHER
from clingstone.remedies.remedy import Remedy

FAMILIES = ("group", "serial", "spatial")


def covered(standing: Standing) -> bool:
    """Whether a structure has to be covered: present, plausible and material, or fixed by the design.

    What is only plausible earns protection against intervals that are too short; one that could only
    narrow them is left out on the safe side.
    """
    return (
        standing.verdict == "present"
        or (standing.verdict == "unclear" and standing.widens)
        or (standing.fixed and standing.verdict != "not applicable")
    )


def needed(ledger: Ledger, *, shown: bool = False) -> frozenset[str]:
    """Keys of the structures to be covered; with ``shown`` only of those that are present."""
    chosen = (s for s in ledger.standing if (s.verdict == "present" if shown else covered(s)))
    return frozenset(s.key for s in chosen)


def families(ledger: Ledger, keys: frozenset[str]) -> frozenset[str]:
    """The families of some keys."""
    return frozenset(s.structure for s in ledger.standing if s.key in keys)


def reach(remedy: Remedy, fits: Fits) -> frozenset[str]:
    """Keys of the structures that a remedy, set to its level, covers in these data.

    An error model covers the components in it. A remedy at a level of clusters covers every level
    that lies within them; the rows of one place are such a level.
    """
    node = getattr(remedy, "node", None)
    if callable(node):
        return frozenset(node(fits))
    found = remedy.covering(fits)
    parts = [fits.design.partitions[k] for k in remedy.at.split(TOGETHER) if k in fits.design.partitions]
    clusters = bool(parts) and "group" in remedy.covers
    keys = {key for key, one in _keys(fits).items() if one in found or (clusters and key == SITE)}
    if not parts:
        return frozenset(keys)
    out = set()
    for key in keys:
        inner = fits.design.partitions.get(_part(fits, key))
        within = inner is None or any(part.relation(inner) in ("same", "nests") for part in parts)
        if within or not key.startswith("group:"):
            out.add(key)
    return frozenset(out)


def _part(fits: Fits, key: str) -> str:
    component = fits.components.get(key)
    return component.part if component is not None else key.removeprefix("group:")


def _keys(fits: Fits) -> dict[str, str]:
    """Every declared structure and its family, sized or not."""
    design = fits.design
    out: dict[str, str] = {key: one.family for key, one in fits.components.items()}
    if design.group is not None:
        out |= {f"group:{level.key}": "group" for level in design.group.levels}
    out |= {"serial": "serial"} if design.serial is not None else {}
    return out | ({"spatial": "spatial"} if design.spatial is not None else {})


def subject(standing: Standing) -> str:
    """ "rows of one ward", "rows that follow each other in time", "near places" """
    if standing.key == "serial":
        return "rows that follow each other in time"
    if standing.key == "spatial":
        return "near places"
    if standing.key == SITE:
        return "rows of one place"
    return f"rows of one {standing.label.split('/')[-1]}"
