"""Named facts about a design, its dependence and its mean, each with unit, value and sentence."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, replace

import numpy as np

from clingstone.advice.groups import columns, group_facts
from clingstone.advice.mean import Missing, missing_part
from clingstone.advice.named import Fact, named, words, yes
from clingstone.advice.order import order_facts
from clingstone.advice.places import place_facts
from clingstone.advice.response import response_facts
from clingstone.advice.smooth import along_time
from clingstone.advice.structures import FAMILIES, covered, subject
from clingstone.covariance.fits import Fits
from clingstone.design.design import Design
from clingstone.display import listed, p_value, percent
from clingstone.evidence.endogeneity import TOGETHER
from clingstone.evidence.finding import Evidence, Finding
from clingstone.evidence.groups import BY
from clingstone.ledger.ledger import Ledger, focus_rows, focus_terms
from clingstone.ledger.standing import LEVEL, MOST
from clingstone.maths.once import kept
from clingstone.maths.partition import Partition
from clingstone.needs import Limits
from clingstone.run import Settings
from clingstone.structure.serial import Series


@dataclass(frozen=True)
class Facts(Mapping[str, Fact]):
    """Facts by name, and what the sentences of an advice need besides.

    A fact that is not known is left out. ``ledger`` is the one that the facts were read from;
    ``missing`` the part of the mean that seems to be missing, if one does; ``after`` the facts with
    that part in the model.
    """

    known: Mapping[str, Fact]
    ledger: Ledger
    focus: tuple[str, ...] = ()
    missing: Missing | None = None
    material: tuple[float, float] = (0.95, 1.10)
    after: Facts | None = None

    def __getitem__(self, name: str) -> Fact:
        return self.known[name]

    def __iter__(self) -> Iterator[str]:
        return iter(self.known)

    def __len__(self) -> int:
        return len(self.known)

    def text(self, name: str) -> str:
        """A fact as words say it; "not known" where it is not."""
        return self.known[name].text if name in self.known else "not known"

    def word(self, name: str) -> str:
        """The value of a fact that is a word; "" where it is not known."""
        return str(self.known[name].value) if name in self.known else ""

    def says(self, name: str) -> bool:
        """A yes-or-no fact; False where it is not known."""
        return name in self.known and bool(np.all(np.asarray(self.known[name].value) == 1))

    def plus(self, more: Mapping[str, Fact]) -> Facts:
        """The same facts with further ones."""
        return replace(self, known={**self.known, **more})


def facts(fits: Fits, evidence: Evidence, ledger: Ledger, settings: Settings | None = None) -> Facts:
    """Everything that the rules may ask about, on the first column of y.

    settings : those of the run, unless others are given.
    """
    settings = fits.run.settings if settings is None else settings
    focus = focus_rows(fits)
    missing = missing_part(fits, evidence, ledger) if fits.design.known else None
    here = _facts(fits, evidence, ledger, focus, settings, missing)
    if missing is None or missing.again is None or missing.after is None or missing.evidence is None:
        return here
    after = _facts(missing.again, missing.evidence, missing.after, focus, settings, missing)
    return replace(here, after=after)


def _facts(
    fits: Fits,
    evidence: Evidence,
    ledger: Ledger,
    focus: tuple[str, ...],
    settings: Settings,
    missing: Missing | None,
) -> Facts:
    design = fits.design
    found = [
        *structure_facts(ledger),
        *_design_facts(design, ledger, fits.run.limits),
        *group_facts(design, fits, ledger),
        *order_facts(fits),
        *place_facts(fits, evidence, ledger, fits.run.limits),
        *response_facts(fits),
        *_consequence_facts(ledger, focus, settings.material),
        *_evidence_facts(evidence),
        *mean_facts(missing),
    ]
    return Facts({f.name: f for f in found}, ledger, focus, missing, settings.material)


# ---- structures ---------------------------------------------------------------------------------


def structure_facts(ledger: Ledger) -> list[Fact]:
    """Per family: present, to cover; and what cannot be told apart."""
    out = []
    for family in FAMILIES:
        mine = [s for s in ledger.standing if s.structure == family]
        present = [s.label for s in mine if s.verdict == "present"]
        cover = [s.label for s in mine if covered(s)]
        out.append(yes(f"{family} present", bool(present), f"present: {listed(present) or 'nothing'}"))
        out.append(yes(f"{family} to cover", bool(cover), f"to cover: {listed(cover) or 'nothing'}"))
    tied = [s.label for s in ledger.standing if "cannot say which" in s.because]
    out.append(yes("not attributable", len(tied) > 1, f"not told apart: {listed(tied) or 'nothing'}"))
    out.append(words("names not attributable", listed(tied)))
    unsized = [
        subject(s)
        for s in ledger.standing
        if ledger.share(s.key) is None and s.verdict in ("unclear", "not detected") and not covered(s)
    ]
    out.append(yes("declared but not sized", bool(unsized), f"not sized: {listed(unsized) or 'nothing'}"))
    out.append(words("names not sized", listed(unsized)))
    shown = [s.label for s in ledger.standing if s.verdict == "present"]
    out.append(words("names present", listed(shown)))
    out.append(words("names to cover", listed([s.label for s in ledger.standing if covered(s)])))
    return out


def _design_facts(design: Design, ledger: Ledger, limits: Limits) -> list[Fact]:
    counts = design.counts
    out = [
        yes("columns of the model known", design.known, "the columns of the model are known"),
        yes("nothing left over", not ledger.shares, "the model fits every row exactly"),
        named("rows", design.n),
    ]
    series = design.serial
    if series is not None:
        longest, number = counts["rows in the longest series"], counts["series"]
        enough = longest >= limits.serial_estimate_rows or (
            counts["series of 5 rows or more"] >= limits.serial_estimate_series
        )
        out += [
            named("rows in the longest series", longest),
            named("series", number),
            yes("serial estimable", enough, "the series are long or many enough for a correlation in time"),
            yes("times shared", bool(series.ties), "rows of one series share a time"),
            *kept(design, ("periods",), lambda: _periods(design, series)),
            yes("regular times", series.spacing != "irregular", f"spacing of the times: {series.spacing}"),
            words("series level", _named(design, series)),
        ]
        around = [g for g in (design.group.levels if design.group is not None else ()) if _holds(g, series)]
        if design.group is not None:
            out.append(yes("series within groups", bool(around), "every series lies within one group"))
        most = max((number, *(g.count for g in around)) if around else (number,))
        least = limits.groups_estimate if around else limits.serial_estimate_series
        enough = most >= least
        out.append(yes("series can be clusters", enough, f"{most} clusters hold whole series"))
    return out


def _periods(design: Design, series: Series) -> list[Fact]:
    """How many times there are, and how the focus terms run along them."""
    if not design.known:
        return []
    times, at = np.unique(series.elapsed, return_inverse=True)
    X = np.column_stack([columns(design, t) for t in focus_terms(design)])
    X = X[:, np.ptp(X, axis=0) > 0]
    first = np.full(len(times), -1)
    first[at[::-1]] = np.arange(design.n)[::-1]
    moves = bool(np.any(np.ptp(X[first], axis=0) > 0)) if X.size else False
    smooth = bool(X.size) and all(along_time(series, x) for x in X.T)
    return [
        named("periods", len(times)),
        yes("focus varies over time", moves, "a focus term varies from time to time"),
        yes("focus smooth in time", smooth, "every focus term runs smoothly along time"),
    ]


def _named(design: Design, series: Series) -> str:
    """The partition whose cells are the series, under the name at which a remedy finds it."""
    if series.part.count < 2:
        return series.part.key
    found = (key for key, part in design.partitions.items() if part.relation(series.part) == "same")
    return next(found, series.part.key)


def _holds(level: Partition, series: Series) -> bool:
    return level.relation(series.part) in ("same", "nests")


def _consequence_facts(ledger: Ledger, focus: tuple[str, ...], material: tuple[float, float]) -> list[Fact]:
    out = []
    largest = None
    for term in focus:
        total = ledger.factor(term)
        if total is None:
            continue
        outside = total.low < material[0] or total.high > material[1]
        out.append(
            yes(
                f"material: {term}",
                outside,
                f"standard error of {term}: {total.estimate:.2f} ({total.low:.2f} to {total.high:.2f}) times "
                "the ordinary one",
            )
        )
        if largest is None or abs(np.log(total.high)) > abs(np.log(largest.high)):
            largest = total
    if largest is not None:
        told = "" if largest.high <= MOST else f"more than {MOST:g}"
        out.append(named("largest factor", largest.high, "times the ordinary standard error", told))
    return out


def _evidence_facts(evidence: Evidence) -> list[Fact]:
    out = [*_spread_facts(evidence), *_slope_facts(evidence), *_clock_facts(evidence), *_together(evidence)]
    far, shocks = _told(evidence, "outliers")[0], evidence.get("common-shocks")
    for name, finding in (("outlying rows", far[0] if far else None), ("common shocks", shocks)):
        if finding is not None and finding.verdict != "not applicable":
            out.append(yes(name, finding.verdict == "present", finding.sentence))
    copies = evidence.get("duplicates")
    if copies is not None and np.isfinite(copies.estimate):
        share = float(copies.estimate)
        out.append(named("share of copied rows", share, "of the rows", percent(share)))
    return out


def _told(evidence: Evidence, test: str) -> tuple[list[Finding], Finding | None]:
    """The readings of a test with a p, and the clearest where its p times their number is below 0.05.

    Those given the dependence stand for those alone, which dependence can disturb.
    """
    found = [f for f in evidence if f.test == test and np.isfinite(f.p)]
    again = {f.about for f in found if f.given}
    found = [f for f in found if f.given or f.about not in again]
    best = min(found, key=lambda f: f.p, default=None)
    return found, best if best is not None and best.p * len(found) < LEVEL else None


def _spread_facts(evidence: Evidence) -> list[Fact]:
    found, best = _told(evidence, "heteroscedasticity")
    if not found:
        return []
    said = best.sentence if best is not None else found[0].sentence
    where = best.about_words if best is not None else ""
    return [yes("unequal variances", best is not None, said), words("what the spread goes with", where)]


def _slope_facts(evidence: Evidence) -> list[Fact]:
    found, best = _told(evidence, "slope-variation")
    if not found:
        return []
    name, _, level = best.about.rpartition(BY) if best is not None else ("", "", "")
    said = best.sentence if best is not None else "no slope is seen to differ between groups"
    return [
        yes("slopes differ", best is not None, said),
        words("name of the slope", name),
        words("level of the slopes", level),
    ]


def _together(evidence: Evidence) -> list[Fact]:
    """Whether the predictors, tested at once, mean another thing between groups than within them."""
    found = [
        f
        for f in evidence
        if f.test == "group-endogeneity" and f.about.startswith(TOGETHER + BY) and np.isfinite(f.p)
    ]
    best = min(found, key=lambda f: f.p, default=None)
    if best is None:
        return []
    return [
        yes("predictors differ together", best.p * len(found) < LEVEL, best.sentence),
        named("p of the predictors together", best.p, text=p_value(best.p)),
        words("level of the predictors together", best.about.rpartition(BY)[2]),
    ]


def _clock_facts(evidence: Evidence) -> list[Fact]:
    """What tests of time say once the order in time is fitted, and a correlation that may be one."""
    out = []
    for name, test in (("common shocks in time", "common-shocks"), ("break in time", "break")):
        found = [f for f in evidence if f.test == test and f.given and np.isfinite(f.p)]
        if found:
            out.append(yes(name, found[0].p < LEVEL, found[0].sentence))
    walks = any("takes in a random walk" in c for f in evidence.of("serial") for c in f.caveats)
    out.append(yes("may be a random walk", walks, "the interval of the correlation takes in a random walk"))
    return out


def mean_facts(missing: Missing | None) -> list[Fact]:
    """What is known of a part of the mean that seems to be missing."""
    if missing is None:
        return [
            yes("part under dependence", False, "no missing part of the mean shows under the dependence"),
            yes("step of unknown time", False, "no step seems to be missing"),
            yes("clear season", False, "no season seems to be missing"),
            yes("mean in doubt", False, "the mean and the dependence do not compete"),
        ]
    moves = {"goes": missing.goes, "stays": missing.stays, "appears": missing.appears}
    return [
        yes("part under dependence", missing.shows, f"{missing.what} shows under the fitted dependence"),
        yes("step of unknown time", missing.test == "break", "the time of the step was chosen"),
        yes("clear season", missing.pattern, f"{missing.what} is a season of the calendar"),
        *(
            yes(f"dependence {verb} with the mean", bool(names), f"{verb}: {listed(names) or 'nothing'}")
            for verb, names in moves.items()
        ),
        yes("mean in doubt", missing.doubt, missing.left),
        named("p of the missing part", missing.p),
        words("missing part of the mean", missing.what),
        words("sign of the missing part", missing.sign),
        words("dependence left", missing.left),
    ]
