"""The runner: what is compared, what is kept, what the page says."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from tests.benchmarks import __main__ as runner
from tests.benchmarks import page
from tests.benchmarks.pairs import Row, Timed, Way, as_json, distance, has_r, in_r, measure, peak

PAIR = Row(
    "sum",
    "A sum",
    "1,000 numbers",
    lambda: [
        Way("ours", lambda v: v.sum(), fresh=lambda: np.arange(1000.0)),
        Way("a loop", lambda v: sum(v.tolist()) * (1 + 1e-6), fresh=lambda: np.arange(1000.0)),
        Way("one pass", lambda: np.arange(1000.0).max(), same=False, floor=True),
        Way("a slow one", lambda: Timed(7.0, 499500.0, 3e6)),
        Way("a broken one", lambda: 1 / 0),
    ],
    note="Nothing is read.",
)


def test_ways_are_timed_in_turn_and_their_numbers_compared() -> None:
    ours, loop, floor, slow, broken = measure(PAIR, budget=0.0)
    assert len(ours.seconds) == len(loop.seconds) == 3
    assert ours.ratio == [1.0, 1.0, 1.0]
    np.testing.assert_allclose(loop.ratio, np.array(loop.seconds) / ours.seconds)
    np.testing.assert_allclose(loop.difference, 1e-6, rtol=1e-5)
    assert floor.difference is None
    assert slow.seconds == [7.0, 7.0, 7.0]  # as it says itself
    assert slow.memory == 3e6
    assert broken.failed.startswith("ZeroDivisionError")
    assert not broken.seconds


def test_a_failure_of_ours_is_not_passed_over() -> None:
    with pytest.raises(ZeroDivisionError):
        measure(Row("bad", "", "", lambda: [Way("ours", lambda: 1 / 0)]))


def test_peak_memory_is_what_a_run_holds_beyond_what_was_there() -> None:
    size = 64 * 2**20
    held = peak(Way("an array", lambda: np.ones(size // 8).sum()))
    assert held is not None
    assert 0.9 * size < held < 1.5 * size


def test_distance_is_relative_to_the_largest_number_and_wants_as_many() -> None:
    assert distance([1.0, 2.0], [1.0, 4.0]) == 0.5
    assert distance(None, [1.0]) is None
    with pytest.raises(ValueError, match="numbers of ours"):
        distance([1.0], [1.0, 2.0])


def test_the_page_shows_every_way_losing_ones_and_failures_too(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(page, "STORE", tmp_path / "benchmarks.json")
    monkeypatch.setattr(page, "PAGE", tmp_path / "benchmarks.md")
    row = {
        "piece": PAIR.piece,
        "size": PAIR.size,
        "note": PAIR.note,
        "file": "bench_ratio",
        "code": "abc",
        "ways": as_json(measure(PAIR, budget=0.0)),
    }
    row["ways"][1] |= {"seconds": [0.5, 0.5, 0.5], "ratio": [0.4, 0.5, 0.6]}
    held: dict[str, Any] = {"rows": {"sum": row}, "machine": runner.machine()}
    page.keep(held)
    assert page.read() == json.loads(json.dumps(held))
    page.write(held, ["sum"])
    text = page.PAGE.read_text(encoding="utf-8")
    assert "| A sum, 1,000 numbers | **ours** |" in text
    assert "| a loop | 500 ms | 0.5 (0.4–0.6) |" in text
    assert "one pass (floor)" in text
    assert "failed: ZeroDivisionError" in text
    assert "A sum, 1,000 numbers: Nothing is read." in text
    assert "numpy" in text
    assert "Code abc" in text


def test_rows_have_ids_of_their_own_and_can_be_chosen_by_word() -> None:
    found = runner.rows()
    assert len(found) >= 15
    assert "cr1-small" in found
    assert runner.chosen(["bench_ratio"]) == [id for id, (file, _) in found.items() if file == "bench_ratio"]
    assert runner.chosen(["moran-two"]) == ["moran-two-thousand"]


@pytest.mark.skipif(not has_r("stats"), reason="Rscript is not here")
def test_r_gets_the_arrays_and_gives_back_every_digit() -> None:
    X = np.arange(6.0).reshape(3, 2) / 7
    (way,) = in_r("sums", "c(colSums(X), sum(k))", X=X, k=np.array([1, 2, 4]))
    found = way.work()
    assert isinstance(found, Timed)
    np.testing.assert_array_equal(found.numbers, [*X.sum(axis=0), 7])
    assert in_r("nothing", "1", libraries=("no such library",)) == []
