"""Partition by partition: the numbers of the same table in memory, whatever the partitions are."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

import clingstone
from clingstone.case import Case
from clingstone.covariance.fits import Fits
from clingstone.design.parted import Elsewhere, PartedBasis
from clingstone.evidence.finding import About
from clingstone.evidence.nested import GroupF, IntraclassCorrelation
from clingstone.evidence.portmanteau import LjungBox, covariances, means
from clingstone.intake import partitions
from clingstone.maths.forms import lagged
from clingstone.needs import InputError, NotSupported
from clingstone.run import Run

dd = pytest.importorskip("dask.dataframe")

MODEL = "y ~ x + arm"
EXACT = ("estimate", "se", "df", "low", "high")


def world(G: int = 300, seed: int = 3) -> pd.DataFrame:
    """Groups of 10–40 rows in time order, a shared intercept, AR(1) noise of 0.5, rows shuffled."""
    rng = np.random.default_rng(seed)
    sizes = rng.integers(10, 40, G)
    g = np.repeat(np.arange(G), sizes)
    t = np.concatenate([np.flatnonzero(rng.random(3 * s) < 0.8)[:s] for s in sizes])
    z = rng.standard_normal(len(g))
    for i in range(1, len(g)):
        if g[i] == g[i - 1]:
            z[i] += 0.5 * z[i - 1]
    arm = np.array(["a", "b", "c"])[rng.integers(0, 3, G)][g]
    x = rng.standard_normal(len(g))
    y = 100 + x + 0.5 * (arm == "b") + 0.7 * rng.standard_normal(G)[g] + z
    table = pd.DataFrame({"y": y, "x": x, "arm": arm, "g": g, "t": t})
    return table.sample(frac=1, random_state=0).reset_index(drop=True)


@pytest.fixture(scope="module")
def table() -> pd.DataFrame:
    return world()


@pytest.fixture(scope="module")
def parts(table: pd.DataFrame) -> Any:
    return clingstone.examine_parts(dd.from_pandas(table, npartitions=7), model=MODEL, group="g", time="t")


@pytest.fixture(scope="module")
def case(table: pd.DataFrame) -> Case:
    return Case.from_formula(table, MODEL, group="g", time="t")


def _rows(found: Any) -> np.ndarray:
    return np.array([[getattr(row, k) for k in EXACT] for row in found.intervals])


@pytest.mark.parametrize(
    ("remedy", "within"),
    [("ordinary", 1e-9), ("cluster-robust", 1e-9), ("mixed-intercept", 1e-6), ("ar1", 1e-6)],
)
def test_refits_are_those_of_the_table_in_memory(parts: Any, case: Case, remedy: str, within: float) -> None:
    np.testing.assert_allclose(_rows(parts.refit(remedy)), _rows(clingstone.refit(case, remedy)), rtol=within)


def test_cr1_and_the_other_conventions_stand_beside_cr2(parts: Any, case: Case) -> None:
    from clingstone.remedies import explain, remedy

    ours = {c.words: c.intervals for c in parts.refit("cluster-robust").conventions}
    theirs = {c.words: c for c in explain(remedy("cluster-robust"), "g", Fits(case.response, Run()))}
    assert any(words.startswith("CR1") for words in ours)
    assert ours.keys() == theirs.keys()
    for words, found in theirs.items():
        np.testing.assert_allclose([row.se for row in ours[words]], [row.se for row in found.intervals], 1e-9)


@pytest.mark.parametrize("test", [GroupF(), IntraclassCorrelation()], ids=lambda t: t.id)
def test_likeness_of_groups_is_that_in_memory(parts: Any, case: Case, test: Any) -> None:
    ours = next(t for t in parts.tests if t.test == test.id)
    theirs = test.read(Fits(case.response, Run()), About("g", ""))
    for name in ("statistic", "estimate", "low", "high"):
        np.testing.assert_allclose(getattr(ours, name), getattr(theirs, name)[0], rtol=1e-6, err_msg=name)


def test_ljung_box_is_that_in_memory(table: pd.DataFrame, parts: Any, case: Case) -> None:
    assert len(table) > 5000  # beyond, memory takes no exact moments either
    ours = next(t for t in parts.tests if t.test == "ljung-box")
    theirs = LjungBox().read(Fits(case.response, Run()), About("10", ""))
    np.testing.assert_allclose(ours.statistic, theirs.statistic[0], rtol=1e-9)
    assert ours.df == 10


def test_durbin_watson_has_its_plain_sum_and_the_exact_moments() -> None:
    small = world(G=12, seed=5)
    ours = clingstone.examine_parts(dd.from_pandas(small, npartitions=3), model=MODEL, group="g", time="t")
    found = next(t for t in ours.tests if t.test == "durbin-watson")
    held = Case.from_formula(small, MODEL, group="g", time="t").response
    e, series = held.residual[:, 0], held.design.serial
    assert series is not None
    earlier, later = series.pairs(1)
    np.testing.assert_allclose(found.statistic, np.sum((e[later] - e[earlier]) ** 2) / (e @ e), rtol=1e-9)
    form = lagged(earlier, later, len(e), "lag:1")
    mean = float(means([form], held.design.basis)[0])
    sd = float(np.sqrt(covariances([form], held.design.basis)[0, 0]))
    r = float(e[later] @ e[earlier] / (e @ e))
    np.testing.assert_allclose(found.estimate, r - mean, rtol=1e-9)
    from scipy import stats

    np.testing.assert_allclose(found.p, 2 * stats.norm.sf(abs(r - mean) / sd), rtol=1e-7)


@pytest.mark.parametrize("npartitions", [1, 2, 13])
def test_the_partitions_do_not_matter(table: pd.DataFrame, parts: Any, npartitions: int) -> None:
    scattered = table.sample(frac=1, random_state=npartitions).reset_index(drop=True)
    other = clingstone.examine_parts(
        dd.from_pandas(scattered, npartitions=npartitions), model=MODEL, group="g", time="t"
    )
    for one, two in zip(parts.refits, other.refits, strict=True):
        summed = one.remedy in ("ordinary", "cluster-robust")  # the others are optima of a search
        np.testing.assert_allclose(_rows(one), _rows(two), rtol=1e-9 if summed else 2e-6)
    np.testing.assert_allclose(parts.rho, other.rho, rtol=1e-6)


def test_ar1_beside_a_plain_search(table: pd.DataFrame, parts: Any, case: Case) -> None:
    """The slow twin: the restricted likelihood of whitened rows, on a grid around the estimate."""
    response, design = case.response, case.design
    assert design.serial is not None
    steps = design.serial.steps

    def criterion(rho: float) -> float:
        phi = np.where(np.isnan(steps), 0.0, rho ** np.nan_to_num(steps, nan=1.0))
        Z = np.hstack([design.Q, response.residual])
        W = Z.copy()
        W[1:] -= phi[1:, None] * Z[:-1]
        W /= np.sqrt(1 - phi**2)[:, None]
        Q, e = W[:, :-1], W[:, -1]
        rest = e - Q @ np.linalg.lstsq(Q, e, rcond=None)[0]
        logdet = np.linalg.slogdet(Q.T @ Q)[1] + np.sum(np.log(1 - phi**2))
        return float(logdet + design.m * np.log(rest @ rest))

    near = parts.rho + np.array([-0.002, 0.0, 0.002])
    low, here, high = map(criterion, near)
    vertex = near[1] + 0.001 * (low - high) / (low - 2 * here + high)
    assert here < min(low, high)
    np.testing.assert_allclose(vertex, parts.rho, atol=2e-6)


def test_a_folder_of_parquet_files_and_missing_rows(table: pd.DataFrame, tmp_path: Path) -> None:
    pytest.importorskip("pyarrow")
    holed = table.copy()
    holed.loc[::100, "x"] = np.nan
    for i, rows in enumerate(np.array_split(np.arange(len(holed)), 4)):
        holed.iloc[rows].to_parquet(tmp_path / f"part-{i}.parquet")
    found = clingstone.examine_parts(tmp_path, model=MODEL, group="g")
    whole = Case.from_formula(holed, MODEL, group="g")
    assert dict(found.dropped) == dict(whole.dropped)
    np.testing.assert_allclose(
        _rows(found.refit("cluster-robust")), _rows(clingstone.refit(whole, "cluster-robust")), rtol=1e-8
    )
    gathered = partitions.gathered(tmp_path)
    assert sorted(gathered["y"]) == sorted(holed["y"])


def test_a_table_that_does_not_fit_is_refused_with_what_can_be_done(
    table: pd.DataFrame, monkeypatch: pytest.MonkeyPatch
) -> None:
    def full(size: float, what: str) -> None:
        raise NotSupported(f"{what} needs {size / 1e9:.1f} GB", "Use fewer rows.")

    monkeypatch.setattr(partitions, "memory", full)
    with pytest.raises(NotSupported, match="in 3 parts needs") as stopped:
        clingstone.examine(dd.from_pandas(table, npartitions=3), model=MODEL, group="g")
    assert "examine_parts" in stopped.value.hint
    assert "sample" in stopped.value.hint


@pytest.mark.parametrize(
    ("options", "error", "words"),
    [
        ({"model": MODEL, "time": "t"}, NotSupported, "one series over all partitions"),
        ({"model": "y ~ poly(x, 2)"}, NotSupported, r"poly\(\) learns from all rows"),
        ({"model": "y ~ standardize( x )"}, NotSupported, r"standardize\(\) learns from all rows"),
        ({"model": "y ~ hashed(x, levels=5)"}, NotSupported, r"hashed\(\) learns from all rows"),
        ({"model": "y ~ x", "group": "ward"}, InputError, "no column ‘ward’"),
        ({"model": "y ~ x + I(2 * x)"}, InputError, "linearly dependent"),
    ],
)
def test_what_cannot_be_done_by_partitions_is_refused(
    table: pd.DataFrame, options: dict[str, Any], error: type[Exception], words: str
) -> None:
    with pytest.raises(error, match=words):
        clingstone.examine_parts(dd.from_pandas(table, npartitions=3), **options)


def test_a_folder_without_parquet_files_is_an_input_error(tmp_path: Path) -> None:
    with pytest.raises(InputError, match=r"holds no \.parquet file"):
        clingstone.examine_parts(tmp_path, model=MODEL)


def test_tied_times_stop_as_they_do_in_memory(table: pd.DataFrame) -> None:
    tied = pd.concat([table, table.iloc[[0]]], ignore_index=True)
    with pytest.raises(InputError, match="not unique within g"):
        clingstone.examine_parts(dd.from_pandas(tied, npartitions=3), model=MODEL, group="g", time="t")


def test_rows_that_are_elsewhere_are_never_taken_for_numbers() -> None:
    basis = PartedBasis(10, np.eye(2))
    assert (basis.n, basis.p) == (10, 2)
    for use in (
        lambda: basis.Q.T @ np.ones(10),
        lambda: np.ones(10) @ basis.Q,
        lambda: basis.Q[0],
        lambda: np.asarray(basis.Q),
        lambda: np.einsum("ij,ij->j", basis.Q, basis.Q),
        lambda: basis.leverage,
    ):
        with pytest.raises(NotSupported, match="all rows at once"):
            use()
    assert len(Elsewhere(10, 2)) == 10


def test_without_groups_the_ordinary_fit_alone(table: pd.DataFrame) -> None:
    found = clingstone.examine_parts(dd.from_pandas(table, npartitions=5), model=MODEL)
    assert [r.remedy for r in found.refits] == ["ordinary"]
    np.testing.assert_allclose(
        _rows(found.refit("ordinary")),
        _rows(clingstone.refit(Case.from_formula(table, MODEL), "ordinary")),
        rtol=1e-9,
    )
    assert "places" in found.refused
    assert "ordinary" in str(found)
