"""``examine_parts``: the tests and refits of ``examine`` that sums over partitions can carry.

The first pass learns R and Q'y by a tree of QR factorizations, the second the sums over groups and
neighbours in time (``design.parted``); tests and refits are read from these.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from functools import partial
from typing import Any

from clingstone.covariance.fits import Fits
from clingstone.design.parted import SAMPLE, PartedDesign
from clingstone.evidence.finding import About
from clingstone.evidence.nested import GroupF, IntraclassCorrelation
from clingstone.intake import partitions
from clingstone.needs import NotSupported, Refusal
from clingstone.parts.found import Parts, Sized, sized
from clingstone.parts.read import Asked, Plan
from clingstone.parts.serial import ar1, durbin_watson, ljung_box
from clingstone.remedies import explain, refit, remedy
from clingstone.remedies.remedy import Refit
from clingstone.run import Missing, Run, Settings, one_thread


def examine_parts(
    data: Any,
    *,
    model: str,
    group: str | None = None,
    time: str | None = None,
    missing: Missing = "stop",
    confidence: float = 0.95,
) -> Parts:
    """The part of an examination that sums over partitions can carry; the rows are never together.

    Parameters
    ----------
    data : a folder of Parquet files, or a Dask data frame.
    model : formula; functions that learn from all rows (``poly``, ``bs``, ``center`` …) are refused.
    group : one column. All rows of a group are brought into one partition, and must fit in memory there.
    time : column of times in whole steps, each group a series of its own.
    missing, confidence : as in ``examine``.

    Returns
    -------
    Parts : the ordinary fit; with ``group`` the F test and both intraclass correlations, cluster-robust and
        random-intercept intervals; with ``time`` Durbin–Watson, Ljung–Box over 10 lags, and AR(1) errors.
        Sums agree with those in memory to rounding, fitted parameters to the tolerance of the search.

    Raises
    ------
    InputError : the data or an argument is wrong. NotSupported : what cannot be done by partitions.
    """
    if time is not None and group is None:
        raise NotSupported(
            "one series over all partitions is not put in order here",
            f"Name the column that tells the series apart with group=. {SAMPLE}",
        )
    settings = Settings(model=model, group=group, time=time, missing=missing, confidence=confidence)
    plan = Plan.of(partitions.opened(data), Asked(model, group, time, missing))
    with one_thread():
        response, dropped = plan.read()
        found = _told(Fits(response, Run(settings)), time)
    return replace(found, partitions=int(plan.table.npartitions), dropped=dropped)


def _told(fits: Fits, time: str | None) -> Parts:
    """Every test and refit that the sums carry; what cannot be done, with the reason."""
    design = fits.design
    assert isinstance(design, PartedDesign)
    tests: list[Sized] = []
    refits: list[Refit] = []
    rho = float("nan")
    refused = {
        "places": Refusal("rows of neighbouring places lie in different partitions", SAMPLE),
        "rehearsal and advice": Refusal("they draw and weigh whole tables", SAMPLE),
    }

    def tried(what: str, work: Callable[[], None]) -> None:
        try:
            work()
        except NotSupported as stop:
            refused[what] = Refusal(str(stop), stop.hint)

    def read(test: GroupF | IntraclassCorrelation, about: About) -> None:
        tests.append(sized(test.id, about.words, test.read(fits, about)))

    def refitted(id: str, level: str) -> None:
        held = refit(remedy(id), level, fits)
        refits.append(replace(held, conventions=explain(remedy(id), level, fits)))

    def fitted_ar1() -> None:
        nonlocal rho
        found, rho = ar1(fits, design)
        refits.append(found)

    tried("ordinary", lambda: refits.append(refit(remedy("ordinary"), "", fits)))
    if design.group is not None:
        key = design.group.finest.key
        about = About(key, f"rows of one {key}")
        for test in (GroupF(), IntraclassCorrelation()):
            tried(test.id, partial(read, test, about))
        for id in ("cluster-robust", "mixed-intercept"):
            tried(id, partial(refitted, id, key))
    if time is not None:
        tried("durbin-watson", lambda: tests.append(durbin_watson(fits, design, time)))
        tried("ljung-box", lambda: tests.append(ljung_box(fits, design, time)))
        tried("ar1", fitted_ar1)
    groups = 0 if design.group is None else design.group.finest.count
    return Parts(design.n, 1, groups, tuple(tests), tuple(refits), refused, {}, rho)
