"""The ledger: what each structure holds, and what it does to every interval."""

from __future__ import annotations

from dataclasses import replace

from clingstone.covariance.fits import Fits
from clingstone.design.design import Design, Term
from clingstone.evidence.finding import Evidence, Test
from clingstone.ledger import standing as judge
from clingstone.ledger.consequence import inflation, parts
from clingstone.ledger.detect import detectable
from clingstone.ledger.entries import (
    Detectable,
    Inflation,
    Ledger,
    Parameter,
    Share,
    Standing,
    Tipping,
)
from clingstone.ledger.region import region
from clingstone.ledger.sizes import parameters, shares
from clingstone.ledger.tipping import tipping
from clingstone.needs import NotSupported
from clingstone.remedies.remedy import rows

__all__ = [
    "Detectable",
    "Inflation",
    "Ledger",
    "Parameter",
    "Share",
    "Standing",
    "Tipping",
    "focus_rows",
    "focus_terms",
    "judged",
    "weigh",
]


def weigh(fits: Fits, evidence: Evidence, tests: tuple[Test, ...] | None = None) -> Ledger:
    """Judge every declared structure on the first column of y, and say what it does.

    Parameters
    ----------
    fits : error models of the user's y. evidence : what ``gather`` found.
    tests : where the primary tests are looked up for detectable sizes; default all registered.

    Returns
    -------
    Ledger
        The standing of each structure comes from its own test and from the restricted likelihood
        ratio given all the others; shares and parameters are those of the adequate model, the
        inflation table that of the fit with every structure, so that what was left out is seen too.
    """
    if tests is None:
        from clingstone.evidence import TESTS

        tests = TESTS
    focus = focus_rows(fits)
    found = judged(fits, evidence, focus)
    if not found.shares:
        return found
    return replace(
        found,
        tipping=tipping(fits, found, focus) if fits.design.known else (),
        detectable=detectable(fits, found.standing, tests, judge.adjusted_tests(evidence)),
    )


def judged(fits: Fits, evidence: Evidence, focus: tuple[str, ...]) -> Ledger:
    """The ledger without tipping points and detectable sizes: standings, shares, consequences.

    focus : the rows whose intervals matter (those of ``focus_rows`` for the user's own model).
    """
    confidence = fits.run.settings.confidence
    try:
        full = region(fits, fits.full_node, confidence)
    except NotSupported as error:
        return _unfitted(fits, evidence, error)
    found = parts(fits, full)
    standing = judge.examine(fits, evidence, found, full, focus)
    node, history = judge.adequate(fits, standing)
    kept = full if node == fits.full_node else region(fits, node, confidence)
    left_out = {**fits.refused, **fits.left_out}
    return Ledger(
        model=tuple(key for key in fits.components if key in node),
        standing=standing,
        shares=shares(fits, kept, full),
        parameters=parameters(fits, kept, full),
        inflation=inflation(found, full) if fits.design.known else (),
        tipping=(),
        detectable=(),
        refused=tuple((key, refusal.reason) for key, refusal in left_out.items()),
        history=history,
        method=full.method,
    )


def _unfitted(fits: Fits, evidence: Evidence, error: NotSupported) -> Ledger:
    """No error model can be fitted at all (a perfect fit): the tests alone are left to judge by."""
    keys = fits.components or fits.refused
    return Ledger(
        model=(),
        standing=judge.examine(fits, evidence, None, None, ()),
        shares=(),
        parameters=(),
        inflation=(),
        tipping=(),
        detectable=(),
        refused=tuple((key, str(error)) for key in keys),
        history=(f"no error model was fitted: {error}",),
    )


def focus_rows(fits: Fits) -> tuple[str, ...]:
    """Coefficients of focus terms, then named contrasts: the intervals that matter to the user."""
    design = fits.design
    if not design.known:
        return ()
    names, _ = rows(design)
    return (*(design.names[j] for t in focus_terms(design) for j in t.columns), *names[design.p :])


def focus_terms(design: Design) -> tuple[Term, ...]:
    """Terms in focus; all but the constant when none is named; the constant when it is all there is."""
    return design.focus() or tuple(t for t in design.terms if t.kind != "constant") or design.terms
