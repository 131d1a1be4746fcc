"""How prose names what the results hold by key: structures, tests, refits, rows of the user's table."""

from __future__ import annotations

import re

from clingstone.display import clean, listed, plural_of, rows
from clingstone.evidence.finding import Finding
from clingstone.results import Results
from clingstone.structure.group import title_of
from clingstone.summary import GroupSummary

TESTS = {
    "durbin-watson": "Durbin–Watson",
    "panel-durbin-watson": "Durbin–Watson within series",
    "irregular-serial": "products of residuals close in time",
    "breusch-godfrey": "Breusch–Godfrey",
    "ljung-box": "Ljung–Box",
    "panel-serial": "serial correlation within groups",
    "common-shocks": "common shocks",
    "break": "break in time",
    "intraclass-correlation": "intraclass correlation by restricted likelihood",
    "group-f": "F test of groups",
    "group-lm": "score test of groups",
    "restricted-lr": "restricted likelihood ratio",
    "cluster-level": "level of clustering",
    "group-endogeneity": "within against between groups",
    "slope-variation": "slopes that differ between groups",
    "moran": "Moran's I",
    "geary": "Geary's C",
    "site-f": "F test of places",
    "correlogram": "correlogram",
    "direction": "direction",
    "local": "local likeness",
    "lm-error": "score test of spatial errors",
    "lm-lag": "score test of a spatial lag",
    "robust-lm-error": "score test of spatial errors beside a lag",
    "robust-lm-lag": "score test of a spatial lag beside errors",
    "variogram": "variogram",
    "functional-form": "{}",
    "trend": "{}",
    "season": "season",
    "trend-surface": "{}",
    "heteroscedasticity": "unequal spread along {}",
    "outliers": "outlying rows",
    "normality": "shape of the residuals",
    "duplicates": "copied rows",
}
WHOLE = ("all rows", "rows identical in every column used")
_ROLE = re.compile(r" \((response|predictor|weight|group|series|time|place)\)$")


def named(row: str) -> str:
    """A row of the intervals inside a sentence: a level of a factor holds a colon of its own."""
    return f"“{row}”" if ":" in row else row


def noun(g: GroupSummary) -> str:
    """ "lamb" for one group of "flock/lamb", "Variety within Block" where the labels of a level recur."""
    if not g.parent:
        return g.key
    inner = [label.rsplit("/", 1)[-1] for label in g.labels]
    return title_of(g.key) if len(set(inner)) < len(inner) else g.key.removeprefix(f"{g.parent}/")


def noun_at(results: Results, key: str) -> str:
    """What one group is called, by the key of its level."""
    return next((noun(g) for g in results.case.group if g.key == key), key)


def groups_of(g: GroupSummary) -> str:
    """The groups of a level, several of them: "clinics"."""
    name = noun(g)
    return f"{name} groups" if name.endswith("s") else plural_of(name)


def subject(results: Results, key: str) -> str:
    """Which rows a structure joins: "rows of one clinic", "rows close in time", "rows of near places"."""
    family, _, level = key.partition(":")
    if key == "group:site":
        return "rows of one place"
    if family == "group":
        return f"rows of one {noun_at(results, level)}"
    if key == "serial" and results.case.serial is not None:
        return "rows that follow each other in time"
    return {"serial": "rows close in time", "spatial": "rows of near places", "row": "single rows"}.get(
        family, label_of(results, key)
    )


def label_of(results: Results, key: str) -> str:
    """How a reader knows a component: the label that the ledger gave it."""
    labels = {s.key: s.label for s in results.ledger.shares} | {
        s.key: s.label for s in results.ledger.standing
    }
    if key in labels:
        return labels[key]
    return "row noise" if key == "row" else key.split(":", 1)[-1]


def name_of_test(f: Finding) -> str:
    """The test by its usual name, and at what it was run."""
    name = TESTS.get(f.test, f.test.replace("-", " "))
    if "{}" in name:
        return name.format(f.about_words)
    return name if not f.about_words or f.about_words in WHOLE else f"{name}, {f.about_words}"


def words_of_test(results: Results, f: Finding) -> str:
    """The test as a reader names it, at what, and given what."""
    given = listed(label_of(results, key) for key in f.given)
    return f"{name_of_test(f)}; given {given}" if given else name_of_test(f)


def remedy_words(results: Results, remedy: str, at: str = "") -> str:
    """A remedy as its refit is called, else its id in words."""
    named = [r for r in results.refits if r.remedy == remedy and r.at == at]
    if named:
        return named[0].name
    return remedy.replace("-", " ") + (f" by {at}" if at else "")


def pointed_at(results: Results, f: Finding) -> str:
    """The rows that a finding points at, as the user's table counts them: "row 12", "rows 3, 9 and 41"."""
    return f"{rows(f.rows, most=8)} of {clean(results.case.name)}" if f.rows else ""


def lost(reason: str) -> str:
    """Why rows were left out, without the role of the column: "missing y (response)" is "y missing"."""
    bare = _ROLE.sub("", reason)
    return f"{bare.removeprefix('missing ')} missing" if bare.startswith("missing ") else bare


def with_rows(results: Results, words: str, rule: str) -> str:
    """A caution with the rows that it is about, where findings name them."""
    if rule != "outlying-rows":
        return words
    named = (f for f in results.evidence if f.test == "outliers" and f.rows)
    found = max(named, key=lambda f: len(f.given), default=None)  # given the dependence, where it was fitted
    return words if found is None else f"{words.rstrip(' .')} ({pointed_at(results, found)})."
