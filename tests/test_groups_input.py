"""Groups in a bad state, through ``examine`` and the command line: stopped, noted or refused."""

from __future__ import annotations

import shlex
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

import clingstone
from clingstone import cli
from clingstone.needs import InputError, NotSupported

CLINICS, VISITS = 12, 6
AT = np.repeat(np.arange(CLINICS), VISITS)  # the clinic of each row


def table(**columns: Any) -> pd.DataFrame:
    """Twelve clinics of six visits; x varies within them, z only between them."""
    rng = np.random.default_rng(3)
    shared = rng.normal(size=CLINICS)
    x, z = rng.normal(size=len(AT)), rng.normal(size=CLINICS)[AT]
    y = x + shared[AT] + rng.normal(size=len(AT))
    return pd.DataFrame({"clinic": [f"c{i:02d}" for i in AT], "x": x, "z": z, "y": y} | columns)


def both(
    frame: pd.DataFrame,
    folder: Path,
    capsys: pytest.CaptureFixture[str],
    model: str,
    *words: str,
    **options: Any,
) -> tuple[Any, str]:
    """What ``examine`` gives or raises, and all that the command line says, which must end alike.

    words : the options as the shell has them.
    """
    frame.to_csv(folder / "rows.csv", index=False)
    try:
        found: Any = clingstone.examine(frame, model=model, rehearsal="none", **options)
    except InputError as stop:
        found = stop
    line = f"examine {folder / 'rows.csv'} --model '{model}' --rehearsal none --json"
    with pytest.raises(SystemExit) as ended:
        cli.main(shlex.split(line) + list(words))
    out, err = capsys.readouterr()
    assert int(ended.value.code or 0) == (2 if isinstance(found, InputError) else 0)
    return found, " ".join((out + err).split())


def one_by_one(count: int) -> list[str]:
    return [f"q{i}" for i in range(count)]


# ---- what stops --------------------------------------------------------------------------------------

GONE = table()
GONE.loc[[3, 9], "clinic"] = None
VISIT_ARM = table(arm=np.tile(["a", "b"], len(AT) // 2))
STOPS: list[tuple[str, pd.DataFrame, str, dict[str, Any], tuple[str, ...], str, str]] = [
    (
        "a missing id",
        GONE,
        "y ~ x",
        {"group": "clinic"},
        ("--group", "clinic"),
        "missing: clinic in 2 rows (rows 4 and 10)",
        "missing='own-group'",
    ),
    (
        "a column that is not there",
        table(),
        "y ~ x",
        {"group": "clinik"},
        ("--group", "clinik"),
        "there is no column ‘clinik’ (group)",
        "‘clinic’",
    ),
    (
        "an assignment that varies inside its units",
        VISIT_ARM,
        "y ~ arm",
        {"group": "clinic", "assigned": {"arm": "clinic"}},
        ("--group", "clinic", "--assigned", "arm=clinic"),
        "arm is said to be assigned by clinic, but it varies inside 12 of 12 units (c00, c01, c02 and 9",
        "Name the unit within which it is constant",
    ),
]


@pytest.mark.parametrize("case", STOPS, ids=[s[0] for s in STOPS])
def test_it_stops_and_says_what_to_do(case, tmp_path, capsys) -> None:
    _, frame, model, options, words, said, hint = case
    found, told = both(frame, tmp_path, capsys, model, *words, **options)
    assert isinstance(found, InputError)
    assert said in str(found)
    assert hint in found.hint
    assert said in told


def test_missing_ids_are_left_out_or_stand_alone_on_request(tmp_path, capsys) -> None:
    words = ("--group", "clinic", "--missing")
    left, told = both(GONE, tmp_path, capsys, "y ~ x", *words, "drop", group="clinic", missing="drop")
    assert dict(left.results.case.dropped) == {"missing clinic (group)": 2}
    assert left.results.case.n == len(AT) - 2
    assert "missing clinic (group)" in told
    alone, _ = both(GONE, tmp_path, capsys, "y ~ x", *words, "own-group", group="clinic", missing="own-group")
    assert alone.results.case.n == len(AT)
    assert alone.case.design.group["clinic"].count == CLINICS + 2


# ---- what is noted -----------------------------------------------------------------------------------

WARD = np.tile(np.repeat([1, 2, 3], 2), CLINICS)
ALIKE = table()
ALIKE.loc[3, "clinic"], ALIKE.loc[9, "clinic"] = "C00", "c01 "
MIXED = table()
MIXED["clinic"] = MIXED["clinic"].astype(object)
MIXED.loc[:5, "clinic"], MIXED.loc[6:11, "clinic"] = 1, "1"
NOTES: list[tuple[str, pd.DataFrame, Any, tuple[str, ...], int, tuple[str, ...]]] = [
    (
        "recycled labels",
        table(ward=WARD),
        "clinic/ward",
        ("clinic/ward",),
        36,
        ("Labels of ward recur in several groups of clinic (‘1’, ‘2’ and ‘3’)", "a group of its own"),
    ),
    (
        "recycled labels side by side",
        table(ward=WARD),
        ["clinic", "ward"],
        ("clinic", "--group", "ward"),
        3,
        ("Labels of ward are counters (1 to 3)", "one and the same ward", "declare clinic/ward"),
    ),
    (
        "levels turned round",
        table(region=np.where(AT < 6, "north", "south")),
        "clinic/region",
        ("clinic/region",),
        12,
        ("Every group of region is made of whole groups of clinic", "Declare region/clinic"),
    ),
    (
        "levels that are not nested",
        table(ward=["w0" if i == 10 else f"w{i // 3}" for i in range(len(AT))]),
        "clinic/ward",
        ("clinic/ward",),
        25,
        ("Labels of ward recur in several groups of clinic (‘w0’)",),
    ),
    (
        "one column twice",
        table(again=table().clinic),
        ["clinic", "again"],
        ("clinic", "--group", "again"),
        12,
        ("clinic and again put the same rows together", "kept as clinic"),
    ),
    (
        "ids that look alike",
        ALIKE,
        "clinic",
        ("clinic",),
        14,
        ("‘C00’ = ‘c00’ and ‘c01’ = ‘c01 ’", "kept as different groups"),
    ),
    (
        "single rows",
        table(clinic=one_by_one(len(AT))),
        "clinic",
        ("clinic",),
        72,
        ("Every row has its own clinic: no rows share one",),
    ),
    (
        "mostly single rows",
        table(clinic=[f"q{max(i, 5)}" for i in range(len(AT))]),
        "clinic",
        ("clinic",),
        67,
        ("66 of 67 groups of clinic hold one row each",),
    ),
    (
        "one group",
        table(clinic="all"),
        "clinic",
        ("clinic",),
        1,
        ("clinic has one value (‘all’) in all rows",),
    ),
    (
        "one giant group",
        table(clinic=["g"] * 60 + [f"q{i // 3}" for i in range(12)]),
        "clinic",
        ("clinic",),
        5,
        ("One group of clinic, ‘g’, holds 60 of 72 rows", "the other 4"),
    ),
]


@pytest.mark.parametrize("case", NOTES, ids=[n[0] for n in NOTES])
def test_it_goes_on_and_says_how_it_was_read(case, tmp_path, capsys) -> None:
    _, frame, group, words, count, said = case
    found, told = both(frame, tmp_path, capsys, "y ~ x", "--group", *words, group=group)
    assert found.case.design.group.finest.count == count
    notes = " ".join(found.results.case.notes)
    for part in said:
        assert part in notes
        assert part in told


def test_numbers_and_texts_that_read_alike_stay_apart() -> None:
    # A file has one kind of label per column, so this is a matter of frames.
    found = clingstone.examine(MIXED, model="y ~ x", group="clinic", rehearsal="none")
    assert {"1", "1 (text)"} <= set(found.case.design.group["clinic"].labels)
    assert any("‘1’ = ‘1 (text)’" in note for note in found.results.case.notes)


# ---- what single remedies refuse ---------------------------------------------------------------------

SAME = np.where(AT < 6, "a", "b")
FEW = table(**{f"v{j}": np.random.default_rng(j).normal(size=len(AT)) for j in range(8)}, clinic=AT // 2)
REFUSED: list[tuple[str, pd.DataFrame, str, dict[str, Any], str, str, str]] = [
    (
        "constant within groups, by name",
        table(),
        "y ~ z",
        {},
        "fixed-effects",
        "z: it does not vary within clinic, whose levels are absorbed",
        "within-between, cluster-robust or mixed-intercept",
    ),
    (
        "nothing to split",
        table(),
        "y ~ z",
        {},
        "within-between",
        "no column varies within clinic",
        "cluster-robust or means of groups",
    ),
    (
        "the treatment is the clusters",
        table(arm=SAME, clinic=SAME),
        "y ~ arm",
        {},
        "cluster-robust",
        "arm: b: clinic a alone decides it",
        "A second clinic of that kind",
    ),
    (
        "the treatment is the clusters, no means left",
        table(arm=SAME, clinic=SAME),
        "y ~ arm",
        {},
        "group-means",
        "2 groups of clinic leave no degrees of freedom for 2 coefficients",
        "more groups",
    ),
    (
        "clusters in the model",
        table(),
        "y ~ x + clinic",
        {},
        "mixed-intercept",
        "the model already has its own level for every clinic",
        "Leave the columns of clinic out",
    ),
    (
        "few clusters",
        table(clinic=SAME),
        "y ~ x",
        {},
        "wild-cluster-bootstrap",
        "there are 2 clusters of clinic; resampling fewer than 5",
        "5 clusters would be needed",
    ),
    (
        "one treated cluster",
        table(arm=np.where(AT < 1, "a", "b")),
        "y ~ arm",
        {"assigned": {"arm": "clinic"}},
        "randomisation",
        "in 12 ways only, too few",
        "More units in each arm",
    ),
    (
        "a meat of deficient rank",
        FEW,
        "y ~ " + " + ".join(f"v{j}" for j in range(8)),
        {"focus": "v0"},
        "mixed-robust",
        "6 clusters of clinic and 9 coefficients",
        "a smaller model",
    ),
    ("one group", table(clinic="all"), "y ~ x", {}, "cluster-robust", "there is one clinic", "finer level"),
    (
        "one group, no variance between",
        table(clinic="all"),
        "y ~ x",
        {},
        "mixed-intercept",
        "clinic: 1 group; a variance between groups needs 5",
        "a factor",
    ),
    (
        "single rows",
        table(clinic=one_by_one(len(AT))),
        "y ~ x",
        {},
        "group-means",
        "every row is a clinic of its own",
        "Repeated rows",
    ),
    (
        "nothing assigned",
        table(),
        "y ~ x",
        {},
        "randomisation",
        "nothing is known to have been assigned",
        "assigned=",
    ),
    ("nothing crosses", table(), "y ~ x", {}, "multiway-cluster", "clinic does not", "side by side"),
]


@pytest.mark.parametrize("case", REFUSED, ids=[r[0] for r in REFUSED])
def test_a_remedy_is_refused_with_reason_and_way_out(case) -> None:
    _, frame, model, options, remedy, said, hint = case
    found = clingstone.examine(frame, model=model, group="clinic", rehearsal="none", **options)
    with pytest.raises(NotSupported) as stop:
        clingstone.refit(found.case, remedy)
    assert said in str(stop.value)
    assert hint in stop.value.hint
    # Asked of the examination, it is not a refit "that is not there": the reason is told again, or the way.
    with pytest.raises(InputError) as asked:
        found.refit(remedy)
    listed = {name: reason for name, reason, _ in found.advice.refused}
    assert listed.get(remedy, "is not among the refits made here") in str(asked.value)


def test_rows_that_cannot_be_served_are_named_beside_those_that_can() -> None:
    found = clingstone.examine(table(), model="y ~ x + z", group="clinic", rehearsal="none")
    refit = clingstone.refit(found.case, "fixed-effects")
    assert refit.get("x").status == "ok"
    assert refit.get("z").status == "unusable: it does not vary within clinic, whose levels are absorbed"


@pytest.mark.parametrize(
    ("treated", "said"),
    [
        (1, "arm: b: clinic c00 alone decides it"),
        (2, "arm: b: with 1.4 degrees of freedom, below 2"),
    ],
)
def test_few_treated_clusters_are_not_correctable(treated, said, tmp_path, capsys) -> None:
    frame = table(arm=np.where(treated > AT, "a", "b"))
    found, told = both(frame, tmp_path, capsys, "y ~ arm + x", "--group", "clinic", group="clinic")
    assert found.advice.state == "not correctable"
    reasons = {name: (reason, needed) for name, reason, needed in found.advice.refused}
    assert f"Only {treated} of 12 groups carry arm: b" in reasons["every correction"][0]
    assert "at least 3 and better 6 groups in each arm" in reasons["every correction"][1]
    assert said in reasons["cluster-robust"][0]
    assert f"only {treated} of 12 clusters of clinic" in reasons["wild-cluster-bootstrap"][0]
    assert all(needed for _, needed in reasons.values())
    assert f"Only {treated} of 12 groups carry arm: b" in told


def test_more_coefficients_than_clusters_keep_their_intervals_and_lose_joint_tests(tmp_path, capsys) -> None:
    model = "y ~ " + " + ".join(f"v{j}" for j in range(8))
    found, _ = both(FEW, tmp_path, capsys, model, "--group", "clinic", group="clinic")
    for remedy in ("cluster-robust", "cluster-jackknife", "wild-cluster-bootstrap"):
        refit = found.refit(remedy)
        assert any(
            "6 clusters cannot carry the covariance of 9 coefficients at once" in n for n in refit.notes
        )
        assert np.isfinite(refit.get("v0").se)


def test_many_rows_that_cannot_be_served_are_counted() -> None:
    found = clingstone.examine(table(), model="y ~ x + clinic", group="clinic", rehearsal="none")
    said = [reason for name, reason, _ in found.advice.refused if name == "cluster-robust"]
    assert len(said) == 3  # of eleven clinics against the first
    assert said[-1].endswith("; 8 more rows likewise")
