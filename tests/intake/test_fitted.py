"""A fitted regression: its rows by their labels, its columns, its weights, and what does not fit together."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm
import statsmodels.formula.api as smf
from linearmodels.iv import IV2SLS
from linearmodels.panel import BetweenOLS, PanelOLS, PooledOLS, RandomEffects

from clingstone.case import Case
from clingstone.intake.fitted import is_fit, recover
from clingstone.needs import InputError


def herd() -> pd.DataFrame:
    rng = np.random.default_rng(8)
    n = 20
    frame = pd.DataFrame(
        {
            "milk": rng.normal(10, 1, n),
            "age": rng.normal(4, 1, n),
            "breed": np.tile(["red", "black"], n // 2),
            "farm": np.repeat(list("abcd"), n // 4),
            "w": rng.uniform(1, 3, n),
        },
        index=pd.Index([f"cow {i}" for i in range(n)]),
    )
    frame.loc[["cow 3", "cow 7"], "milk"] = np.nan
    return frame


def message(call: Callable[[], Any]) -> tuple[str, str]:
    with pytest.raises(InputError) as caught:
        call()
    return str(caught.value), caught.value.hint


def test_a_formula_gives_rows_names_and_coefficients() -> None:
    frame = herd()
    fit = smf.ols("np.log(milk) ~ age * C(breed)", frame).fit()
    assert is_fit(fit)
    assert not is_fit(frame)
    got = recover(fit)
    assert got.places.tolist() == [i for i in range(20) if i not in (3, 7)]
    assert got.blocks.names == ("constant", "age", "breed: red", "age × breed: red")
    assert got.blocks.transformed == "log"
    assert got.columns == ("milk", "age", "breed")
    ours = np.linalg.lstsq(got.blocks.X, got.blocks.y, rcond=None)[0]
    assert np.sort(ours) == pytest.approx(np.sort(fit.params.to_numpy()), rel=1e-8)
    assert got.weights is None
    assert got.blocks.remake is not None


def test_rows_are_found_by_label_in_a_shuffled_and_longer_frame() -> None:
    frame = herd()
    fit = smf.ols("milk ~ age", frame, subset=frame["age"] > 3).fit()
    longer = pd.concat([frame, herd().rename(lambda c: f"other {c}")]).sample(frac=1, random_state=3)
    got = recover(fit, longer)
    assert list(longer.index[got.places]) == list(fit.model.data.row_labels)
    assert got.blocks.y == pytest.approx(fit.model.endog)
    assert got.table.rows == 40


def test_labels_that_are_not_there_or_occur_twice() -> None:
    frame = herd()
    fit = smf.ols("milk ~ age", frame).fit()
    said, _ = message(lambda: recover(fit, frame.drop("cow 5")))
    assert said == "1 row of the fit, such as the one labelled ‘cow 5’, is not in the data that were given"
    said, hint = message(lambda: recover(fit, pd.concat([frame, frame.iloc[:1]])))
    assert said.startswith("row labels of the data occur more than once (‘cow 0’)")
    assert hint.startswith("Reset the index")


def test_data_that_were_changed_since_are_refused() -> None:
    frame = herd()
    fit = smf.ols("milk ~ age", frame).fit()
    other = frame.copy()
    other.loc["cow 6", "milk"] += 1
    assert (
        message(lambda: recover(fit, other))[0]
        == "the response milk of the data is not that of the fit in row 7"
    )
    other = frame.copy()
    other.loc["cow 6", "age"] += 1
    assert message(lambda: recover(fit, other))[0] == (
        "the data that were given do not reproduce the model's columns (‘age’)"
    )


def test_weighted_fits_carry_their_weights() -> None:
    frame = herd()
    fit = smf.wls("milk ~ age", frame, weights=frame["w"]).fit()
    got = recover(fit)
    assert got.weights is not None
    assert got.weights == pytest.approx(frame["w"].iloc[got.places].to_numpy())


def test_arrays_with_labels() -> None:
    frame = herd().dropna()
    fit = sm.OLS(frame["milk"], sm.add_constant(frame[["age", "w"]])).fit()
    got = recover(fit, herd())
    assert got.blocks.names == ("constant", "age", "w")
    assert [t.kind for t in got.blocks.terms] == ["constant", "numeric", "numeric"]
    assert list(got.blocks.covariates) == ["age", "w"]
    assert got.places.tolist() == [i for i in range(20) if i not in (3, 7)]
    changed = herd()
    changed.loc["cow 6", "age"] += 1
    assert (
        message(lambda: recover(fit, changed))[0]
        == "the column age of the data is not that of the fit in row 7"
    )


def test_bare_arrays_are_matched_by_number_only_when_all_rows_are_there() -> None:
    frame = herd().dropna()
    fit = sm.OLS(frame["milk"].to_numpy(), sm.add_constant(frame[["age"]].to_numpy())).fit()
    got = recover(fit, frame)
    assert "matched by their number" in got.notes[0]
    said, _ = message(lambda: recover(fit, herd()))
    assert said.startswith("the fit used 18 rows without labels and the data have 20")


def test_a_function_of_the_caller_s_own_is_taken_as_its_columns() -> None:
    def squash(x: Any) -> Any:
        return np.arctan(x)

    fit = smf.ols("milk ~ squash(age) + breed", herd()).fit()
    got = recover(fit)
    assert sorted(got.blocks.names) == ["breed: red", "constant", "squash(age)"]
    assert {t.name: t.kind for t in got.blocks.terms}["breed"] == "factor"
    assert got.blocks.y == pytest.approx(fit.model.endog)
    assert "its columns are taken as they are" in got.notes[0]
    assert got.blocks.remake is None


def test_other_models_and_altered_fits_are_refused() -> None:
    frame = herd()
    mixed = smf.mixedlm("milk ~ age", frame.dropna(), groups="farm").fit()
    assert message(lambda: recover(mixed))[0].startswith("a fitted MixedLM was given")
    fit = smf.ols("milk ~ age", frame).fit_regularized(alpha=0.5, L1_wt=0.0)
    said, _ = message(lambda: recover(fit))
    assert said.startswith("least squares on the model's own columns does not give its coefficients")


def test_dependent_columns_of_a_fit_are_named() -> None:
    frame = herd().assign(twice=lambda d: 2 * d["age"])
    fit = smf.ols("milk ~ age + twice", frame).fit()  # statsmodels fits this by a pseudo-inverse
    assert "twice follows exactly from age" in message(lambda: recover(fit))[0]


# ---- linearmodels ----------------------------------------------------------------------------------


def firms() -> pd.DataFrame:
    rng = np.random.default_rng(3)
    frame = pd.DataFrame(
        {
            "firm": np.repeat([f"f{i}" for i in range(8)], 5),
            "year": np.tile(np.arange(2001, 2006), 8),
            "sales": rng.normal(5, 1, 40),
            "size": rng.normal(0, 1, 40),
            "sector": np.tile(["wool", "milk"], 20),
            "w": rng.uniform(1, 2, 40),
        }
    )
    frame.loc[[3, 11], "sales"] = np.nan
    return frame


@pytest.mark.parametrize("given", ["nothing", "indexed", "columns", "shuffled"])
def test_a_pooled_panel_regression_is_its_ordinary_fit(given: str) -> None:
    """statsmodels fits the same rows."""
    frame = firms()
    panel = frame.set_index(["firm", "year"])
    fit = PooledOLS.from_formula("sales ~ 1 + size + sector", panel).fit()
    assert is_fit(fit)
    data = {
        "nothing": None,
        "indexed": panel,
        "columns": frame,
        "shuffled": frame.sample(frac=1, random_state=5),
    }[given]
    case = Case.from_fit(fit, data, group="firm", time="year")
    ours = Case.from_formula(frame, "sales ~ size + sector", group="firm", time="year")
    assert case.response.ss == pytest.approx(ours.response.ss, rel=1e-10)
    assert case.design.n == 38
    assert set(case.design.names) == {"constant", "size", "sector: wool"}
    assert case.summary().serial == ours.summary().serial
    if given in ("indexed", "columns"):
        assert case.kept.tolist() == ours.kept.tolist()
        assert [t.kind for t in case.design.terms] == ["constant", "numeric", "factor"]
        assert dict(case.dropped) == {"not used by the fit": 2}


def test_weights_and_arrays_of_a_panel_regression() -> None:
    panel = firms().set_index(["firm", "year"]).dropna()
    X = panel[["size"]].assign(const=1.0)
    fit = PooledOLS(panel["sales"], X, weights=panel["w"]).fit()
    got = recover(fit)
    assert got.blocks.names == ("size", "constant")
    assert got.weights is not None
    assert got.weights / got.weights[0] == pytest.approx((panel["w"] / panel["w"].iloc[0]).to_numpy())
    theirs = sm.WLS(panel["sales"], X, weights=panel["w"]).fit()
    assert np.asarray(fit.params) == pytest.approx(theirs.params.to_numpy(), rel=1e-9)


def test_a_panel_regression_without_a_constant_has_none() -> None:
    panel = firms().set_index(["firm", "year"])
    got = recover(PooledOLS.from_formula("sales ~ size", panel).fit(), panel)
    assert got.blocks.names == ("size",)
    assert got.blocks.remake is not None


def test_an_instrumental_regression_without_instruments() -> None:
    frame = firms()
    got = recover(IV2SLS.from_formula("sales ~ 1 + size", frame).fit(), frame)
    assert got.blocks.names == ("constant", "size")
    assert got.places.tolist() == [i for i in range(40) if i not in (3, 11)]


@pytest.mark.parametrize(
    ("make", "stops", "hint"),
    [
        (
            lambda p: PanelOLS.from_formula("sales ~ size + EntityEffects", p),
            "a PanelOLS with effects was given",
            "refit ‘fixed-effects’",
        ),
        (
            lambda p: RandomEffects.from_formula("sales ~ 1 + size", p),
            "a fitted RandomEffects was given",
            "PooledOLS",
        ),
        (
            lambda p: BetweenOLS.from_formula("sales ~ 1 + size", p),
            "a fitted BetweenOLS was given",
            "PooledOLS",
        ),
        (
            lambda p: IV2SLS.from_formula("sales ~ 1 + [size ~ w]", p.reset_index()),
            "a fitted IV2SLS was given",
            "the data and the formula",
        ),
    ],
)
def test_other_estimators_of_linearmodels_are_refused(make: Any, stops: str, hint: str) -> None:
    fit = make(firms().set_index(["firm", "year"]).dropna()).fit()
    assert is_fit(fit)
    said, told = message(lambda: recover(fit))
    assert said.startswith(stops)
    assert hint in told
