"""The verbs that people call, and what ``examine`` gives back."""

from __future__ import annotations

import math
import platform
from collections.abc import Mapping
from dataclasses import asdict, dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

from clingstone.advice.choose import REPAIRED, Advice, settle, shortlist_for
from clingstone.advice.facts import facts as gather_facts
from clingstone.case import Case
from clingstone.covariance.fits import Fits
from clingstone.design.derived import only, onto
from clingstone.design.design import Contrast
from clingstone.display import amount, instead, listed
from clingstone.evidence.finding import Evidence, Finding
from clingstone.evidence.gather import gather
from clingstone.intake import partitions
from clingstone.ledger.ledger import Ledger, weigh
from clingstone.needs import InputError
from clingstone.rehearsal.rehearsal import checked
from clingstone.rehearsal.tallies import Rehearsal
from clingstone.rehearsal.verdict import advised as rehearsed_advice
from clingstone.rehearsal.verdict import heeded
from clingstone.remedies import REMEDIES
from clingstone.remedies import explain as explain_at
from clingstone.remedies import refit as refit_at
from clingstone.remedies import remedy as remedy_of
from clingstone.remedies.remedy import Convention, Interval, Refit
from clingstone.reopened import reopened, saved
from clingstone.results import SCHEMA, Reference, Results, compare
from clingstone.run import Alternative, Missing, Progress, Run, Settings, Ties, Weights, one_thread
from clingstone.writeup.shown import Shown

if TYPE_CHECKING:
    import pandas as pd


def examine(
    data: Any,
    *,
    model: str | None = None,
    residual: str | None = None,
    sheet: str | None = None,
    wide: str | tuple[str, ...] | list[str] | None = None,
    group: str | tuple[str, ...] | list[str] | None = None,
    time: str | None = None,
    series: str | None = None,
    coords: tuple[str, str] | list[str] | None = None,
    lonlat: bool | None = None,
    neighbours: str | None = None,
    weights: str | None = None,
    weights_kind: Weights = "precision",
    focus: str | tuple[str, ...] | list[str] | None = None,
    contrasts: Mapping[str, Mapping[str, float]] | None = None,
    means: str | tuple[str, ...] | list[str] | None = None,
    unadjusted: bool = False,
    assigned: Mapping[str, Any] | None = None,
    sampled: str | None = None,
    missing: Missing = "stop",
    ties: Ties = "stop",
    confidence: float = 0.95,
    alternative: Alternative = "two-sided",
    material: tuple[float, float] = (0.95, 1.10),
    rehearsal: str | int = "auto",
    seed: int = 0,
    progress: Progress | None = None,
) -> Examination:
    """Find which rows hang together, what that does to each interval, and what to report.

    Parameters
    ----------
    data : path of a file (CSV, Parquet, Feather, Excel, SPSS, SAS, Stata, GeoPackage and others), any
        dataframe that narwhals reads, or a fitted statsmodels OLS or WLS result of a formula. A folder of
        Parquet files and a Dask data frame are brought into memory; :func:`examine_parts` leaves them apart.
    model : formula such as ``"weight ~ day + birth"``.
    progress : called with (label, done, total) while heavy work runs.

    All other arguments are those of :class:`clingstone.Settings`.

    Returns
    -------
    Examination

    Raises
    ------
    InputError : the data or an argument is wrong; the message says what, where, and the ``hint``
        what to do.
    NotSupported : these data cannot carry what was asked.
    """
    settings = settings_of({k: v for k, v in locals().items() if k not in ("data", "progress")})
    if isinstance(settings.rehearsal, int):
        checked(settings.rehearsal)  # before the data are read
    if partitions.is_parted(data):
        data = partitions.gathered(data)
    with one_thread():
        return examined(Case.of(data, settings), Run(settings, report=progress))


def settings_of(arguments: Mapping[str, Any]) -> Settings:
    """Settings from arguments as a person writes them: lists become tuples, one name a tuple of one."""

    def many(value: Any) -> Any:
        return (value,) if isinstance(value, str) else None if value is None else tuple(value)

    given = dict(arguments)
    for name in ("focus", "means"):
        given[name] = many(given.get(name))
    for name in ("wide", "group", "coords", "material"):
        if isinstance(given.get(name), list):
            given[name] = tuple(given[name])
    return Settings(**given)


def examined(case: Case, run: Run) -> Examination:
    """``examine`` of a case that is made already."""
    settings = run.settings
    with run.progress("examining", 5) as advance:
        fits = Fits(case.response, run)
        evidence = gather(fits)
        advance(1)
        ledger = weigh(fits, evidence)
        advance(1)
        facts = gather_facts(fits, evidence, ledger)
        shortlist = shortlist_for(facts, fits)
        refits = shortlist.refit(fits)
        advance(1)
        advice = settle(shortlist, facts, refits, None)
        advice, rehearsed = rehearsed_advice(fits, ledger, facts, shortlist, refits, advice)
        refits = _explained(fits, advice, refits)
        if settings.unadjusted:
            refits = (*refits, *_alone(fits, advice, refits))
        advance(1)
        results = _write(case, fits, evidence, ledger, advice, refits, rehearsed)
        advance(1)
    return Examination(case, fits, results)


def _explained(fits: Fits, advice: Advice, refits: tuple[Refit, ...]) -> tuple[Refit, ...]:
    """The ordinary and the advised refit with their intervals under the other common conventions."""

    def explained(r: Refit) -> Refit:
        if r.remedy == REPAIRED or (
            r.remedy != "ordinary" and (r.remedy, r.at) != (advice.remedy, advice.at)
        ):
            return r
        return replace(r, conventions=explain_at(remedy_of(r.remedy), r.at, fits))

    return tuple(explained(r) for r in refits)


def _alone(fits: Fits, advice: Advice, refits: tuple[Refit, ...]) -> tuple[Refit, ...]:
    """Each focus term fitted alone with the constant, under the advised remedy."""
    advised = next((r for r in refits if (r.remedy, r.at) == (advice.remedy, advice.at)), None)
    if advised is None or not fits.design.known or advice.remedy == REPAIRED:
        return ()
    rows: list[Interval] = []
    for term in fits.design.focus():
        derived = only(fits.design, term)
        alone = refit_at(remedy_of(advice.remedy), advice.at, Fits(onto(fits.response, derived), fits.run))
        names = [fits.design.names[j] for j in term.columns]
        rows += [replace(alone.get(name), term=f"{name} [alone]") for name in names]
    return (
        replace(
            advised,
            name=f"{advised.name}, each term alone",
            intervals=tuple(rows),
            terms=(),
            coefficients=(),
            estimate=(),
            covariance=None,
            conventions=(),
        ),
    )


def _write(
    case: Case,
    fits: Fits,
    evidence: Evidence,
    ledger: Ledger,
    advice: Advice,
    refits: tuple[Refit, ...],
    rehearsed: Rehearsal | None,
) -> Results:
    """The plain bundle, with its methods text and references."""
    bare = Results(
        clingstone=version(),
        schema=SCHEMA,
        case=case.summary(),
        evidence=tuple(_placed(f, case) for f in evidence.findings),
        ledger=ledger,
        advice=advice,
        refits=refits,
        rehearsal=rehearsed,
        methods="",
        references=(),
        settings=asdict(fits.run.settings),
        versions=versions(),
    )
    return _worded(bare)


def _worded(bare: Results) -> Results:
    """The results with the methods text and the references that they call for."""
    from clingstone.writeup.bibliography import references_of
    from clingstone.writeup.methods import methods_text

    cited: tuple[Reference, ...] = references_of(bare)
    return replace(bare, methods=methods_text(bare), references=cited)


def _placed(f: Finding, case: Case) -> Finding:
    """A finding whose rows are places in the user's table."""
    return replace(f, rows=tuple(int(case.kept[r]) for r in f.rows)) if f.rows else f


def version() -> str:
    from clingstone import __version__

    return __version__


def versions() -> dict[str, str]:
    """Versions of Python and of the libraries whose numbers these are."""
    from importlib.metadata import version as of

    libraries = ("numpy", "scipy", "pandas", "formulaic", "statsmodels", "libpysal", "esda", "matplotlib")
    return {"clingstone": version(), "Python": platform.python_version()} | {k: of(k) for k in libraries}


@dataclass(frozen=True, eq=False, repr=False)
class Examination(Shown):
    """What was found: plain results, and the live case and fits they came from."""

    case: Case
    fits: Fits
    results: Results

    @property
    def evidence(self) -> Evidence:
        """All findings; ``.to_frame()`` gives a table."""
        return Evidence(self.results.evidence)

    @property
    def ledger(self) -> Ledger:
        return self.results.ledger

    @property
    def advice(self) -> Advice:
        return self.results.advice

    @property
    def refits(self) -> tuple[Refit, ...]:
        return self.results.refits

    @property
    def intervals(self) -> pd.DataFrame:
        """One row per term × remedy; the ordinary fit is ``remedy == "ordinary"``."""
        import pandas as pd

        return pd.DataFrame([asdict(row) for row in self.results.intervals])

    @property
    def terms(self) -> pd.DataFrame:
        """Joint tests of terms with more than one coefficient."""
        import pandas as pd

        columns = ["term", "remedy", "F", "df1", "df2", "p"]
        return pd.DataFrame([asdict(row) for row in self.results.terms], columns=columns)

    @property
    def rehearsal(self) -> Rehearsal | None:
        """How each remedy did on replicates of this design; None when none was made."""
        return self.results.rehearsal

    def with_rehearsal(self, found: Rehearsal) -> Examination:
        """A new examination that holds a rehearsal, with an advice that has heard it."""
        fits = self.fits
        with one_thread():
            facts = gather_facts(fits, self.evidence, self.ledger)
            shortlist = shortlist_for(facts, fits)
            whole = tuple(r for r in self.refits if r.coefficients or not r.intervals)
            first = settle(shortlist, facts, whole, None)
            advice = heeded(found, facts, shortlist, whole, first)
        return self.rewritten(advice, found)

    def rewritten(self, advice: Advice, found: Rehearsal) -> Examination:
        """The same evidence and refits under another advice, with the rehearsal behind it."""
        with one_thread():
            refits = _explained(self.fits, advice, self.refits)
        # A rehearsal made apart is not examine's own: a replay takes it as it was saved.
        settings = {**self.results.settings, "rehearsal": "none"}
        bare = replace(self.results, advice=advice, refits=refits, rehearsal=found, settings=settings)
        return replace(self, results=_worded(bare))

    @property
    def references(self) -> tuple[Reference, ...]:
        return self.results.references

    def refit(self, remedy: str | None = None, at: str | None = None) -> Refit:
        """The refit of a remedy (at a level), by default the advised one.

        Raises InputError when there is none.
        """
        if remedy is None:
            remedy, at = self.advice.remedy, self.advice.at
        found = next((r for r in self.refits if r.remedy == remedy and at in (None, r.at)), None)
        if found is None:
            raise self._unfitted(remedy, at)
        return found

    def _unfitted(self, remedy: str, at: str | None) -> InputError:
        """Why there is no such refit: refused, at other levels only, not among the candidates, or unknown."""
        levels = [r.at for r in self.refits if r.remedy == remedy]
        if levels:
            return InputError(f"there is no refit {remedy!r} at {at!r} here", f"It is at {listed(levels)}.")
        why = next(((reason, hint) for name, reason, hint in self.advice.refused if name == remedy), None)
        if why is not None:
            return InputError(f"{remedy} was refused for these data: {why[0]}", why[1])
        have = ", ".join(dict.fromkeys(r.remedy for r in self.refits)) or "none: nothing was refitted"
        if any(one.id == remedy for one in REMEDIES):
            return InputError(
                f"{remedy!r} is not among the refits made here: {have}",
                f"Run it alone with clingstone.refit(examination.case, {remedy!r}).",
            )
        return InputError(f"there is no refit {remedy!r} here", f"Choose one of {have}.")

    def explain(self, remedy: str | None = None, at: str | None = None) -> tuple[Convention, ...]:
        """What the numbers of one remedy (the advised one) become under the other common conventions."""
        found = self.refit(remedy, at)
        with one_thread():
            return found.conventions or explain_at(remedy_of(found.remedy), found.at, self.fits)

    def contrast(
        self, weights: Mapping[str, float], remedy: str | None = None, at: str | None = None
    ) -> Interval:
        """A linear combination of coefficients under one remedy (the advised one).

        weights : coefficient → weight, such as ``{"arm: visits": 1, "age": 10}``. The remedy is run
        again with that combination among its rows, so that its standard error and degrees of freedom
        are its own, and not put together from those of the coefficients.

        Raises InputError for an unknown coefficient or remedy, NotSupported when these data cannot
        carry the remedy or it cannot serve this combination.
        """
        found = self.refit(remedy, at)
        design = self.case.design
        name = " + ".join(f"{amount(w)} × {c}" for c, w in weights.items())
        row = Contrast(name, _weights(design.names, weights))
        derived = onto(self.case.response, replace(design, contrasts=(row,)))
        with one_thread():
            return refit_at(remedy_of(found.remedy), found.at, Fits(derived, self.fits.run)).get(name)

    def agrees_with(self, folder: str | Path) -> tuple[bool, tuple[str, ...]]:
        """Whether every number agrees, to 1e-8, with an examination that was saved, and what was compared.

        Raises InputError when the folder holds none.
        """
        return self.agreeing(saved(folder))

    def agreeing(self, held: Results) -> tuple[bool, tuple[str, ...]]:
        """``agrees_with`` for results that were read already."""
        apart = held.rehearsal is not None and self.case.settings.rehearsal == "none"
        again = (self.with_rehearsal(held.rehearsal) if apart and held.rehearsal else self).results
        lines = compare(held, again)
        words = [f"{len(held.evidence)} findings and {len(held.intervals)} intervals compared to 1e-8"]
        if apart:
            words.append("the rehearsal, made apart, is taken as saved; clingstone rehearse makes it again")
        moved = [
            f"{k}: {v} then, {again.versions.get(k)} now"
            for k, v in held.versions.items()
            if again.versions.get(k) != v
        ]
        if moved:
            words.append("versions differ: " + "; ".join(moved))
        words.append("every number agrees" if not lines else f"{len(lines)} differ:")
        return not lines, (*words, *lines)

    def save(self, folder: str | Path, *, overwrite: bool = False, progress: Progress | None = None) -> Path:
        """Write report.html, methods (.md, .tex, .docx), references, tables, figures and results.json.

        progress : called with (label, done, total); the one given to ``examine`` unless another is.
        Raises InputError when the folder is taken or cannot be written.
        """
        from clingstone.writeup.save import save

        return save(self.results, folder, overwrite=overwrite, progress=progress or self.fits.run.report)


def _weights(names: tuple[str, ...], wanted: Mapping[str, float]) -> tuple[float, ...]:
    """(p,) weights of a combination, in the order of the coefficients."""
    for name, weight in wanted.items():
        if name not in names:
            raise InputError(f"the model has no coefficient ‘{name}’", instead(name, names))
        if not math.isfinite(weight):
            raise InputError(f"the weight of ‘{name}’ is {weight}", "Give a finite number.")
    if not any(wanted.values()):
        raise InputError("a contrast of weights 0 says nothing", "Give a weight other than 0.")
    return tuple(float(wanted.get(name, 0.0)) for name in names)


def refit(case: Case, remedy: str, at: str = "") -> Refit:
    """One remedy on a case.

    Raises InputError for an unknown remedy, NotSupported when these data cannot carry it.
    """
    with one_thread():
        return refit_at(remedy_of(remedy), at, Fits(case.response, Run(case.settings)))


def replay(folder: str | Path, data: Any = None) -> tuple[bool, tuple[str, ...]]:
    """Run a saved examination again and compare every number to 1e-8.

    data : where the data are now, when the path in results.json no longer leads to them.

    Returns
    -------
    (agrees, lines) : lines say what was compared and where numbers differ.

    Raises
    ------
    InputError : the folder holds no results.json, or the data are not found or have changed.
    """
    held = saved(folder)
    case = reopened(held, data)
    with one_thread():
        again = examined(case, Run(case.settings))
    return again.agreeing(held)
