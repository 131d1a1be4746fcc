"""Cost of order in time, as ratios within one run: python tests/benchmarks/bench_serial.py

Each pair is timed next to each other, best of three, with one BLAS thread. "fit" is one statsmodels OLS fit
of the same table.
"""

from __future__ import annotations

import os

os.environ["OPENBLAS_NUM_THREADS"] = "1"

import sys
import time
from collections.abc import Callable

import numpy as np
import statsmodels.api as sm

from clingstone.covariance.fits import Fits
from clingstone.design.design import Design, Term
from clingstone.design.response import Response
from clingstone.evidence.portmanteau import correlations
from clingstone.evidence.serial import DurbinWatson, form_of
from clingstone.maths.basis import Basis
from clingstone.maths.partition import Partition
from clingstone.remedies.serial import Arma, Car1
from clingstone.run import Run
from clingstone.structure.group import Groups
from clingstone.structure.serial import Series


def best(work: Callable[[], object], times: int = 3) -> float:
    out = []
    for _ in range(times):
        start = time.perf_counter()
        work()
        out.append(time.perf_counter() - start)
    return min(out)


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


def durbin_watson() -> None:
    test = DurbinWatson()
    for n in (1000, 1_000_000):
        X, y, serial = table(n, 1, 5)
        run = fits(X, y, serial)
        form = form_of(bare(run, serial).design, "differences")
        e = run.response.residual[:, 0]
        d = float(e @ form.apply(e) / run.response.ss[0])

        def exact(run: Fits = run, serial: Series = serial, d: float = d) -> object:
            from clingstone.maths.ratio import Law

            made = bare(run, serial).design
            return Law(form_of(made, "differences"), made.basis).tails(d)

        mine, plain = best(exact), best(lambda X=X, y=y: sm.OLS(y, X).fit().bse)
        print(f"Durbin–Watson, exact p, n = {n:,}: {mine * 1000:.1f} ms = {mine / plain:.2f} fit")
        if n == 1000:
            dense = best(lambda run=run, form=form: _dense(run, form))
            print(f"  dense eigenvalues {dense * 1000:.0f} ms: {dense / mine:.0f} times as long")
        whole = best(
            lambda run=run, serial=serial: test.read(bare(run, serial), test.abouts(run.design)[0]), 1
        )
        print(f"  the whole reading, with its interval: {whole:.2f} s")


def _dense(run: Fits, form: object) -> np.ndarray:
    Q = run.design.Q
    M = np.eye(len(Q)) - Q @ Q.T
    return np.linalg.eigvalsh(M @ form.S.toarray() @ M)


def processes() -> None:
    for gaps, irregular, name in (
        (False, False, "AR(1)"),
        (True, False, "AR(1) with gaps"),
        (False, True, "continuous-time AR(1)"),
    ):
        X, y, serial = table(1_000_000, 50_000, 5, gaps, irregular)
        run = fits(X, y, serial)
        plain = best(lambda X=X, y=y: sm.OLS(y, X).fit().bse)
        mine = best(lambda run=run, serial=serial: bare(run, serial)[{"serial"}], 2)
        rho = bare(run, serial)[{"serial"}].shape["serial.rho"][0]
        print(f"{name}, 1,000,000 rows in 50,000 series: {mine:.2f} s = {mine / plain:.1f} fit (ρ {rho:.3f})")


def intercept() -> None:
    X, y, serial = table(20_000, 1000, 5)
    y = y + np.repeat(np.random.default_rng(1).normal(size=1000), 20)
    run = fits(X, y, serial, grouped=True)
    mine = best(lambda: bare(run, serial)[{"group:unit", "serial"}])
    other = best(lambda: sm.MixedLM(y, X, groups=serial.part.codes).fit(), 1)
    print(f"intercept + AR(1), 20,000 rows in 1,000 series: {mine * 1000:.0f} ms")
    print(f"  statsmodels MixedLM, the intercept alone: {other:.2f} s, {other / mine:.0f} times as long")


def autocorrelations() -> None:
    X, y, serial = table(1_000_000, 100, 5, gaps=True)
    run = fits(X, y, serial)
    plain = best(lambda: sm.OLS(y, X).fit().bse)

    def to_lag_40() -> object:
        return correlations(bare(run, serial).response, 40)

    mine = best(to_lag_40, 2)
    print(f"autocorrelation to lag 40 with gaps, 1,000,000 rows: {mine:.2f} s = {mine / plain:.1f} fit")


def searches() -> None:
    for n in (1000, 10_000):
        X, y, serial = table(n, 1, 5)
        for name, one in (("car1, noise looked for", Car1()), ("arma, five orders", Arma())):
            run = fits(X, y, serial)
            took = best(
                lambda one=one, run=run, serial=serial: one.prepare(run.design, None).fit(bare(run, serial)),
                1,
            )
            print(f"{name}, n = {n:,}: {took:.2f} s")


if __name__ == "__main__":
    chosen = sys.argv[1:]
    for part in (durbin_watson, processes, intercept, autocorrelations, searches):
        if not chosen or part.__name__ in chosen:
            part()
