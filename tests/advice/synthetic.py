"""Facts and refits made by hand, for rules that a data set would reach only by luck."""

from __future__ import annotations

from typing import Any

from clingstone.advice.choose import Shortlist
from clingstone.advice.entries import Choice
from clingstone.advice.facts import Facts
from clingstone.advice.mean import Missing
from clingstone.advice.named import named, words, yes
from clingstone.ledger.ledger import Detectable, Inflation, Ledger, Parameter, Share, Standing
from clingstone.remedies.remedy import Account, Interval, Refit

COVERS = {
    "ordinary": (),
    "heteroscedasticity-robust": (),
    "cluster-robust": ("group", "serial"),
    "mixed-intercept": ("group",),
    "ar1": ("serial",),
    "hac": ("serial",),
    "spatial-gls": ("spatial",),
    "joint": ("group", "serial", "spatial"),
    "repaired-mean": (),
    "cluster-jackknife": ("group", "serial"),
    "randomisation": ("group",),
    "multiway-cluster": ("group",),
    "mixed-slope": ("group",),
    "group-means": ("group",),
    "fixed-effects": ("group", "serial"),
    "car1": ("serial",),
    "arma": ("serial",),
    "group-t": ("group", "serial"),
    "spatial-error": ("spatial",),
    "spatial-components": ("spatial",),
}


def ledger(**present: str) -> Ledger:
    """group="present", serial="unclear", …: a ledger with one clinic level, one series, one map."""
    keys = {"group": "group:clinic", "serial": "serial", "spatial": "spatial"}
    labels = {"group": "clinic", "serial": "day", "spatial": "place"}
    standing = tuple(
        Standing(
            f,  # type: ignore[arg-type]
            keys[f],
            labels[f],
            v,  # type: ignore[arg-type]
            0.01 if v == "present" else 0.4,
            float("nan"),
            (),
            "",
            matters=v != "not detected",
            widens=v != "not detected",
        )
        for f, v in present.items()
    )
    return Ledger(
        model=tuple(keys[f] for f in present),
        standing=standing,
        shares=(
            *(Share(f, keys[f], labels[f], 0.18, 0.06, 0.41) for f in present),  # type: ignore[arg-type]
            Share(None, "row", "single rows", 0.6, 0.4, 0.8),
        ),
        parameters=(
            Parameter("serial", "ρ", 0.6, 0.4, 0.75, "per day"),
            Parameter("serial", "half-life", 1.36, 0.8, 2.4, "day"),
            Parameter("spatial", "practical range", 4.0, 2.0, 9.0, "km"),
        ),
        inflation=(Inflation("arm", "total", 1.2, 1.8, 2.6),),
        tipping=(),
        detectable=(Detectable("group:clinic", "intraclass correlation", 0.09, 0.8, "…"),),
    )


def facts(book: Ledger, missing: Missing | None = None, **values: Any) -> Facts:
    """Facts that a ledger implies, and named values; names have _ for a space."""
    from clingstone.advice.facts import mean_facts, structure_facts

    known = {f.name: f for f in (*structure_facts(book), *mean_facts(missing))}
    known["columns of the model known"] = yes("columns of the model known", True, "")
    known["spatial estimable"] = yes("spatial estimable", True, "")
    known["serial estimable"] = yes("serial estimable", True, "")
    known["group level"] = words("group level", "clinic")
    known["mixed level"] = words("mixed level", "clinic")
    known["series level"] = words("series level", "series")
    for name, value in values.items():
        name = name.replace("_", " ")
        known[name] = (
            yes(name, value, "")
            if isinstance(value, bool)
            else words(name, value)
            if isinstance(value, str)
            else named(name, value)
        )
    return Facts(known, book, ("arm",), missing)


def refit(remedy: str, at: str = "", width: float = 4.0, df: float = 20.0, **more: Any) -> Refit:
    """A refit of one row, ``arm``; its standard error is a quarter of its width."""
    row = Interval(
        "arm", remedy, -3.1, width / 4, 1.0, df, "rule", -3.1 - width / 2, -3.1 + width / 2, 0.01, "ok"
    )
    return Refit(
        remedy=remedy,
        name=remedy,
        at=at,
        covers=COVERS[remedy],  # type: ignore[arg-type]
        estimand=more.pop("estimand", "pooled"),
        intervals=(row,),
        terms=(),
        account=Account("", "", "", "", "t"),
        **more,
    )


def shortlist(found: Facts, refits: tuple[Refit, ...]) -> Shortlist:
    return Shortlist(tuple(Choice(r.remedy, r.at, "") for r in refits), (), found)
