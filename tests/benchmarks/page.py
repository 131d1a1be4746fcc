"""docs/benchmarks.md from the measured rows in docs/benchmarks.json."""

from __future__ import annotations

import json
import math
import statistics
from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path
from typing import Any

DOCS = Path(__file__).parents[2] / "docs"
STORE, PAGE = DOCS / "benchmarks.json", DOCS / "benchmarks.md"

HEAD = """# Benchmarks

What each heavy piece costs here and in general-purpose libraries that compute the same, on the same
data in the same run. *Times as long* is the other way's seconds over ours, taken within each round: the
median, and in brackets the lowest and the highest. **Below 1 the other way is faster.** A *floor* is no
rival but a yardstick: one ordinary fit, or one pass over the data. *Memory* is the peak beyond the data
that were there before. *Difference* is the largest, relative to the largest number of the other way; –
where the numbers are not meant to be the same (a relative of the method, or a floor).

One BLAS thread throughout. Nobody's start-up is counted, nor the passing of data to R.

"""

COLUMNS = ("piece", "way", "seconds", "times as long", "memory", "difference")
TOPICS = {
    "bench_examine": "The whole examination",
    "bench_start": "Starting",
    "bench_remedies": "Refits",
    "bench_groups": "Groups",
    "bench_serial": "Order in time",
    "bench_spatial": "Places",
    "bench_ratio": "Exact tails",
    "bench_reading": "Reading files",
    "bench_rehearsal": "Rehearsal",
}


def read() -> dict[str, Any]:
    if not STORE.exists():
        return {"machine": {}, "rows": {}}
    found: dict[str, Any] = json.loads(STORE.read_text(encoding="utf-8"))
    return found


def keep(held: Mapping[str, Any]) -> None:
    new = STORE.with_suffix(".new")
    new.write_text(json.dumps(held, indent=1, sort_keys=True) + "\n", encoding="utf-8")
    new.replace(STORE)


def seconds(value: float) -> str:
    if value < 1e-3:
        return f"{value * 1e6:.0f} µs"
    if value < 1:
        return f"{value * 1e3:.3g} ms"
    return f"{value:.3g} s" if value < 100 else f"{value:.0f} s"


def size(value: float | None) -> str:
    if value is None:
        return "–"
    return f"{value / 2**20:,.0f} MB" if value >= 2**20 else "< 1 MB"


def times(values: Sequence[float]) -> str:
    def one(v: float) -> str:
        return f"{v:,.0f}" if v >= 100 else f"{v:.2g}" if v < 10 else f"{v:.0f}"

    middle = one(statistics.median(values))
    return f"{middle} ({one(min(values))}–{one(max(values))})" if len(values) > 1 else f"{middle} (once)"


def distance(value: float | None) -> str:
    return "–" if value is None or math.isnan(value) else "0" if value == 0 else f"{value:.0e}"


def lines(row: Mapping[str, Any]) -> Iterable[str]:
    """Ours first, then each other way."""
    ours = row["ways"][0]
    what = f"{row['piece']}, {row['size']}"
    yield _cells(what, f"**{ours['name']}**", seconds(_median(ours)), "", size(ours["memory"]), "")
    for way in row["ways"][1:]:
        name = f"{way['name']} (floor)" if way["floor"] else way["name"]
        if way["failed"]:
            yield _cells("", name, f"failed: {way['failed']}", "", "", "")
            continue
        took, ratio = seconds(_median(way)), times(way["ratio"])
        yield _cells("", name, took, ratio, size(way["memory"]), distance(way["difference"]))


def _median(way: Mapping[str, Any]) -> float:
    return statistics.median(way["seconds"])


def _cells(*cells: str) -> str:
    return "| " + " | ".join(c.replace("|", "\\|").replace("\n", " ") for c in cells) + " |\n"


def short(row: Mapping[str, Any]) -> str:
    """One line for who waits."""
    found = [seconds(_median(row["ways"][0]))]
    for way in row["ways"][1:]:
        ratio = way["failed"] or f"{times(way['ratio'])} × as long, difference {distance(way['difference'])}"
        found.append(f"{way['name']}: {ratio}")
    return "; ".join(found)


def write(held: Mapping[str, Any], ids: Sequence[str]) -> None:
    """ids : the rows to show, in their order; rows that no file offers any more are left out."""
    out = [HEAD]
    for file in dict.fromkeys([*TOPICS, *(held["rows"][id]["file"] for id in ids)]):
        mine = [held["rows"][id] for id in ids if held["rows"][id]["file"] == file]
        if not mine:
            continue
        out += [f"## {TOPICS.get(file, file)}\n\n"]
        out += [
            _cells("piece", "way", "seconds", "times as long", "memory", "difference"),
            "|---" * 6 + "|\n",
        ]
        for row in mine:
            out += lines(row)
        out += [f"\n{row['piece']}, {row['size']}: {row['note']}\n" for row in mine if row["note"]]
        out += ["\n"]
    here = held["machine"]
    if here:
        built = ", ".join(f"{k} {v}" for k, v in here["versions"].items())
        codes = sorted({held["rows"][id]["code"] for id in ids})
        out += [
            "## How it was made\n\n",
            f"{here['processor']}, {here['cores']} cores, {here['memory']}, {here['system']}. {built}. ",
            f"Code {', '.join(codes)} (a fingerprint of the source and of the benchmarks).\n\n",
            *(f"{line}\n\n" for line in held.get("remarks", ())),
            "```text\npython -m tests.benchmarks\n```\n",
        ]
    PAGE.write_text("".join(out), encoding="utf-8")
