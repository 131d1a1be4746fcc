"""The mean first: is a part of it missing, and does the dependence go when that part is put in?"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from clingstone.covariance.fits import Fits
from clingstone.design.design import Design
from clingstone.display import listed, p_value, percent, significant
from clingstone.evidence import TESTS
from clingstone.evidence.finding import Evidence, Finding, column
from clingstone.evidence.mean import extension
from clingstone.ledger.consequence import parts
from clingstone.ledger.detect import primary_test
from clingstone.ledger.ledger import Ledger, Standing, focus_rows
from clingstone.ledger.region import region
from clingstone.ledger.standing import LEVEL, consequence
from clingstone.needs import NotSupported

# A smooth mean over time or place and a smooth error are one picture: such a part is never declared
# the winner over dependence, only shown beside it.
SMOOTH = {"trend": "serial", "trend-surface": "spatial"}
CURVE = "functional-form"


@dataclass(frozen=True)
class Missing:
    """A part of the mean that seems to be missing.

    what : words, such as "curve in dose". shows : it shows under the fitted dependence.
    explains : with it in the model no structure that was present is seen any more.
    doubt : these data cannot tell the mean from dependence, or what is left could still matter.
    left : what is left of the dependence, as half a sentence.
    wider : the design with the part added, live.
    """

    what: str
    test: str
    about: str
    shows: bool
    explains: bool
    doubt: bool
    left: str
    wider: Design | None = field(default=None, compare=False, repr=False)


@dataclass(frozen=True)
class Remains:
    """A structure before and after the part was added: shares, and the furthest factor after."""

    label: str
    before: float
    after: float
    worst: float
    matters: bool
    p: float  # of its own test, with the part in the model

    @property
    def halved(self) -> bool:
        return self.after < self.before / 2

    @property
    def gone(self) -> bool:
        """Its own test no longer shows it and at least half of its share went."""
        return self.halved and not self.p < LEVEL


def missing_part(fits: Fits, evidence: Evidence, ledger: Ledger) -> Missing | None:
    """The most telling missing part of the mean, or None.

    A curve in a covariate must show under the fitted dependence. A trend or a surface, which has
    next to no power there, is looked at when it shows in the ordinary fit and its structure is
    present; it counts only when it takes at least half of that structure away.
    """
    needed = [s for s in ledger.standing if s.verdict == "present"]
    curve = _curve(evidence)
    if curve is not None:
        found = _try(fits, curve, needed)
        if found is not None:
            return found
    for finding in _smooth(evidence, needed):
        found = _try(fits, finding, needed)
        if found is not None and found.doubt:
            return found
    return None


def _adjusted(finding: Finding) -> float:
    return finding.p if finding.p_adjusted is None else finding.p_adjusted


def _curve(evidence: Evidence) -> Finding | None:
    """The clearest curve: given the dependence where it was so tested, Holm over covariates."""
    found = [f for f in evidence.of("mean") if f.test == CURVE and np.isfinite(f.p)]
    given = [f for f in found if f.given]
    found = given or found
    if not found:
        return None
    best = min(found, key=lambda f: f.p)
    p = _adjusted(best) if best.p_adjusted is not None else min(1.0, best.p * len(found))
    return best if p < LEVEL else None


def _smooth(evidence: Evidence, needed: list[Standing]) -> list[Finding]:
    families = {s.structure for s in needed}
    found = [
        f
        for f in evidence.of("mean")
        if SMOOTH.get(f.test) in families and not f.given and np.isfinite(f.p) and f.p < LEVEL
    ]
    return sorted(found, key=lambda f: f.p)


def _try(fits: Fits, finding: Finding, needed: list[Standing]) -> Missing | None:
    """Add the part and see what is left; None when the model cannot carry it."""
    try:
        wider = extension(fits.design, finding.test, finding.about)
        again = fits.onto(wider)
        left = _remains(fits, again, needed)
    except NotSupported:
        return None
    what = _words(fits, finding)
    is_curve = finding.test == CURVE
    gone = bool(left) and all(r.gone for r in left)
    halved = bool(left) and all(r.halved for r in left)
    explains = is_curve and gone
    # That it is no longer seen does not show that it is not there: what remains at its upper end counts.
    doubt = halved and not (explains and not any(r.matters for r in left))
    return Missing(what, finding.test, finding.about, is_curve, explains, doubt, _left(left, finding), wider)


def _words(fits: Fits, finding: Finding) -> str:
    if finding.test == CURVE:
        return f"curve in {finding.about}"
    if finding.test == "trend":
        series = fits.design.serial
        return f"slow trend in {series.name}" if series is not None else "slow trend"
    return f"{finding.about} surface over the map"


def _remains(fits: Fits, again: Fits, needed: list[Standing]) -> list[Remains]:
    node = again.full_node
    keys = [s for s in needed if s.key in node and s.key in fits.full_node]
    if not keys:
        return []
    settings = fits.run.settings
    place = region(again, node, settings.confidence)
    found = parts(again, place)
    focus = focus_rows(fits)
    before, after = fits.full.shares(), again.full.shares()
    out = []
    for s in keys:
        matters, worst, _ = consequence(found, place, s.key, focus, settings.material)
        test, about = primary_test(again, s, TESTS)
        p = float("nan")
        if test is not None and about is not None:
            p = column(test.read(again, about, frozenset()).p)
        out.append(Remains(s.label, float(before[s.key][0]), float(after[s.key][0]), worst, matters, p))
    return out


def _left(left: list[Remains], finding: Finding) -> str:
    if not left:
        return "no dependence was found that it could explain"
    shares = listed(
        f"the share of {r.label} falls from {percent(r.before)} to {percent(r.after)}" for r in left
    )
    worst = max((r.worst for r in left if np.isfinite(r.worst)), key=lambda f: abs(np.log(f)), default=1.0)
    end = f"what is left could make a focus standard error {significant(worst)} times the ordinary one"
    if not any(r.matters for r in left):
        end = "what is left could not move a focus interval"
    return f"{shares}, and {end} ({p_value(finding.p)} for the added part)"
