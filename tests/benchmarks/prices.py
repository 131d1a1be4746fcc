"""What every remedy costs in a rehearsal, beside what the formula says: python -m tests.benchmarks.prices

Microseconds of processor time per column of y, the least of three runs over as many columns as two seconds
hold (500 at the most). The constants of ``rehearsal/cost.py`` and the ``price`` of a remedy are set by hand
from this table, for a quiet core: a busy machine shows one and a half to two times as much.
"""

from __future__ import annotations

import sys
import time
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[1]))

from clingstone.covariance.fits import Fits
from clingstone.needs import NotSupported
from clingstone.rehearsal import cost
from clingstone.rehearsal.study import Contender, Study, read, study
from clingstone.rehearsal.truths import Truth, draw
from clingstone.remedies import REMEDIES
from clingstone.run import one_thread
from remedies.cases import ar1, design, fits

SECONDS, MOST, ROUNDS = 2.0, 500, 3


def worlds() -> Iterator[tuple[str, Fits]]:
    """Designs of three sizes: groups, one series, places that repeat."""
    rng = np.random.default_rng(0)
    for G, m in ((12, 10), (40, 10), (100, 20)):
        group, n = np.repeat(np.arange(G), m), G * m
        x = rng.normal(size=n)
        X = np.column_stack([np.ones(n), (group % 2).astype(float), x])
        y = rng.normal(size=n) + 0.5 * rng.normal(size=G)[group] + 0.4 * rng.normal(size=G)[group] * x
        of = design(X, ["constant", "arm", "x"], group=group)
        terms = tuple(replace(t, variables=("x",)) if t.name == "x" else t for t in of.terms)
        yield f"{G} groups of {m}", fits(replace(of, terms=terms, covariates={"x": x}), y)
    for n in (60, 240, 960):
        X = np.column_stack([np.ones(n), rng.normal(size=(n, 2))])
        yield f"series of {n}", fits(design(X, tick=np.arange(n)), ar1(n, 0.5, 1, rng)[:, 0])
    for S in (40, 80, 160):
        site, xy = np.repeat(np.arange(S), 3), rng.uniform(size=(S, 2))
        apart = np.linalg.norm(xy[:, None] - xy, axis=2)
        field = np.linalg.cholesky(np.exp(-apart / 0.2)) @ rng.normal(size=S)
        X = np.column_stack([np.ones(3 * S), xy[site, 0]])
        y = (field + 0.5 * rng.normal(size=S))[site] + rng.normal(size=3 * S)
        yield f"{S} places, three times", fits(design(X, group=site, xy=xy[site]), y)


def studied(f: Fits) -> Study:
    """Every remedy that this design carries."""
    model = f[f.full_node]
    truth = Truth("price", "", model.node, tuple(model.theta[:, 0].tolist()), float(model.sigma2[0]))
    wanted = []
    for one in REMEDIES:
        try:
            wanted += [(one.id, level) for level in one.abouts(f.design)]
        except NotSupported:
            continue
    return study(f, [truth], wanted)[0]


def measured(found: Study, contender: Contender) -> float:
    """µs per column."""
    B, rng, best = 2, np.random.default_rng(1), np.inf
    for _ in range(ROUNDS):
        y = draw(found.truths[0], found.fits, rng, B)
        start = time.process_time()
        read(contender, Fits(y, found.fits.run))
        spent = time.process_time() - start
        best = min(best, spent / B) if B > 2 else spent / B
        B = int(np.clip(SECONDS / max(best, 1e-6), 2, MOST))
    return best * 1e6


def main() -> None:
    with one_thread():
        for words, f in worlds():
            found = studied(f)
            print(f"{words}, {f.design.n:,} rows, {f.design.p} coefficients")
            for contender in found.contenders:
                name = f"{contender.remedy.id} {contender.remedy.at}"
                took, said = measured(found, contender), cost.of(contender, found)
                print(f"  {name:32s} {took:12,.0f}   formula {said:10,.0f}", flush=True)


if __name__ == "__main__":
    main()
