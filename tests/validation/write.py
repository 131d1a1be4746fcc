"""docs/validation.md from the replicates of a study.

python -m tests.validation.write STUDY NULLS [COMMIT]
"""

from __future__ import annotations

import json
import sys
from collections.abc import Iterable, Mapping
from pathlib import Path

import numpy as np
from scipy import stats

from clingstone.examination import versions
from tests.validation import nulls, study
from tests.validation.battery import WORLDS
from tests.validation.tally import NOMINAL, Share, Tally, read, tally

PAGE = Path(__file__).parents[2] / "docs" / "validation.md"

HEAD = """# Validation

What the whole examination says of invented data whose truth is known. Every figure on this page was
measured by `tests/validation/`, with the version named at the end.

In each world y = 3 + 0.5 x + errors, and the table, the declared structures and the formula are handed to
`clingstone.examine` with its defaults, without a rehearsal. *Coverage* is the share of replicates whose
interval for x holds 0.5; nominal is {nominal:.0%}. The number after ± is the Monte-Carlo standard error.
*Oracle* is generalised least squares at the true covariance, which no one has in practice. *Width* is the
median width of the advised interval over that of the ordinary one (in brackets its 95 % quantile) and over
that of the oracle. *Nothing found*, *present* (the structures judged present), *advised* and *no advice*
(not correctable) are per cent of replicates. *SE factor* is the median of the ledger's estimate beside the
true standard deviation of the ordinary coefficient over what the ordinary fit expects.

"""


def pct(value: float) -> str:
    return "–" if not np.isfinite(value) else f"{100 * value:.0f}"


def share(one: Share) -> str:
    return f"{one.value:.2f} ± {one.error:.2f}" if one.n else "–"


def table(head: Iterable[str], rows: Iterable[Iterable[str]]) -> str:
    head = list(head)
    lines = ["| " + " | ".join(head) + " |", "|" + "---|" * len(head)]
    return "\n".join([*lines, *("| " + " | ".join(row) + " |" for row in rows)]) + "\n"


def named(counts: Mapping[str, int], n: int) -> str:
    ordered = sorted(counts.items(), key=lambda pair: -pair[1])
    return ", ".join(f"{key} {pct(k / n)}" for key, k in ordered[:3])


def row(one: Tally) -> list[str]:
    good = one.n - len(one.errors)
    return [
        one.world,
        str(one.n),
        pct(one.states.get("nothing found", 0) / good),
        named(one.structures, good),
        pct(one.states.get("not correctable", 0) / good),
        named(one.remedies, good),
        share(one.advised),
        share(one.ordinary),
        share(one.oracle),
        f"{one.width:.2f} ({one.widest:.1f})" if one.advised.n else "–",
        f"{one.against_oracle:.2f}" if one.advised.n else "–",
        f"{one.factor:.2f} / {one.true_factor:.2f}",
    ]


COLUMNS = (
    "world",
    "replicates",
    "nothing found %",
    "present %",
    "no advice %",
    "advised %",
    "coverage, advised",
    "ordinary",
    "oracle",
    "width over ordinary",
    "over oracle",
    "SE factor, ledger / true",
)


def short(found: list[Tally], held: Mapping[str, bool]) -> str:
    """Worlds where the advised interval covers clearly too seldom, worst first."""
    bad = [t for t in found if held[t.world] and t.advised.below(NOMINAL)]
    bad.sort(key=lambda t: t.advised.value)
    rows = []
    for one in bad:
        others = [
            f"{key} {cover.value:.2f} (width {width:.2f})"
            for key, (cover, width) in one.by_remedy.items()
            if cover.n >= one.n / 2 and not cover.below(NOMINAL) and not key.startswith("repaired")
        ]
        rows.append(
            [one.world, share(one.advised), pct(NOMINAL - one.advised.value), "; ".join(others) or "none"]
        )
    head = ("world", "coverage, advised", "points below nominal", "refits shown that keep nominal coverage")
    return table(head, rows)


def wide(found: list[Tally]) -> str:
    rows = [
        [t.world, f"{t.width:.2f}", f"{t.widest:.1f}", f"{t.against_oracle:.2f}", f"{t.advised.value:.2f}"]
        for t in found
        if t.advised.n and t.against_oracle > 1.4
    ]
    return table(("world", "width over ordinary", "95 % quantile", "over oracle", "coverage"), rows)


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
                    share(Share(k, len(p))),
                    f"{stats.kstest(p, 'uniform').pvalue:.2f}",
                ]
            )
    return table(("design", "primary test", "replicates", "share below 0.05", "uniform? (KS p)"), rows)


def promise_table(lines: list[Mapping[str, object]]) -> str:
    rows = []
    for line in lines:
        for key, value, alone, adjusted in line["promised"]:  # type: ignore[attr-defined]
            rows.append([str(line["design"]), key, f"{value:.2f}", f"{alone:.2f}", f"{adjusted:.2f}"])
    head = ("design", "structure", "size called detectable", "found by its test", "found after Holm")
    return table(head, rows)


def families() -> dict[str, tuple[str, ...]]:
    from tests.validation import battery as b

    groups = {
        "Independent rows": b._independent(),
        "Groups": b._groups(),
        "Order in time": b._times(),
        "Places": b._places(),
        "A part of the mean is missing": b._means(),
        "One structure real, another only declared": b._decoys(),
        "None of the fitted models is true": b._wrong_models(),
    }
    return {name: tuple(world.name for world in worlds) for name, worlds in groups.items()}


def page(replicates: Path, null_file: Path, commit: str = "") -> str:
    known = read(replicates)
    found = {name: tally(name, known[name]) for name in (w.name for w in WORLDS) if name in known}
    held = {w.name: w.covered for w in WORLDS}
    lines = [json.loads(line) for line in null_file.read_text(encoding="utf-8").splitlines()]
    out = [HEAD.format(nominal=NOMINAL)]
    out.append("## Where the advised interval covers too seldom\n\n")
    out.append("More than two Monte-Carlo errors below nominal; of so many worlds one or two by chance.\n\n")
    out += [short(list(found.values()), held), "\n## Where it is wide\n\nMore than 1.4 times the oracle.\n\n"]
    out += [wide(list(found.values()))]
    for family, names in families().items():
        out += [f"\n## {family}\n\n", table(COLUMNS, (row(found[n]) for n in names if n in found))]
    crashed = [f"- {t.world}: {len(t.errors)} of {t.n}, {t.errors[0]}\n" for t in found.values() if t.errors]
    out += ["\n## Examinations that failed\n\n", *(crashed or ["None.\n"])]
    out += ["\n## p-values of the primary tests on independent rows\n\n", null_table(lines)]
    drawn = f"{nulls.DRAWS} draws at each size; Monte-Carlo error below 0.01"
    out += [f"\n## Is the promised power of 80 % true?\n\n{drawn}.\n\n", promise_table(lines)]
    built = ", ".join(f"{k} {v}" for k, v in versions().items() if k not in ("matplotlib", "esda"))
    state = f" at commit {commit[:12]}" if commit else ""
    out += [f"\n## How it was made\n\nSeeds {study.SEED} and {nulls.SEED}; {built}{state}.\n\n```text\n"]
    out += [
        "python -m tests.validation.study study.jsonl 100\npython -m tests.validation.nulls nulls.jsonl 500\n"
    ]
    out += ["python -m tests.validation.write study.jsonl nulls.jsonl\n```\n"]
    return "".join(out)


def main(arguments: list[str]) -> None:
    commit = arguments[2] if len(arguments) > 2 else ""
    PAGE.write_text(page(Path(arguments[0]), Path(arguments[1]), commit), encoding="utf-8")


if __name__ == "__main__":
    main(sys.argv[1:])
