"""Facts about groups: counts, effective clusters, arms, the level at which to correct."""

from __future__ import annotations

import itertools
import math
from functools import partial

import numpy as np
from scipy import stats

from clingstone.advice.named import Fact, named, words, yes
from clingstone.advice.structures import needed
from clingstone.covariance.fits import Fits
from clingstone.design.derived import extend
from clingstone.design.design import Design, Term, rows_of
from clingstone.display import percent
from clingstone.evidence.mean import f_test_given
from clingstone.ledger.ledger import Ledger, focus_terms
from clingstone.maths.once import Array, kept
from clingstone.maths.partition import Partition
from clingstone.needs import NotSupported
from clingstone.remedies.gls import TOGETHER

WAYS = 40  # assignments from which a two-sided test at 5 % can be made by drawing them again
DIFFERS = 0.05  # level of the between-against-within comparison


def group_facts(design: Design, fits: Fits, ledger: Ledger) -> list[Fact]:
    """Facts at the level at which a correction would be made; none without groups."""
    if design.group is None:
        return []
    level = correction_level(design, ledger)
    part = design.group[level]
    out = [
        words("group level", level),
        words("mixed level", mixed_level(design, ledger)),
        named("groups", part.count),
        *_assigned(design),
        *_crossed(design, ledger),
    ]
    if not design.known:
        return out
    focus = focus_terms(design)
    at_level = [t for t in focus if constant_in(design, t, part)]
    out.append(
        yes(
            "focus at group level",
            bool(at_level),
            "focus terms that vary only between groups: " + (", ".join(t.name for t in at_level) or "none"),
        )
    )
    icc = ledger.parameter(f"group:{level}", "intraclass correlation")
    out += _effective(design, part, tuple(at_level) or focus, icc.estimate if icc is not None else 0.0)
    out += _arms(design, part, at_level)
    out += _between(fits, part, focus, f"group:{level}")
    return out


def correction_level(design: Design, ledger: Ledger) -> str:
    """The level to correct at: that of assignment or sampling, else the coarsest to be covered.

    Where nothing is to be covered, the finest level that holds repeats. Coarser is safer for the
    standard error and costs degrees of freedom (Cameron & Miller 2015).
    """
    groups = design.group
    assert groups is not None
    fixed = [level.key for level in groups.levels if level.key in design.assignment.levels]
    if fixed:
        return fixed[0]
    found = wanted_levels(design, ledger)
    if found:
        return found[0]
    repeats = [level.key for level in groups.levels if 1 < level.count < level.n]
    return repeats[-1] if repeats else groups.finest.key


def wanted_levels(design: Design, ledger: Ledger) -> list[str]:
    """Levels to be covered, outermost first when nested."""
    assert design.group is not None
    keys = {key.removeprefix("group:") for key in needed(ledger)}
    return [level.key for level in design.group.levels if level.key in keys]


def mixed_level(design: Design, ledger: Ledger) -> str:
    """Where a mixed model works: every level together when several are to be covered."""
    wanted = wanted_levels(design, ledger)
    return (
        correction_level(design, ledger)
        if len(wanted) < 2
        else TOGETHER.join(level.key for level in _levels(design))
    )


def _levels(design: Design) -> tuple[Partition, ...]:
    assert design.group is not None
    return design.group.levels


def _assigned(design: Design) -> list[Fact]:
    levels = design.assignment.levels
    pairs = [f"{term} assigned by {level}" for term, level in design.assignment.assigned.items()]
    if design.assignment.sampled:
        pairs.append(f"{design.assignment.sampled} sampled")
    return [
        yes(
            "assigned or sampled by group",
            bool(levels),
            "design facts: " + (", ".join(pairs) or "none given"),
        ),
        words("assigned level", levels[0] if levels else ""),
        words("design facts", " and ".join(pairs)),
    ]


def _crossed(design: Design, ledger: Ledger) -> list[Fact]:
    """Levels to be covered: that with the fewest groups, and those that cross each other."""
    wanted = wanted_levels(design, ledger)
    parts = [design.partitions[key] for key in wanted]
    few = min(parts, key=lambda part: part.count, default=None)
    crossed = all(a.relation(b) == "crossed" for a, b in itertools.combinations(parts, 2))
    number = len(parts) if crossed and len(parts) > 1 else 0
    out = [named("crossed levels to cover", number)]
    if few is not None:
        out += [named("fewest groups to cover", few.count), words("level with the fewest groups", few.key)]
    if number:
        out += [
            named("groups of the smallest crossed level", min(part.count for part in parts)),
            words("crossed levels", TOGETHER.join(wanted)),
        ]
    return out


def columns(design: Design, term: Term) -> Array:
    """(n, q) design columns of a term on the user's scale."""
    return rows_of(design, design.Q @ design.basis.R[:, list(term.columns)])


def constant_in(design: Design, term: Term, part: Partition) -> bool:
    """Whether a term has one value in every cell of a partition."""

    def found() -> bool:
        X = columns(design, term)
        return bool(np.all(np.abs(X - X[part.first][part.codes]) <= 1e-9 * (np.abs(X).max() + 1e-300)))

    return kept(design, ("constant", term.name, part.key), found)


def effective_clusters(design: Design, part: Partition, weights: Array, icc: float) -> float:
    """G* = G/(1 + Γ) of one contrast (Carter, Schnepel & Steigerwald 2017), at an intraclass correlation.

    Γ is the squared coefficient of variation over groups of γ_g = (1−ρ)w'Q_g'Q_gw + ρ(w'Q_g'1)².
    """
    inside, between = _information(design, part, weights)
    gamma = (1 - icc) * inside + icc * between
    mean = gamma.mean()
    if not mean > 0:
        return float("nan")
    return float(part.count / (1 + np.mean((gamma - mean) ** 2) / mean**2))


def _information(design: Design, part: Partition, weights: Array) -> tuple[Array, Array]:
    """w'Q_g'Q_gw and (w'Q_g'1)² of every group, (G,) each."""

    def found() -> tuple[Array, Array]:
        w = design.basis.contrast(weights)
        inside = np.einsum("p,gpq,q->g", w, design.scores(part), w)
        return inside, (design.sums(part) @ w) ** 2

    return kept(design, ("information", part.key, weights.tobytes()), found)


def _effective(design: Design, part: Partition, focus: tuple[Term, ...], icc: float) -> list[Fact]:
    eye = np.eye(design.p)
    found: list[tuple[float, str]] = []
    heavy: list[tuple[float, str]] = []
    for j in (j for t in focus for j in t.columns):
        found.append((effective_clusters(design, part, eye[j], icc), design.names[j]))
        inside, _ = _information(design, part, eye[j])
        heavy.append((float(inside.max() / inside.sum()), design.names[j]))
    if not found:
        return []
    least, term = min(found)
    most, name = max(heavy)
    return [
        named("effective clusters", least, f"for {term}"),
        named("largest share of one group", most, f"of the information on {name}", percent(most)),
        words("term of the largest share", name),
    ]


def _arms(design: Design, part: Partition, terms: list[Term]) -> list[Fact]:
    """The smaller of the two sets of groups that a two-valued group-level column divides."""
    least: tuple[int, str] | None = None
    for term in terms:
        X = columns(design, term)[part.first]
        for column, j in zip(X.T, term.columns, strict=True):
            values, sizes = np.unique(np.round(column, 9), return_counts=True)
            if len(values) == 2 and (least is None or sizes.min() < least[0]):
                least = (int(sizes.min()), design.names[j])
    if least is None:
        return []
    ways = math.comb(part.count, least[0])
    drawn = part.key in design.assignment.assigned.values() and ways >= WAYS
    return [
        named("groups in the smaller arm", least[0], f"for {least[1]}"),
        words("term of the smaller arm", least[1]),
        yes("assignment can be redrawn", drawn, f"{ways} ways to choose {least[0]} of {part.count} groups"),
    ]


def _between(fits: Fits, part: Partition, focus: tuple[Term, ...], key: str) -> list[Fact]:
    """Do group means of a row-level focus predictor add to it, under the fitted intercepts?

    Mundlak's comparison: the coefficient of the group means, by GLS at the variance fitted without
    them, against t with the number of groups less the columns.
    """
    if key not in fits.components or fits.design.p >= part.count - 2:
        return []
    least: tuple[float, str] | None = None
    whole, b = fits.whole or (fits, 0)
    for term in focus:
        if term.kind != "numeric" or len(term.columns) != 1 or constant_in(fits.design, term, part):
            continue
        place = ("group means", part.key, term.name, fits.run.limits)
        p = kept(whole.response, place, partial(_means, whole, part, term, key))
        if p is not None and (least is None or p[b] < least[0]):
            least = (float(p[b]), term.name)
    if least is None:
        return []
    return [
        yes("between differs from within", least[0] < DIFFERS, f"{least[1]}: p = {least[0]:.2g}"),
        words("term that differs", least[1]),
    ]


def _means(fits: Fits, part: Partition, term: Term, key: str) -> Array | None:
    """(B,) p of the group means of one term; None where the model cannot carry them."""
    x = columns(fits.design, term)[:, 0]
    try:
        wider = extend(fits.design, f"{term.name} between", part.means(x)[part.codes])
        F, q, _ = f_test_given(fits, wider, frozenset({key}))
    except NotSupported:
        return None
    return np.asarray(stats.f.sf(F, q, part.count - wider.p))
