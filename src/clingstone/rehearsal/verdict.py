"""What a rehearsal does to the advice."""

from __future__ import annotations

from dataclasses import replace

from clingstone.advice.choose import Advice, settle
from clingstone.advice.facts import Facts
from clingstone.advice.shortlist import Shortlist
from clingstone.covariance.fits import Fits
from clingstone.ledger.ledger import Ledger
from clingstone.needs import NotSupported
from clingstone.rehearsal.rehearsal import planned, reason, rehearse, scores_for
from clingstone.rehearsal.tallies import Rehearsal
from clingstone.remedies.remedy import Refit

BLIND = ("mean first", "not correctable")  # states that no simulation of errors could change


def advised(
    fits: Fits, ledger: Ledger, facts: Facts, shortlist: Shortlist, refits: tuple[Refit, ...], advice: Advice
) -> tuple[Advice, Rehearsal | None]:
    """The advice after the rehearsal that the settings ask for, and that rehearsal (None when not made)."""
    wanted = fits.run.settings.rehearsal
    if wanted == "none" or advice.state in BLIND or not fits.design.known:
        return advice, None
    choices = tuple((r.remedy, r.at) for r in refits)
    try:
        found = rehearse(planned(fits, ledger, choices, wanted))
    except NotSupported:
        return advice, None  # nothing in focus, or too large for a short one: the rules stand alone
    return heeded(found, facts, shortlist, refits, advice), found


def heeded(
    found: Rehearsal, facts: Facts, shortlist: Shortlist, refits: tuple[Refit, ...], advice: Advice
) -> Advice:
    """The advice of the rules, reconsidered: the narrowest of the remedies that held what they promise."""
    table = scores_for(found, advice)
    if table is None:
        return advice
    again = settle(shortlist, facts, refits, table) if advice.remedy != "ordinary" else advice
    named = next((r.name for r in refits if (r.remedy, r.at) == (again.remedy, again.at)), again.remedy)
    why = reason(found, again, named)
    return again if why is None else replace(again, because=(*again.because, why))
