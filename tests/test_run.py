"""Settings are checked by name; randomness is keyed by purpose."""

import numpy as np
import pytest

from clingstone.needs import InputError, NotSupported
from clingstone.run import Run, Settings


@pytest.mark.parametrize(
    ("option", "value", "words"),
    [
        ("missing", "ignore", "missing='ignore' is not one of 'stop', 'drop', 'own-group'"),
        ("ties", "jitter", "ties='jitter' is not one of"),
        ("alternative", "both", "alternative='both' is not one of"),
        ("weights_kind", "sampling", "weights_kind='sampling' is not one of 'precision', 'frequency'"),
        ("confidence", 95, "confidence=95 is not a level"),
        ("material", (1.1, 1.2), "two positive factors on either side of 1"),
        ("rehearsal", "long", "rehearsal='long' is not one of 'auto', 'none'"),
        ("seed", -1, "seed=-1 is negative"),
    ],
)
def test_a_wrong_option_names_itself_and_the_choices(option, value, words):
    with pytest.raises(InputError) as caught:
        Settings(**{option: value})
    assert words in str(caught.value)
    assert caught.value.hint


def test_survey_weights_are_refused_with_the_reason():
    with pytest.raises(NotSupported, match="survey weights") as caught:
        Settings(weights_kind="survey")
    assert "precision" in caught.value.hint


def test_an_unknown_option_is_an_error():
    with pytest.raises(TypeError, match="clusters"):
        Settings(clusters="ward")


def test_children_depend_on_seed_purpose_and_index_alone():
    run = Run(Settings(seed=7))
    first = run.child("envelope").normal(size=3)
    run.child("something else").normal(size=100)
    assert np.array_equal(first, run.child("envelope").normal(size=3))
    assert not np.array_equal(first, run.child("envelope", 1).normal(size=3))
    assert not np.array_equal(first, run.child("bootstrap").normal(size=3))
    assert not np.array_equal(first, Run(Settings(seed=8)).child("envelope").normal(size=3))


def test_progress_reports_start_steps_and_is_silent_otherwise():
    seen = []
    run = Run(report=lambda label, done, total: seen.append((label, done, total)))
    with run.progress("refits", 3) as advance:
        advance(1)
        advance(2)
    assert seen == [("refits", 0, 3), ("refits", 1, 3), ("refits", 3, 3)]
    with Run().progress("refits", 3) as advance:
        advance(1)


@pytest.mark.parametrize("name", ["group", "time", "series", "weights", "sampled"])
def test_a_column_given_in_place_of_its_name_is_refused(name):
    with pytest.raises(InputError, match=f"{name}= is given a ndarray, and the name of a column") as refused:
        Settings(**{name: np.arange(3)})
    assert refused.value.hint == f"Make it a column of the data, and write {name}='column'."


def test_a_confidence_in_words_is_refused():
    with pytest.raises(InputError, match=r"confidence='0\.9' is not a number"):
        Settings(confidence="0.9")
