"""Conditions over facts evaluate, combine and print themselves."""

from __future__ import annotations

import numpy as np
import pytest

from clingstone.advice.expressions import Expression, fact
from clingstone.advice.named import Fact, named, words, yes

FACTS = {
    f.name: f
    for f in (
        named("groups", 5),
        named("sites", np.array([10.0, 30.0])),
        yes("known", True, ""),
        words("level", "clinic"),
    )
}


@pytest.mark.parametrize(
    ("expression", "value", "text"),
    [
        (fact("groups") < 6, True, "groups < 6"),
        (fact("groups") >= 6, False, "groups ≥ 6"),
        (fact("groups") <= 5, True, "groups ≤ 5"),
        (fact("groups") > 4.5, True, "groups > 4.5"),
        (fact("known"), True, "known"),
        (~fact("known"), False, "not known"),
        ((fact("groups") < 6) & fact("known"), True, "groups < 6 and known"),
        ((fact("groups") > 6) | ~fact("known"), False, "groups > 6 or not known"),
        (fact("known") & ((fact("groups") > 6) | fact("known")), True, "known and (groups > 6 or known)"),
        (~(fact("known") & fact("known")), False, "not (known and known)"),
    ],
)
def test_reads_and_prints(expression, value, text):
    assert bool(expression.read(FACTS)) is value
    assert str(expression) == text


def test_arrays_give_one_boolean_per_column():
    out = ((fact("sites") < 20) & fact("known")).read(FACTS)
    assert out.tolist() == [True, False]


def test_what_is_not_known_makes_every_comparison_false():
    assert not bool((fact("series") < 3).read(FACTS))
    assert not bool((fact("series") >= 3).read(FACTS))
    assert not bool(fact("series").read(FACTS))


def test_names_are_those_that_were_read_in_order():
    assert ((fact("b") < 1) & (~fact("a") | (fact("b") > 2))).names == ("b", "a")


def test_a_condition_has_no_truth_value_of_its_own():
    with pytest.raises(TypeError, match="use &"):
        bool(fact("groups") < 6)
    with pytest.raises(TypeError):
        _ = (fact("groups") < 6) and fact("known")


def test_words_cannot_be_compared():
    with pytest.raises(TypeError, match="is a word"):
        (fact("level") < 3).read(FACTS)


def test_the_bare_class_reads_nothing():
    with pytest.raises(TypeError):
        Expression().read(FACTS)


def test_a_fact_says_itself():
    assert FACTS["groups"] == Fact("groups", 5, "", "groups: 5", "5")
    assert named("share", 0.1234, "of the map").text == "0.12"
