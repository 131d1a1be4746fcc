"""docs/validation.md and its plot from the designs of a study.

python -m tests.validation.write STUDY NULLS [COMMIT]
"""

from __future__ import annotations

import json
import sys
from collections.abc import Callable, Iterable, Mapping
from pathlib import Path

import numpy as np
from scipy import stats

from clingstone.examination import versions
from tests.validation import battery, nulls, study
from tests.validation.draw import coverage_plot
from tests.validation.tally import Share, Tally, tally
from tests.validation.why import REASONS
from tests.validation.worlds import SEED

DOCS = Path(__file__).parents[2] / "docs"
PAGE, PLOT = DOCS / "validation.md", DOCS / "images" / "validation.svg"
POWER, NAMED, QUIET, COVERED, WIDTH = 0.95, 0.90, 0.93, 0.92, 1.15

HEAD = """# Validation

What the whole examination says of invented data whose truth is known. Every figure on this page was
measured by `tests/validation/`, at the commit named at the end.

In each world y = 3 + 0.5 x + errors, and the table, the declared structures and the formula are examined
with the defaults, without a rehearsal. The predictor, sizes and places are drawn afresh for every design,
and a number of columns of y on each; *draws* counts the columns and, in brackets, the designs. The columns
of a design are read together; that this says the same as `clingstone.examine` of one table was checked on
{checked} tables and was so on {agreed}.

*Named* is the share of draws in which the families judged present (group, order in time, places) are
exactly those that are there; *false* and *missed* those in which one too many, or one too few, is named.
*Power* is how often someone who knows the true covariance would find every structure, each by the most
powerful test at 5 % against the nearest covariance without it: where a fit without it comes close, as one
of a process does to groups in short series, no one finds it often. It is measured by 8,000 draws of its
own. *Mean* is the share in which a part of the mean is said to be missing or in doubt. Under *refused* no
interval is advised; such draws count in no coverage. *Coverage* is the share of intervals for x that hold
0.5 (nominal 95 %): of the advised refit, of the ordinary fit and of the *oracle*, generalised least
squares at the true covariance, which no one has in practice. *Width* is the median width of the advised
interval over that of the ordinary one (in brackets its 95 % quantile) and over that of the oracle. What
stands after ± is the Monte-Carlo standard error, the larger of that of independent draws and that of the
designs as clusters. All shares are per cent.

"""
PART = """**Not whole.** {left} of {all} worlds have no draws yet, and {few} of the others have fewer than
{draws:,}. The study goes on where it stopped when its command is given again.

"""


def pct(value: float, digits: int = 0) -> str:
    return "–" if not np.isfinite(value) else f"{100 * value:.{digits}f}"


def share(one: Share, digits: int = 1) -> str:
    return f"{pct(one.value, digits)} ± {pct(one.error, digits)}" if one.n else "–"


def plain(one: Share) -> str:
    return pct(one.value) if one.n else "–"


def ratio(value: float) -> str:
    return "–" if not np.isfinite(value) else f"{value:.2f}"


def table(head: Iterable[str], rows: Iterable[Iterable[str]]) -> str:
    head = list(head)
    lines = ["| " + " | ".join(head) + " |", "|" + "---|" * len(head)]
    return "\n".join([*lines, *("| " + " | ".join(row) + " |" for row in rows)]) + "\n"


def most(counts: Mapping[str, int], n: int) -> str:
    ordered = sorted(counts.items(), key=lambda pair: -pair[1])
    return ", ".join(f"{key} {pct(k / n)}" for key, k in ordered[:3] if k)


# ---- tables --------------------------------------------------------------------------------------

COLUMNS = (
    "world",
    "draws",
    "named",
    "false",
    "missed",
    "power",
    "mean",
    "refused",
    "coverage, advised",
    "ordinary",
    "oracle",
    "width over ordinary",
    "over oracle",
)


def row(one: Tally) -> list[str]:
    return [
        one.world.name,
        f"{one.n} ({one.designs})",
        share(one.exact, 0),
        plain(one.false),
        plain(one.missed),
        pct(one.power),
        plain(one.doubted),
        plain(one.refused),
        share(one.advised),
        plain(one.ordinary),
        plain(one.oracle),
        f"{ratio(one.width)} ({one.widest:.1f})" if one.advised.n else "–",
        ratio(one.against_oracle),
    ]


def unmeasured(name: str) -> list[str]:
    """A world that the study has not come to."""
    return [name, "0", *["–"] * (len(COLUMNS) - 2)]


def advice_table(found: Iterable[Tally]) -> str:
    rows = [
        [
            t.world.name,
            pct(t.states.get("nothing found", 0) / t.n),
            most(t.remedies, t.n),
            f"{t.factor:.2f} / {t.true_factor:.2f}",
            plain(t.factor_held),
            f"{1000 * t.seconds:.0f}",
        ]
        for t in found
    ]
    head = (
        "world",
        "nothing found",
        "advised",
        "SE factor, ledger / true",
        "true factor in its interval",
        "ms",
    )
    return table(head, rows)


# ---- aims ----------------------------------------------------------------------------------------


def asked_naming(t: Tally) -> bool:
    return bool(t.world.holds) and t.power >= POWER


def asked_quiet(t: Tally) -> bool:
    return not t.world.holds and not t.world.wrong


def asked_interval(t: Tally) -> bool:
    return t.world.covered and t.advised.n > 0


Aim = tuple[str, str, Callable[[Tally], bool], Callable[[Tally], float], Callable[[Tally], bool], bool]
AIMS: tuple[Aim, ...] = (
    (
        "naming",
        f"exactly what is there is named in {pct(NAMED)} %, where the power is {pct(POWER)} %",
        asked_naming,
        lambda t: t.exact.value,
        lambda t: t.exact.value >= NAMED,
        False,
    ),
    (
        "quiet",
        f"nothing is named in {pct(QUIET)} %, where nothing is there",
        asked_quiet,
        lambda t: t.exact.value,
        lambda t: t.exact.value >= QUIET,
        False,
    ),
    (
        "coverage",
        f"the advised interval covers in {pct(COVERED)} %",
        asked_interval,
        lambda t: t.advised.value,
        lambda t: t.advised.value >= COVERED,
        False,
    ),
    (
        "width",
        f"the advised interval is at most {WIDTH} times as wide as the oracle's",
        asked_interval,
        lambda t: t.against_oracle,
        lambda t: t.against_oracle <= WIDTH,
        True,
    ),
)


def figure(name: str, value: float) -> str:
    return ratio(value) if name == "width" else f"{pct(value, 1)} %"


def aims_table(found: list[Tally]) -> str:
    rows = []
    for name, words, asked, value, met, large in AIMS:
        of = [t for t in found if asked(t)]
        if not of:
            continue
        values = [value(t) for t in of]
        worst = max(values) if large else min(values)
        middle = float(np.median(values))
        count = f"{sum(map(met, of))} of {len(of)} worlds"
        rows.append([words, count, figure(name, middle), figure(name, worst)])
    return table(("aim", "met in", "median world", "worst world"), rows)


def short(found: list[Tally]) -> str:
    """Every world that misses an aim, with the figure and why."""
    rows = []
    for name, _, asked, value, met, large in AIMS:
        bad = [t for t in found if asked(t) and not met(t)]
        bad.sort(key=value, reverse=large)
        for t in bad:
            error = {"coverage": t.advised.error, "width": float("nan")}.get(name, t.exact.error)
            more = f" ± {pct(error, 1)}" if np.isfinite(error) else ""
            rows.append([name, t.world.name, figure(name, value(t)) + more, why(name, t)])
    return table(("aim", "world", "measured", "why"), rows)


def why(aim: str, t: Tally) -> str:
    """Chance, where the aim lies within two Monte-Carlo errors; else what is known of the world."""
    of = {"naming": (t.exact, NAMED), "quiet": (t.exact, QUIET), "coverage": (t.advised, COVERED)}
    if aim in of and not of[aim][0].below(of[aim][1]):
        return "within two Monte-Carlo errors of the aim"
    found = (words for one, part, words in REASONS if one == aim and part in t.world.name)
    return next(found, "not explained yet")


# ---- null laws -----------------------------------------------------------------------------------


def null_table(lines: list[Mapping[str, object]]) -> str:
    rows = []
    for line in lines:
        for key, values in line["p"].items():  # type: ignore[attr-defined]
            p = np.asarray(values)
            k = int(np.sum(p < 0.05))
            rows.append(
                [
                    str(line["design"]),
                    key,
                    str(len(p)),
                    share(Share(((k, len(p)),))),
                    f"{stats.kstest(p, 'uniform').pvalue:.2f}",
                ]
            )
    return table(("design", "primary test", "replicates", "% below 0.05", "uniform? (KS p)"), rows)


def promise_table(lines: list[Mapping[str, object]]) -> str:
    rows = []
    for line in lines:
        for key, value, alone, adjusted in line["promised"]:  # type: ignore[attr-defined]
            rows.append([str(line["design"]), key, f"{value:.2f}", f"{alone:.2f}", f"{adjusted:.2f}"])
    head = ("design", "structure", "size called detectable", "found by its test", "found after Holm")
    return table(head, rows)


# ---- the page ------------------------------------------------------------------------------------


def page(lines: list[study.Line], null_file: Path, commit: str = "") -> tuple[str, dict[str, list[Tally]]]:
    """The text of the page, and what it shows by family."""
    by: dict[tuple[str, str], list[study.Line]] = {}
    for line in lines:
        by.setdefault((line["arm"], line["world"]), []).append(line)
    known = {arm: _tallies(by, arm) for arm in (study.RULES, study.REHEARSED)}
    rules, rehearsed = known[study.RULES], known[study.REHEARSED]
    families = {
        name: [rules[w.name] for w in worlds if w.name in rules] for name, worlds in battery.FAMILIES.items()
    }
    every = [t for found in families.values() for t in found]
    checks = Share(tuple(part for t in every for part in t.agreed.parts))
    null_lines = [json.loads(line) for line in null_file.read_text(encoding="utf-8").splitlines()]
    out = [HEAD.format(checked=checks.n, agreed=checks.k)]
    few = sum(t.n < study.DRAWS for t in every)
    if few or len(every) < len(battery.WORLDS):
        left = len(battery.WORLDS) - len(every)
        out += [PART.format(left=left, all=len(battery.WORLDS), few=few, draws=study.DRAWS)]
    out += ["## Against the aims\n\n", aims_table(every), "\n## Where it falls short\n\n"]
    out += [short(every)]
    out += [
        "\n![Coverage of the advised and of the ordinary interval in every world](images/validation.svg)\n"
    ]
    for family, worlds in battery.FAMILIES.items():
        rows = [row(rules[w.name]) if w.name in rules else unmeasured(w.name) for w in worlds]
        out += [f"\n## {family}\n\n", table(COLUMNS, rows)]
    if rehearsed:
        out += ["\n## With a rehearsal\n\n"]
        out += [
            "Tables handed to `clingstone.examine` with all its defaults, each on a design of its own.\n\n"
        ]
        out += [table(COLUMNS, map(row, rehearsed.values()))]
    out += ["\n## What was advised\n\n"]
    out += ["*SE factor* is the median of the ledger's estimate beside the true standard deviation of the "]
    out += ["ordinary coefficient over what the ordinary fit expects; *ms* the time of one draw.\n\n"]
    out += [advice_table(every)]
    crashed = [f"- {t.world.name}: {len(t.faults)} designs, {t.faults[0]}\n" for t in every if t.faults]
    out += ["\n## Examinations that failed\n\n", *(crashed or ["None.\n"])]
    out += ["\n## p-values of the primary tests on independent rows\n\n", null_table(null_lines)]
    drawn = f"{nulls.DRAWS} draws at each size; Monte-Carlo error below 0.01"
    out += [f"\n## Is the promised power of 80 % true?\n\n{drawn}.\n\n", promise_table(null_lines)]
    built = ", ".join(f"{k} {v}" for k, v in versions().items() if k not in ("matplotlib", "esda"))
    state = f" at commit {commit[:12]}" if commit else ""
    out += [f"\n## How it was made\n\nSeeds {SEED} and {nulls.SEED}; {built}{state}.\n\n```text\n"]
    out += ["python -m tests.validation.study study.jsonl\n"]
    out += ["python -m tests.validation.study study.jsonl 100 --rehearsed\n"]
    out += ["python -m tests.validation.nulls nulls.jsonl 300\n"]
    out += ["python -m tests.validation.write study.jsonl nulls.jsonl\n```\n"]
    return "".join(out), families


def _tallies(by: Mapping[tuple[str, str], list[study.Line]], arm: str) -> dict[str, Tally]:
    return {w.name: tally(w, by[arm, w.name]) for w in battery.WORLDS if (arm, w.name) in by}


def main(arguments: list[str]) -> None:
    commit = arguments[2] if len(arguments) > 2 else ""
    text, families = page(study.read(Path(arguments[0])), Path(arguments[1]), commit)
    PAGE.write_text(text, encoding="utf-8")
    coverage_plot(families, PLOT)


if __name__ == "__main__":
    main(sys.argv[1:])
