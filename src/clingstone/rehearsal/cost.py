"""What a replicate costs, from the design alone, and so how many a short rehearsal makes.

Microseconds on one ordinary core, set once from measured times (``tests/benchmarks/prices.py`` measures them
again); never measured while a rehearsal runs, because its size must be the same on every machine.
"""

from __future__ import annotations

from clingstone.covariance.each import each
from clingstone.covariance.fieldeach import FieldEach
from clingstone.covariance.ranges import Ranges
from clingstone.rehearsal.study import Contender, Study
from clingstone.remedies.gls import GlsReady
from clingstone.remedies.linear import LinearReady
from clingstone.remedies.longrun import LongRunReady
from clingstone.remedies.sandwich import ClusterReady, OrdinaryReady

SHORT = 2e6  # µs that a short rehearsal of a small table may take
LONGER = 5e6  # … of a table of more than SMALL rows, or of places alone, whose own correction is a search
LONGEST = 6e6  # … of places with levels beside them: three parameters to be searched
SMALL = 1000
FEWEST = 100  # replicates per truth below which a contender is not worth starting
GOOD = 250  # … that a search or a resampling must leave to the others, or it is not worth their precision
MOST = 1000  # replicates per truth of a short rehearsal; the Monte-Carlo error is 0.7 points
TOO_DEAR = "a short rehearsal has no time for it; clingstone rehearse makes a long one"
UNKNOWN = 30_000.0  # a remedy that nobody timed


def of_draw(study: Study) -> float:
    """One column of y drawn as rows, and split into what the design explains and leaves."""
    design = study.fits.design
    cost = design.n * (0.02 + 0.004 * design.p)
    node = {key for truth in study.truths for key in truth.node}
    cost += 0.03 * design.n if "serial" in node else 0.0
    if "spatial" in node and design.spatial is not None:
        cost += 0.001 * design.spatial.count**2
    return cost


def of(contender: Contender, study: Study) -> float:
    """One contender on one column of y."""
    design, ready = study.fits.design, contender.ready
    n, p, k = design.n, design.p, design.p + len(design.contrasts)
    if (price := contender.remedy.price) is not None:
        return price.fixed + price.row * n
    if isinstance(ready, OrdinaryReady):
        return 2.0
    if isinstance(ready, ClusterReady):
        return 2.0 + 0.004 * n * p + 0.002 * ready.part.count * p * k
    if isinstance(ready, LongRunReady):
        return 5.0 + 0.0016 * n * k * float(ready.grid.counts.sum())
    if isinstance(ready, GlsReady):
        return _of_gls(ready, study)
    plain = isinstance(ready, LinearReady) and type(ready).refer is LinearReady.refer
    return 10.0 + 0.01 * n * k if plain else UNKNOWN


def _of_gls(ready: GlsReady, study: Study) -> float:
    fits, design = study.fits, study.fits.design
    n, p = design.n, design.p
    algebra = fits.algebra(ready.remedy.node(fits))
    d = len(algebra.parameters)
    many = each(algebra, fits.response)
    if isinstance(many, Ranges):
        S, k = many.piece.sites.count, design.p * (design.p + 1) / 2
        # The shared ranges are made once; their part is that of a column among the fewest.
        made = len(many.nodes) * (30 + 0.0006 * S**3) / (FEWEST * max(1, len(study.truths)))
        return made + 150 + S * (4 + 0.1 * k)
    if isinstance(many, FieldEach):
        S, grid = len(many.fields.load.c), many.grid
        # Ten evaluations with derivatives; the grid of starts is factored once for all columns.
        made = grid * (100 + 0.0003 * S**3) / (FEWEST * max(1, len(study.truths)))
        return made + 0.05 * grid * S + 10 * (100 + 0.03 * S**2 + 0.0005 * S**3)
    if many is None:
        S = design.spatial.count if design.spatial is not None else n
        return 40.0 * d * (150 + 0.02 * S**2 + 0.0003 * S**3 + 0.01 * n)
    serial = many.algebra.serial is not None
    rows = 0.03 * n * p if serial else 0.0
    if d == 1:
        return 50.0 + rows
    cells = sum(piece.part.count for piece in many.algebra.chain)
    return rows + 40.0 * d * (2 + 0.001 * cells * (p + 1) ** 2 * (3 if serial else 1))


def drawable(study: Study) -> bool:
    """Whether the fewest replicates can be drawn at all in the time of a short rehearsal."""
    return of_draw(study) * max(1, len(study.truths)) * FEWEST <= _budget(study)


def _budget(study: Study) -> float:
    fits = study.fits
    many = each(fits.algebra(fits.full_node), fits.response)
    if isinstance(many, FieldEach):
        return LONGEST
    return LONGER if isinstance(many, Ranges) or fits.design.n > SMALL else SHORT


def affordable(study: Study) -> tuple[list[int], list[tuple[str, str, str]], int]:
    """Contenders of a short rehearsal (by place), those left out with the reason, replicates per truth."""
    budget = _budget(study)
    T = max(1, len(study.truths))
    price = [of(c, study) for c in study.contenders]
    total = of_draw(study)
    kept: list[int] = []
    left: list[tuple[str, str, str]] = []
    for i in sorted(range(len(price)), key=lambda i: (price[i], i)):
        own = study.contenders[i].remedy.price
        if (total + price[i]) * T * (FEWEST if own is None else GOOD) <= budget:
            kept.append(i)
            total += price[i]
        else:
            c = study.contenders[i].remedy
            left.append((c.id, c.at, TOO_DEAR))
    replicates = int(min(MOST, budget / (T * total)))
    # Whole fifties, so that a small change of the formula seldom changes a result.
    return sorted(kept), left, max(FEWEST, replicates // 50 * 50) if kept else 0
