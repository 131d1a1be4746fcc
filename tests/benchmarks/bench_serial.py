"""Cost of order in time: python -m tests.benchmarks bench_serial"""

from __future__ import annotations

from functools import partial

import numpy as np
import statsmodels.api as sm

from clingstone.covariance.fits import Fits
from clingstone.design.design import Design, Term
from clingstone.design.response import Response
from clingstone.evidence.portmanteau import correlations
from clingstone.evidence.serial import DurbinWatson
from clingstone.maths.basis import Basis
from clingstone.maths.partition import Partition
from clingstone.remedies.longrun import Hac
from clingstone.remedies.refit import refit
from clingstone.remedies.serial import Arma
from clingstone.run import Run
from clingstone.structure.group import Groups
from clingstone.structure.serial import Series
from tests.benchmarks.pairs import ONE_FIT, OURS, Row, Way, in_r


def table(n: int, series: int, p: int, gaps: bool = False, irregular: bool = False):
    """X, y with AR(1) errors of 0.5 per step, and the Series: equal lengths, steps of one or uneven."""
    rng = np.random.default_rng(0)
    T = n // series
    codes = np.repeat(np.arange(series), T)
    tick = np.tile(np.arange(T), series)
    if gaps:
        tick = tick + np.tile(np.cumsum(rng.random(T) < 0.1), series)
    elapsed = tick.astype(float)
    if irregular:
        elapsed = np.cumsum(rng.exponential(size=(series, T)), axis=1).ravel()
    X = np.column_stack([np.ones(n), rng.normal(size=(n, p - 1))])
    step = np.where(tick == 0, np.inf, np.diff(elapsed, prepend=0.0))
    phi = 0.5 ** np.where(np.isfinite(step), step, 1e9)
    noise = rng.normal(size=n) * np.sqrt(1 - phi**2)
    u = np.empty((series, T))
    phi, noise = phi.reshape(series, T), noise.reshape(series, T)
    u[:, 0] = noise[:, 0]
    for t in range(1, T):
        u[:, t] = phi[:, t] * u[:, t - 1] + noise[:, t]
    part = Partition("series", codes.astype(np.int32), tuple(map(str, range(series))))
    spacing = "irregular" if irregular else "regular with gaps" if gaps else "regular"
    serial = Series("t", part, elapsed, "day", 1.0, None if irregular else tick, spacing)
    return X, X @ np.ones(p) + u.ravel(), serial


def fits(X: np.ndarray, y: np.ndarray, serial: Series, grouped: bool = False) -> Fits:
    names = ("constant", *(f"x{j}" for j in range(1, X.shape[1])))
    terms = tuple(Term(n, (j,), "constant" if j == 0 else "numeric") for j, n in enumerate(names))
    part = Partition("unit", serial.part.codes, serial.part.labels)
    groups = Groups((part,), "one level") if grouped else None
    design = Design(Basis.of(X), names, terms, group=groups, serial=serial)
    return Fits(Response.of(design, y), Run())


def bare(run: Fits, serial: Series) -> Fits:
    """The same basis and residuals with nothing kept; the series' own links are made anew too."""
    d, r = run.design, run.response
    fresh = Series(
        serial.name, serial.part, serial.elapsed, serial.unit, serial.step, serial.tick, serial.spacing
    )
    made = Design(Basis(d.basis.Q, d.basis.R), d.names, d.terms, group=d.group, serial=fresh)
    return Fits(Response(made, r.coef, r.residual, r.ss), Run())


MILLION = "1,000,000 rows in 50,000 series, p = 5"


def fit(X: np.ndarray, y: np.ndarray) -> Way:
    return Way(ONE_FIT, lambda: sm.OLS(y, X).fit().bse, same=False, floor=True)


def whole_reading() -> list[Way]:
    X, y, serial = table(1_000_000, 1, 5)
    run, test = fits(X, y, serial), DurbinWatson()
    about = test.abouts(run.design)[0]
    return [Way(OURS, lambda f: test.read(f, about).p, fresh=lambda: bare(run, serial)), fit(X, y)]


def process(gaps: bool, irregular: bool) -> list[Way]:
    X, y, serial = table(1_000_000, 50_000, 5, gaps, irregular)
    run = fits(X, y, serial)
    ours = Way(OURS, lambda f: f[{"serial"}].shape["serial.rho"], fresh=lambda: bare(run, serial))
    return [ours, fit(X, y)]


def intercept() -> list[Way]:
    X, y, serial = table(20_000, 1000, 5)
    y = y + np.repeat(np.random.default_rng(1).normal(size=1000), 20)
    run = fits(X, y, serial, grouped=True)
    codes = serial.part.codes
    return [
        Way(
            OURS,
            lambda f: f[{"group:unit", "serial"}].shape["serial.rho"],
            fresh=lambda: bare(run, serial),
        ),
        Way(
            "statsmodels MixedLM, the intercept alone",
            lambda: sm.MixedLM(y, X, groups=codes).fit().params,
            same=False,
        ),
        *in_r(
            "nlme lme, corAR1",
            "as.numeric(coef(lme(y ~ X - 1, random = ~1 | g, correlation = corAR1(form = ~ t | g), data = d)"
            "$modelStruct$corStruct, unconstrained = FALSE))",
            libraries=("nlme",),
            prepare="d <- data.frame(y = y, g = factor(g), t = as.integer(t)); d$X <- X",
            X=X,
            y=y,
            g=codes.astype(float),
            t=serial.elapsed,
        ),
    ]


def autocorrelations() -> list[Way]:
    X, y, serial = table(1_000_000, 100, 5, gaps=True)
    run = fits(X, y, serial)

    def to_lag_40(f: Fits) -> None:
        correlations(f.response, 40)

    return [Way(OURS, to_lag_40, fresh=lambda: bare(run, serial)), fit(X, y)]


def long_run() -> list[Way]:
    X, y, serial = table(1_000_000, 50_000, 5)
    run = fits(X, y, serial)
    ours = Way(
        OURS,
        lambda f: [row.se for row in refit(Hac(), "", f).intervals],
        fresh=lambda: bare(run, serial),
    )
    return [ours, fit(X, y)]


def search_orders(n: int, series: int, gaps: bool) -> list[Way]:
    X, y, serial = table(n, series, 5, gaps)
    run = fits(X, y, serial)
    ours = Way(
        OURS, lambda f: Arma().prepare(f.design, None).fit(f).se[:, 0], fresh=lambda: bare(run, serial)
    )
    return [ours, fit(X, y)]


ROWS = (
    Row(
        "dw-reading", "Durbin–Watson with its interval", "1,000,000 rows in one series, p = 5", whole_reading
    ),
    Row("ar1", "AR(1) by REML", MILLION, partial(process, False, False)),
    Row("ar1-gaps", "AR(1) by REML, a tenth of the steps missing", MILLION, partial(process, True, False)),
    Row("car1", "Continuous-time AR(1) by REML", MILLION, partial(process, False, True)),
    Row("intercept-ar1", "Random intercept and AR(1)", "20,000 rows in 1,000 series, p = 5", intercept),
    Row("acf", "Autocorrelation to lag 40 with gaps", "1,000,000 rows in 100 series", autocorrelations),
    Row("hac", "Long-run variance, and by bandwidth", MILLION, long_run),
    Row(
        "arma",
        "ARMA, five orders by AICc",
        "1,000 rows in 10 series",
        partial(search_orders, 1000, 10, False),
    ),
    Row(
        "arma-gaps", "ARMA, missing steps", "1,000 rows in 10 series", partial(search_orders, 1000, 10, True)
    ),
)
