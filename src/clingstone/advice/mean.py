"""The mean first: is a part of it missing, and which dependence goes when that part is put in?"""

from __future__ import annotations

from dataclasses import dataclass, field, replace

import numpy as np

from clingstone.advice.smooth import smooth_in
from clingstone.advice.structures import subject
from clingstone.covariance.fits import Fits
from clingstone.design.design import Design
from clingstone.display import listed, p_value, percent, significant
from clingstone.evidence import TESTS
from clingstone.evidence.breaks import with_step
from clingstone.evidence.finding import Evidence, Finding
from clingstone.evidence.gather import gather
from clingstone.evidence.mean import extension
from clingstone.evidence.season import cycles, with_season
from clingstone.ledger.ledger import Ledger, Standing, focus_rows, focus_terms, judged
from clingstone.ledger.standing import LEVEL, MOST
from clingstone.needs import Family, NotSupported

# A smooth mean over time or place and a smooth error are one picture: such a part is never declared
# the winner over dependence, only shown beside it; nor is a curve in a covariate that runs as smoothly.
SMOOTH: dict[str, Family] = {
    "trend": "serial",
    "trend-surface": "spatial",
    "season": "serial",
    "break": "serial",
}
CURVE = "functional-form"
# Patterns that no fading dependence draws: the calendar's own season, and a step that stands out of the
# fitted order in time. Their bars are higher, because a season or a step seen by chance changes the advice.
PATTERNS = ("season", "break")
CLEAR, HOLDS = 0.01, 0.10  # p, and share of what the model leaves over
# A season of few cycles passes for strong dependence, which then holds most of it: clearer still, it counts
# by its share in the ordinary fit. Over two years of days under AR(1) of 0.7 a season of 1.5 times the
# deviation of the errors was so found in 86 % of 300 draws (by the bar above in none), none in 900 without.
CLEARER, HOLDS_ALONE = 0.001, 0.50
AGAIN = (
    "heteroscedasticity",
    "outliers",
    "common-shocks",
)  # read again, besides the primary tests, with the part in


@dataclass(frozen=True)
class Missing:
    """A part of the mean that seems to be missing, and the structures with it in the model.

    what : words, such as "curve in dose"; of two parts at once both. shows : it shows under the fitted
    dependence. pattern : a season that does: it comes first also where dependence stays. A step comes
    first only where the dependence goes with it, because a slow process under noise steps as well. goes :
    structures that were present and are no longer seen, half of their share or more gone. stays : the
    other ones that were present. appears : those seen only with the part in. doubt : these data cannot
    tell the mean from dependence, or what is no longer seen could still widen a focus interval. p : of
    the test that saw it, adjusted where it is. sign, left : how clearly the part shows, and what is left
    of the dependence, as half sentences. after : the ledger of the model with the part in; evidence and
    again : what it was judged by, live.
    """

    what: str
    test: str
    about: str
    shows: bool
    pattern: bool = False
    goes: tuple[str, ...] = ()
    stays: tuple[str, ...] = ()
    appears: tuple[str, ...] = ()
    doubt: bool = False
    p: float = float("nan")
    sign: str = ""
    left: str = ""
    after: Ledger | None = field(default=None, compare=False, repr=False)
    evidence: Evidence | None = field(default=None, compare=False, repr=False)
    again: Fits | None = field(default=None, compare=False, repr=False)


def missing_part(fits: Fits, evidence: Evidence, ledger: Ledger) -> Missing | None:
    """The most telling missing part of the mean, or None.

    A curve in a covariate, a season of the calendar or a step must show under the fitted dependence;
    the clearest counts, and with it a second one that shows once the first is in. A trend or a surface,
    which has next to no power there, is looked at when it shows in the ordinary fit and its structure is
    present; it counts only when it takes at least half of that structure away.
    """
    for finding in _shown(evidence, fits.design):
        found = _try(fits, finding, ledger, shows=True)
        if found is not None and (found.shows or found.doubt):
            return _second(fits, finding, found, ledger) or found
    for finding in _smooth(evidence, ledger, fits.design):
        found = _try(fits, finding, ledger, shows=False)
        if found is not None and found.doubt:
            return found
    return None


def _second(fits: Fits, finding: Finding, first: Missing, ledger: Ledger) -> Missing | None:
    """The first part and another of another kind or covariate that shows with it in; None where none does.

    It is the second look at these data, so each p counts twice. A third is not looked for.
    """
    if not first.shows or first.again is None:
        return None
    again = first.again
    evidence = gather(again, tuple(t for t in TESTS if t.id in (CURVE, *PATTERNS)))
    for other in _shown(evidence, again.design, looks=2):
        if (other.test, other.about) == (finding.test, finding.about):
            continue
        found = _try(again, other, ledger, shows=True)
        if found is not None and found.shows:
            return replace(
                found,
                what=f"{first.what.rstrip(',')}, and beside it a {found.what.rstrip(',')},",
                test=finding.test if other.test == CURVE else other.test,
                about=" + ".join(dict.fromkeys(key for key in (first.about, found.about) if key)),
                pattern=first.pattern or found.pattern,
                p=first.p,
                sign=f"{first.sign}; the second part, once the first is in, {percent(other.estimate)} of the "
                f"rest, {p_value(other.p)}",
            )
    return None


def _shown(evidence: Evidence, design: Design, looks: int = 1) -> list[Finding]:
    """Curves, seasons and steps that show, the clearest first. looks : by which every p is multiplied."""
    curve = _curve(evidence, design, looks)
    return sorted([*([] if curve is None else [curve]), *_patterns(evidence, design, looks)], key=_adjusted)


def _adjusted(finding: Finding) -> float:
    return finding.p if finding.p_adjusted is None else finding.p_adjusted


def _curve(evidence: Evidence, design: Design, looks: int) -> Finding | None:
    """The clearest curve: given the dependence where it was so tested, Holm over covariates."""
    found = [f for f in evidence.of("mean") if f.test == CURVE and np.isfinite(f.p)]
    found = [f for f in found if smooth_in(design, f.about) is None]
    given = [f for f in found if f.given]
    found = given or found
    if not found:
        return None
    best = min(found, key=lambda f: f.p)
    p = _adjusted(best) if best.p_adjusted is not None else min(1.0, best.p * len(found))
    return best if looks * p < LEVEL else None


def _patterns(evidence: Evidence, design: Design, looks: int) -> list[Finding]:
    """Seasons and steps that are clear given the dependence and hold a good share of what is left over."""
    found = [f for f in evidence.of("mean") if f.test in PATTERNS and f.given and np.isfinite(f.p)]
    found = [f for f in found if f.test != "season" or _fixed_season(f, design)]
    return [f for f in found if _clear(f, looks * f.p * len(found), evidence)]


def _clear(finding: Finding, p: float, evidence: Evidence) -> bool:
    alone = evidence.get(finding.test, finding.about)
    much = finding.test == "season" and alone is not None and alone.estimate >= HOLDS_ALONE
    return (p < CLEAR and finding.estimate >= HOLDS) or (p < CLEARER and much)


def _family(finding: Finding, design: Design) -> Family | None:
    """The structure that a part of the mean can be mistaken for."""
    return smooth_in(design, finding.about) if finding.test == CURVE else SMOOTH.get(finding.test)


def _smooth(evidence: Evidence, ledger: Ledger, design: Design) -> list[Finding]:
    families = {s.structure for s in ledger.standing if s.verdict == "present"}
    found = [
        f
        for f in evidence.of("mean")
        if np.isfinite(f.p)
        and f.p < LEVEL
        and f.test != "break"  # a step counts given the dependence alone
        and (_fixed_season(f, design) if f.test == "season" else not f.given)
        and _family(f, design) in families
    ]
    return sorted(found, key=lambda f: f.p)


def _fixed_season(finding: Finding, design: Design) -> bool:
    """A fixed pattern that shows given the dependence; one of unknown period is not put into a model."""
    assert design.serial is not None
    return bool(finding.given) and finding.about in dict(cycles(design.serial))


def _extension(fits: Fits, finding: Finding) -> Design:
    if finding.test == "season":
        return with_season(fits.design, finding.about)
    if finding.test == "break":
        return with_step(fits, frozenset(finding.given))
    return extension(fits.design, finding.test, finding.about)


# ---- with the part in the model ------------------------------------------------------------------


def _try(fits: Fits, finding: Finding, ledger: Ledger, *, shows: bool) -> Missing | None:
    """Add the part and judge every structure again; None when the model cannot carry it."""
    try:
        again = fits.onto(_focused(_extension(fits, finding), fits.design))
        tests = tuple(t for t in TESTS if t.primary or t.id in AGAIN)
        evidence = gather(again, tests)
        after = judged(again, evidence, focus_rows(fits))
    except NotSupported:
        return None
    pairs = [(s, now) for s in ledger.standing if (now := after.of(s.key)) is not None]
    shown = [(s, now) for s, now in pairs if s.verdict == "present"]
    goes = [now for s, now in shown if now.verdict != "present" and _halved(ledger, after, s.key)]
    stays = [now for _, now in shown if now not in goes]
    appears = [now for s, now in pairs if s.verdict != "present" and now.verdict == "present"]
    family = _family(finding, fits.design)
    # That it is no longer seen does not show that it is not there: what remains at its upper end counts.
    open_end = [now for now in goes if now.widens]
    mine = [s for s, _ in shown if s.structure == family]
    if finding.test == "break" and open_end:
        shows = False  # a step and a slow process are one picture: it counts only where nothing is left
    doubt = bool(open_end) if shows else any(_halved(ledger, after, s.key) for s in mine)
    return Missing(
        what=_words(fits, finding),
        test=finding.test,
        about=finding.about,
        shows=shows,
        pattern=shows and finding.test == "season",
        goes=tuple(now.label for now in goes),
        stays=tuple(now.label for now in stays),
        appears=tuple(now.label for now in appears),
        doubt=doubt,
        p=_adjusted(finding),
        sign=_sign(finding),
        left=_left(ledger, after, goes, stays, appears, open_end),
        after=after,
        evidence=evidence,
        again=again,
    )


def _focused(wider: Design, design: Design) -> Design:
    """The added term never enters the focus, also when every term of the model is in it."""
    if design.focus():
        return wider
    names = {t.name for t in focus_terms(design)}
    return replace(wider, terms=tuple(replace(t, focus=t.name in names) for t in wider.terms))


def _halved(before: Ledger, after: Ledger, key: str) -> bool:
    one, two = before.share(key), after.share(key)
    return one is not None and two is not None and two.share < one.share / 2


# ---- words ---------------------------------------------------------------------------------------


def _words(fits: Fits, finding: Finding) -> str:
    if finding.test == CURVE:
        return f"curve in {finding.about}"
    if finding.test == "season":
        return f"season of the {finding.about}"
    if finding.test == "break":
        return f"step in the level, {finding.estimate_name.rpartition(', ')[2]},"
    if finding.test == "trend":
        series = fits.design.serial
        return f"slow trend in {series.name}" if series is not None else "slow trend"
    return f"{finding.about} surface over the map"


def _sign(finding: Finding) -> str:
    """ "it would explain 34 % of what the model leaves over, p < 10⁻⁶" """
    return f"it would explain {percent(finding.estimate)} of what the model leaves over, {p_value(finding.p)}"


def _left(
    before: Ledger,
    after: Ledger,
    goes: list[Standing],
    stays: list[Standing],
    appears: list[Standing],
    open_end: list[Standing],
) -> str:
    """What hangs together with the part in, and what no longer does."""
    parts = [
        f"{subject(now)} no longer hang together ({_share(before, now.key)} of the rest before, "
        f"{_share(after, now.key)} after)"
        for now in goes
    ]
    for now in stays:
        verb = "still" if now.verdict == "present" else "may still"
        parts.append(f"{subject(now)} {verb} hang together ({_share(after, now.key)})")
    parts += [f"{subject(now)} turn out to hang together ({_share(after, now.key)})" for now in appears]
    if not before.standing:
        return "no dependence between rows could be looked for, as no structure was declared"
    if not parts:
        return "rows still show no dependence"
    worst = max((now.worst for now in open_end), key=lambda f: abs(np.log(f)), default=1.0)
    if open_end:
        times = significant(worst) if worst <= MOST else f"more than {MOST:g}"
        parts.append(f"what is left could make a focus standard error {times} times as large")
    elif goes and not stays and not appears:
        parts.append("what is left could not widen a focus interval")
    return listed(parts)


def _share(ledger: Ledger, key: str) -> str:
    share = ledger.share(key)
    return percent(share.share) if share is not None else "not sized"
