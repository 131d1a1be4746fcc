"""The tables of a write-up, each built once from Results; text, HTML, LaTeX and CSV read the same table."""

from __future__ import annotations

import math

from clingstone.display import (
    Cell,
    Column,
    Table,
    decimals_for,
    degrees,
    number,
    p_figure,
    percent,
    percent_span,
    sentence,
    significant,
    span,
)
from clingstone.evidence.finding import Finding
from clingstone.ledger.ledger import Inflation, Parameter, Share
from clingstone.remedies.remedy import Interval, Refit
from clingstone.results import Results
from clingstone.writeup import strength
from clingstone.writeup.naming import label_of, pointed_at, remedy_words, words_of_test
from clingstone.writeup.plate import many
from clingstone.writeup.read import (
    ALONE,
    advised,
    as_ratio,
    decimals,
    focus_rows,
    level_percent,
    names_of,
    ordered,
    ordinary,
    row_of,
)

STRUCTURES = {
    "group": "group",
    "serial": "serial",
    "spatial": "spatial",
    "mean": "the mean",
    "lookalike": "look-alikes",
}


def intervals(results: Results, name: str) -> Table:
    """Every refit's interval for one coefficient, contrast or mean, advised first."""
    places = decimals(results, name)
    rows = [
        _interval_cells(results, fit, row, places)
        for fit in ordered(results)
        for row in fit.intervals
        if row.term in (name, name + ALONE)
    ]
    columns = (
        Column("remedy", "refit"),
        Column("estimate", "estimate", "decimal"),
        Column("interval", f"{level_percent(results)} interval", "right"),
        Column("ratio", "as a ratio", "right"),
        Column("se", "standard error", "decimal"),
        Column("se_ratio", "against ordinary", "decimal"),
        Column("df", "df", "decimal"),
        Column("df_rule", "rule for df"),
        Column("p", "p", "right"),
    )
    return Table.of(name, columns, rows, _status_note(results, name)).without_empty()


def _interval_cells(results: Results, fit: Refit, row: Interval, places: int) -> list[Cell]:
    best = advised(results)
    name = f"{fit.name} (advised)" if best is fit else fit.name
    if not math.isfinite(row.estimate):
        return [Cell(name, fit.remedy), *(Cell(t) for t in ("not given", "", "", "", "", "", row.status, ""))]
    return [
        Cell(name, fit.remedy),
        Cell(number(row.estimate, places), row.estimate),
        Cell(span(row.low, row.high, places)),
        Cell(as_ratio(results, fit, row)),
        Cell(number(row.se, places), row.se),
        Cell(number(row.se_ratio, 2), row.se_ratio),
        Cell(degrees(row.df), row.df),
        Cell(row.df_rule, row.df_rule),
        Cell(p_figure(row.p), row.p),
    ]


def _status_note(results: Results, name: str) -> str:
    notes = [
        f"{fit.name}: {row.status}."
        for fit in ordered(results)
        for row in fit.intervals
        if row.term == name and row.status != "ok"
    ]
    return " ".join(notes)


def conventions(results: Results, name: str) -> Table | None:
    """What the advised and the ordinary interval of a row become under other common conventions."""
    places = decimals(results, name)
    rows = []
    for fit in dict.fromkeys(id(f) for f in (advised(results), ordinary(results)) if f is not None):
        found = next(f for f in results.refits if id(f) == fit)
        own = row_of(found, name)
        if own is None or not found.conventions:
            continue
        label = f"{found.name} (advised)" if found is advised(results) else found.name
        rows.append(_convention_cells(label, "as reported", own, places))
        for c in found.conventions:
            row = c.get(name)
            if row is not None and math.isfinite(row.estimate):
                rows.append(_convention_cells("", c.words, row, places))
    columns = (
        Column("remedy", "refit"),
        Column("convention", "convention"),
        Column("estimate", "estimate", "decimal"),
        Column("interval", f"{level_percent(results)} interval", "right"),
        Column("se", "standard error", "decimal"),
        Column("df", "df", "decimal"),
        Column("p", "p", "right"),
    )
    caption = f"{name} under other common conventions (df: degrees of freedom)"
    return Table.of(caption, columns, rows) if rows else None


def _convention_cells(label: str, words: str, row: Interval, places: int) -> list[Cell]:
    return [
        Cell(label, row.remedy),
        Cell(words, words),
        Cell(number(row.estimate, places), row.estimate),
        Cell(span(row.low, row.high, places)),
        Cell(number(row.se, places), row.se),
        Cell(degrees(row.df), row.df),
        Cell(p_figure(row.p), row.p),
    ]


def intervals_file(results: Results) -> Table:
    """The columns of ``Examination.intervals``, unrounded, for a file."""
    keys = (
        "term", "remedy", "at", "estimate", "se", "se_ratio", "df", "df_rule", "low", "high", "p", "status",
    )  # fmt: skip
    rows = [
        [fit.at if key == "at" else getattr(row, key) for key in keys]
        for fit in results.refits
        for row in fit.intervals
    ]
    return Table.of("intervals", [Column(k, k) for k in keys], rows)


def evidence_file(results: Results) -> Table:
    """Every finding without its curve, unrounded, for a file."""
    keys = (
        "structure", "test", "about", "about_words", "primary", "statistic_name", "statistic", "df", "df2",
        "alternative", "p", "p_method", "p_adjusted", "estimate_name", "estimate", "low", "high", "n_used",
        "verdict", "given", "caveats", "sentence", "source",
    )  # fmt: skip
    rows = [
        ["; ".join(value) if isinstance(value := getattr(f, key), tuple) else value for key in keys]
        for f in results.evidence
    ]
    return Table.of("evidence", [Column(k, k) for k in keys], rows)


def evidence(results: Results, structure: str) -> Table:
    """Findings of one structure: effect first, then statistic and p."""
    rows = [_finding_cells(results, f) for f in results.evidence if f.structure == structure]
    columns = (
        Column("test", "test"),
        Column("effect", "effect"),
        Column("interval", f"{level_percent(results)} interval", "right"),
        Column("statistic", "statistic", "right"),
        Column("p", "p", "right"),
        Column("p_adjusted", "adjusted p", "right"),
        Column("verdict", "verdict"),
    )
    caption = STRUCTURES.get(structure, structure).capitalize()
    return Table.of(caption, columns, rows).without_empty()


def statistic_words(f: Finding) -> str:
    """ "F = 7.6 on 11 and 398"; empty when the finding has no statistic."""
    if not math.isfinite(f.statistic):
        return ""
    text = f"{f.statistic_name or 'statistic'} = {significant(f.statistic, 3)}"
    df = [degrees(d) for d in (f.df, f.df2) if d is not None and math.isfinite(d)]
    return f"{text} on {' and '.join(df)}" if df else text


def _finding_cells(results: Results, f: Finding) -> list[Cell]:
    has = math.isfinite(f.estimate)
    places = _effect_decimals(f)
    effect = f"{f.estimate_name}: {number(f.estimate, places)}" if has else ""
    adjusted = f.p_adjusted
    where = f" ({pointed_at(results, f)})" if f.verdict == "present" and f.rows else ""
    return [
        Cell(
            words_of_test(results, f)
            + ("" if f.primary or f.verdict == "not applicable" else " (exploratory)"),
            f.test,
        ),
        Cell(effect, f.estimate),
        Cell(span(f.low, f.high, places) if has and math.isfinite(f.low + f.high) else ""),
        Cell(statistic_words(f), f.statistic),
        Cell("" if math.isnan(f.p) else p_figure(f.p), f.p),
        Cell("" if adjusted is None or math.isnan(adjusted) else p_figure(adjusted), adjusted),
        Cell(f.verdict + where, f.verdict),
    ]


def _effect_decimals(f: Finding) -> int:
    """Two decimals for what lives between −1 and 1; else two figures of half the interval."""
    if abs(f.estimate) <= 1:
        return 2
    return min(4, max(0, decimals_for((f.high - f.low) / 2)))


def shares_told(results: Results) -> tuple[Share, ...]:
    """The shares under the advised model: with the mean mended where that is advised first."""
    repair = results.advice.repair
    mended = repair is not None and results.advice.state == "mean first" and repair.shares
    return repair.shares if repair is not None and mended else results.ledger.shares


def shares_caption(results: Results) -> str:
    repair = results.advice.repair
    if repair is not None and shares_told(results) is repair.shares:
        return f"What the model with a {repair.what} leaves over, by structure"
    return "What the model leaves over, by structure"


def shares(results: Results) -> Table:
    rows = [
        [
            Cell(s.label, s.key),
            Cell(percent(s.share), s.share),
            Cell(percent_span(s.low, s.high) if math.isfinite(s.low + s.high) else "not given"),
        ]
        for s in shares_told(results)
    ]
    columns = (
        Column("structure", "structure"),
        Column("share", "share", "right"),
        Column("interval", f"{level_percent(results)} interval", "right"),
    )
    return Table.of("Shares of the residual variance", columns, rows)


def parameters(results: Results) -> Table:
    rows = [_parameter_cells(results, p) for p in results.ledger.parameters]
    columns = (
        Column("structure", "structure"),
        Column("parameter", "parameter"),
        Column("estimate", "estimate", "right"),
        Column("interval", f"{level_percent(results)} interval", "right"),
        Column("unit", "unit"),
        Column("note", "note"),
    )
    return Table.of("How strong the dependence is", columns, rows).without_empty()


def _parameter_cells(results: Results, p: Parameter) -> list[Cell]:
    return [
        Cell(label_of(results, p.key), p.key),
        Cell(p.name, p.name),
        Cell(strength.figure(results, p, p.estimate), p.estimate),
        Cell(strength.interval(results, p) or "not given"),
        Cell(many(p.unit) if p.name != "ρ" else p.unit, p.unit),
        Cell(p.note, p.note),
    ]


def inflation(results: Results) -> Table:
    """Per coefficient: variance parts that add up, and the standard-error factor with its range."""
    rows = results.ledger.inflation
    keys = list(dict.fromkeys(i.key for i in rows if i.key != "total"))
    cells = {(i.term, i.key): i for i in rows}
    columns = (
        Column("term", "coefficient"),
        *(Column(key, label_of(results, key), "right") for key in keys),
        Column("total", "factor", "right"),
        Column("range", "its range", "right"),
    )
    body = []
    for term in dict.fromkeys(i.term for i in rows):
        parts = [_part_cell(cells.get((term, key))) for key in keys]
        total = cells.get((term, "total"))
        low, high = sorted((total.low, total.high)) if total is not None else (math.nan, math.nan)
        ends = span(low, high, 2) if total is not None else ""
        body.append([Cell(term, term), *parts, _part_cell(total), Cell(ends)])
    note = (
        "Under each structure stands the variance that it gives a coefficient, in units of the variance "
        "that the ordinary fit reports; these parts add up to the square of the factor. The factor "
        "multiplies the ordinary standard error; its range is that over the interval of the dependence."
    )
    return Table.of("What each structure does to the ordinary intervals", columns, body, note)


def _part_cell(i: Inflation | None) -> Cell:
    return Cell("") if i is None else Cell(number(i.estimate, 2), i.estimate)


def joint(results: Results) -> Table | None:
    """Joint tests of terms with several coefficients, or None when there are none."""
    rows = [
        [
            Cell(t.term, t.term),
            Cell(fit.name, t.remedy),
            Cell(number(t.F, 2), t.F),
            Cell(f"{degrees(t.df1)} and {degrees(t.df2)}"),
            Cell(p_figure(t.p), t.p),
        ]
        for fit in ordered(results)
        for t in fit.terms
    ]
    columns = (
        Column("term", "term"),
        Column("remedy", "refit"),
        Column("F", "F", "decimal"),
        Column("df", "degrees of freedom", "right"),
        Column("p", "p", "right"),
    )
    return Table.of("Terms of several coefficients, tested at once", columns, rows) if rows else None


def groups(results: Results) -> Table | None:
    rows = [
        [
            Cell(g.key + (f" in {g.parent}" if g.parent else ""), g.key),
            Cell(number(g.count, 0), g.count),
            Cell(number(g.smallest, 0), g.smallest),
            Cell(f"{g.median:g}", g.median),
            Cell(number(g.largest, 0), g.largest),
            Cell(number(g.cv, 2), g.cv),
            Cell(number(g.singletons, 0), g.singletons),
        ]
        for g in results.case.group
    ]
    columns = (
        Column("level", "level"),
        Column("count", "groups", "right"),
        Column("smallest", "smallest", "right"),
        Column("median", "median", "right"),
        Column("largest", "largest", "right"),
        Column("cv", "variation of sizes", "right"),
        Column("singletons", "of one row", "right"),
    )
    note = "Variation of sizes is their standard deviation over their mean."
    return Table.of("Groups and their sizes in rows", columns, rows, note) if rows else None


def pairs(caption: str, heads: tuple[str, str], rows: dict[str, str]) -> Table:
    """A two-column table of words."""
    columns = (Column(heads[0], heads[0]), Column(heads[1], heads[1]))
    return Table.of(caption, columns, [[Cell(k, k), Cell(v, v)] for k, v in rows.items()])


def refused(results: Results) -> Table | None:
    rows = [
        [Cell(remedy_words(results, id_), id_), Cell(sentence(why), why), Cell(sentence(needed), needed)]
        for id_, why, needed in results.advice.refused
    ]
    columns = (
        Column("remedy", "not offered"),
        Column("reason", "because"),
        Column("needed", "what would be needed"),
    )
    return Table.of("Remedies that these data cannot carry", columns, rows) if rows else None


def other_rows(results: Results) -> tuple[str, ...]:
    """Interval rows outside the focus, in their own order."""
    focus = set(focus_rows(results))
    return tuple(n for n in names_of(results) if n not in focus)


def wider(results: Results, name: str) -> float:
    """Advised interval width over the ordinary one for a row; NaN when either is missing."""
    best, base = advised(results), ordinary(results)
    if best is None or base is None:
        return math.nan
    widths = [next((r.high - r.low for r in f.intervals if r.term == name), math.nan) for f in (best, base)]
    return widths[0] / widths[1] if widths[1] > 0 else math.nan
