"""results.json: the schema, both ways, and two results compared number by number."""

from __future__ import annotations

import json
import math
from collections.abc import Mapping
from dataclasses import fields, is_dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

import plain
from clingstone.evidence.finding import Curve, Finding
from clingstone.needs import InputError
from clingstone.remedies.remedy import Interval, Refit
from clingstone.results import KEYS, Results, compare, from_json, to_json
from clingstone.run import Settings


def same(a: Any, b: Any) -> bool:
    """Equal in type and value all the way down; NaN equals NaN, 0.0 does not equal −0.0."""
    if is_dataclass(a):
        return type(a) is type(b) and all(same(getattr(a, f.name), getattr(b, f.name)) for f in fields(a))
    if isinstance(a, Mapping):
        return isinstance(b, Mapping) and list(a) == list(b) and all(same(a[k], b[k]) for k in a)
    if isinstance(a, tuple):
        return isinstance(b, tuple) and len(a) == len(b) and all(map(same, a, b))
    if isinstance(a, float):
        return isinstance(b, float) and repr(a) == repr(b)
    return type(a) is type(b) and a == b


# ---- the schema --------------------------------------------------------------------------------


def test_schema_is_the_pinned_one() -> None:
    pinned = Path(__file__).with_name("schema_1.txt").read_text().splitlines()
    found = list(plain.schema())
    assert found == pinned, (
        "the keys of results.json changed. If that is wanted, run "
        "'python tests/plain.py > tests/schema_1.txt'; after a release, raise SCHEMA too."
    )


def test_top_keys_stand_in_the_designed_order() -> None:
    text = to_json(plain.results())
    assert tuple(json.loads(text)) == KEYS
    assert text.startswith('{\n  "clingstone": "word",\n  "schema": 1,\n  "case": {')


def test_flat_tables_hold_the_rows_of_all_refits() -> None:
    a, b = plain.example(Refit), plain.example(Refit, intervals=(plain.example(Interval, se=2.0),) * 2)
    tree = json.loads(to_json(plain.results(refits=(a, b))))
    assert [row["se"] for row in tree["intervals"]] == [0.1, 2.0, 2.0]
    assert len(tree["terms"]) == 2
    results = plain.results(refits=(a, b))
    assert results.intervals == a.intervals + b.intervals
    assert results.terms == a.terms + b.terms


# ---- both ways ---------------------------------------------------------------------------------


def test_round_trip_is_exact() -> None:
    results = plain.results()
    assert from_json(to_json(results)) == results


def test_settings_come_back_as_settings() -> None:
    """Tuples stay tuples in a mapping of untyped values, so that a replay can rebuild Settings."""
    wanted = Settings(
        model="y ~ x",
        group=("judge", "wine"),
        coords=("e", "n"),
        contrasts={"late": {"x": 1.0}},
        assigned={"x": {"unit": "clinic", "within": "district"}},
        rehearsal=200,
        confidence=0.9,
    )
    back = from_json(to_json(plain.results(settings=vars(wanted)))).settings
    assert Settings(**back) == wanted
    assert same(back["rehearsal"], 200)


@pytest.mark.parametrize("value", [math.nan, math.inf, -math.inf, -0.0, 5e-324, 0.1 + 0.2, 1e308])
def test_every_float_survives(value: float) -> None:
    finding = plain.example(Finding, p=value, df=value, curve=plain.example(Curve, x=(value, 1.0)))
    results = plain.results(evidence=(finding,), settings={"coverage": (value, "NaN")})
    text = to_json(results)
    json.loads(text, parse_constant=lambda word: pytest.fail(f"{word} is not JSON"))
    assert same(from_json(text), results)


def test_non_finite_numbers_are_words_and_words_stay_words() -> None:
    finding = plain.example(Finding, p=math.nan, sentence="NaN", high=-math.inf)
    tree = json.loads(to_json(plain.results(evidence=(finding,), settings={"width": math.inf})))
    assert (tree["evidence"][0]["p"], tree["evidence"][0]["high"]) == ("NaN", "-Infinity")
    assert tree["settings"] == {"width": {"float": "Infinity"}}
    assert from_json(to_json(plain.results(evidence=(finding,)))).evidence[0].sentence == "NaN"


def test_numpy_scalars_and_sets_become_plain() -> None:
    finding = plain.example(Finding, p=np.float64(0.25), n_used=np.int64(7), primary=np.bool_(True))
    advice = replace(plain.results().advice, structures=frozenset({"spatial", "group"}))
    results = plain.results(evidence=(finding,), advice=advice, settings={"n": np.arange(2)})
    tree = json.loads(to_json(results))
    assert tree["evidence"][0]["p"] == 0.25
    assert tree["evidence"][0]["n_used"] == 7
    assert tree["evidence"][0]["primary"] is True
    assert tree["advice"]["structures"] == ["group", "spatial"]
    back = from_json(to_json(results))
    assert back.advice.structures == frozenset({"group", "spatial"})
    assert back.settings == {"n": (0, 1)}


@settings(max_examples=20, deadline=None, suppress_health_check=list(HealthCheck))
@given(st.data())
def test_any_finding_refit_and_advice_survive(data: st.DataObject) -> None:
    """Objects drawn from their types: odd words, odd floats, empty and long collections."""
    finding = data.draw(st.from_type(Finding))
    refit = data.draw(st.from_type(Refit))
    advice = data.draw(st.from_type(type(plain.results().advice)))
    results = plain.results(evidence=(finding,), refits=(refit,), advice=advice)
    back = from_json(to_json(results))
    assert same(back, results)
    assert compare(back, results) == ()


def test_same_results_give_the_same_bytes() -> None:
    advice = plain.results().advice
    one = replace(advice, structures=frozenset(["group", "serial", "spatial"]))
    two = replace(advice, structures=frozenset(["spatial", "serial", "group"]))
    assert to_json(plain.results(advice=one)) == to_json(plain.results(advice=two))


# ---- files that are not what we wrote ----------------------------------------------------------


def _edited(**changes: Any) -> str:
    tree = json.loads(to_json(plain.results()))
    tree.update(changes)
    return json.dumps({key: value for key, value in tree.items() if value is not Ellipsis})


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("{", "not JSON: .* in line 1"),
        ("[1, 2]", "no results.json of clingstone"),
        ('{"a": 1}', "no results.json of clingstone"),
        (_edited(schema=2), "schema 2; this version reads schema 1"),
        (_edited(ledger=..., advice=...), "lacks ledger, advice"),
        (_edited(intervals=[]), "contradicts itself: the table 'intervals'"),
        (_edited(methods=5), "expected str @ results.methods"),
        (_edited(novel=1), "novel"),
    ],
)
def test_a_damaged_file_is_named_and_refused(text: str, message: str) -> None:
    with pytest.raises(InputError, match=message) as caught:
        from_json(text)
    assert caught.value.hint


# ---- two results -------------------------------------------------------------------------------


def _with(**changes: Any) -> Results:
    return plain.results(refits=(plain.example(Refit, intervals=(plain.example(Interval, **changes),)),))


def test_equal_results_differ_nowhere_whatever_wrote_them() -> None:
    other = replace(plain.results(), clingstone="9.9", versions={"numpy": "0"})
    assert compare(plain.results(), other) == ()


def test_every_differing_number_is_named_with_both_values() -> None:
    found = compare(_with(se=0.5, p=1e-30), _with(se=0.51, p=2e-30))
    assert found == (
        "refits[word].intervals[word].se: 0.5 and 0.51",
        "refits[word].intervals[word].p: 1e-30 and 2e-30",
    )


@pytest.mark.parametrize(
    ("a", "b", "agree"),
    [
        (1.0, 1.0 + 0.9e-8, True),
        (1.0, 1.0 + 1.1e-8, False),
        (1e-200, 1.1e-200, False),
        (math.nan, math.nan, True),
        (math.inf, -math.inf, False),
        (0.0, 1e-17, False),
    ],
)
def test_numbers_agree_relative_to_their_size(a: float, b: float, agree: bool) -> None:
    assert (compare(_with(se=a), _with(se=b)) == ()) is agree
    assert (compare(_with(se=b), _with(se=a)) == ()) is agree


def test_rounding_noise_beside_large_numbers_is_forgiven_only_in_lists() -> None:
    def curve(*y: float) -> Results:
        return plain.results(evidence=(plain.example(Finding, curve=plain.example(Curve, y=y)),))

    assert compare(curve(1e6, 1e-10), curve(1e6, -1e-10)) == ()
    assert compare(curve(1e6, 1e-6), curve(1e6, 2e-6)) != ()
    assert compare(curve(1.0), curve(1.0, 2.0)) == ("evidence[word].curve.y: 1 and 2 entries",)


def test_words_and_verdicts_must_be_equal() -> None:
    found = compare(_with(status="ok"), _with(status="boundary"))
    assert found == ("refits[word].intervals[word].status: ok and boundary",)


def test_long_texts_are_shown_from_where_they_part() -> None:
    """A methods section that differs in one number once showed two equal beginnings."""
    start = "# Methods: y ~ x\n\n" + "Words that agree. " * 20
    first, second = (replace(plain.results(), methods=start + end) for end in ("It was 3.1.", "It was 3.2."))
    (told,) = compare(first, second)
    assert told.startswith("methods: …")
    assert told.endswith("It was 3.2.")
    assert "It was 3.1. and …" in told
