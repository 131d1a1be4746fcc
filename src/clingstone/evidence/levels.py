"""Groups: at which level do scores go together? The score-variance test of coarse against fine clusters."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np
from scipy import special, stats

from clingstone.design.design import Design, Term
from clingstone.display import bounds, number, p_value
from clingstone.evidence.finding import About, Reading, column
from clingstone.evidence.groups import level_name
from clingstone.evidence.read import Plain, degenerate, exceedance
from clingstone.maths import sandwich
from clingstone.maths.once import Array, kept
from clingstone.maths.partition import Partition
from clingstone.needs import Family, Needs, NotSupported

if TYPE_CHECKING:
    from clingstone.covariance.fits import Fits

FEW = 20  # coarse clusters, as many of one size, below which the normal limit is replaced by a bootstrap
DRAWS = 399
CHUNK = 4_000_000  # doubles of one batch of draws
MOST_TERMS = 3
OVER = " over "  # "clinic over row: dose"
ROW = "row"


@dataclass(frozen=True)
class ClusterLevel(Plain):
    """Are scores of a coefficient correlated between fine clusters of one coarse cluster?

    With s_h = w'Q_h'e_h the score of fine cluster h, θ = Σ_g [(Σ_h s_h)² − Σ_h s_h²] has mean zero when fine
    clusters are independent, and variance 2Σ_g [(Σ_h s_h²)² − Σ_h s_h⁴]; one-sided (MacKinnon, Nielsen &
    Webb 2023). With fewer than 20 coarse clusters, or as few by n²/Σn_g², the p comes from a wild bootstrap
    at the fine level: one large cluster makes the normal limit reject too seldom. The variance is the
    plug-in; the published refinements for small samples are not in it. The interval of the ratio of standard
    errors is that of a ratio of two variances with their Satterthwaite df.
    """

    id: str = "cluster-level"
    family: Family = "group"
    null: str = "Scores of different fine clusters are independent."
    alternative: str = "Scores of fine clusters in one coarse cluster go together."
    needs: Needs = field(default=Needs(frozenset({"group"}), {"groups": 2}, known_design=True))
    source: str = "mackinnon-nielsen-webb-level-2023"
    primary: bool = False

    def abouts(self, design: Design) -> tuple[About, ...]:
        return tuple(
            About(
                f"{coarse.key}{OVER}{fine.key if fine is not None else ROW}: {term.name}",
                f"{term.name}, {_plural(fine)} of one {level_name(coarse.key)}",
            )
            for coarse, fine in pairs(design)
            for term in _terms(design)
        )

    def read(self, fits: Fits, about: About, given: frozenset[str] = frozenset()) -> Reading:
        design = fits.design
        coarse, fine, term = _found(design, about)
        up = _up(coarse, fine)
        sizes = np.bincount(up, minlength=coarse.count)
        if sizes.max() < 2:
            raise NotSupported(
                f"every {level_name(coarse.key)} holds one fine cluster, so nothing can be compared"
            )
        w = design.basis.contrast(np.eye(design.p)[term.columns[0]])
        scores = _scores(design.Q @ w, fits.response.residual, fine)
        theta, variance, fine_sum = sums(scores, up, coarse.count)
        lost = degenerate(fits.response)
        with np.errstate(divide="ignore", invalid="ignore"):
            z = np.where(lost | ~(variance > 0), np.nan, theta / np.sqrt(variance))
            size = np.where(lost, np.nan, np.sqrt(np.maximum(1 + theta / fine_sum, 0.0)))
        lower, upper = _reach(fits, coarse, fine, term, w)
        few = _alike(coarse) < FEW and fits.response.B == 1
        p = _bootstrap(fits, fine, up, coarse.count, w, z) if few else special.ndtr(-z)
        return Reading(
            statistic=z,
            statistic_name="score-variance statistic",
            p=np.asarray(p),
            log_p=None if few else np.asarray(stats.norm.logsf(z)),
            p_method=f"wild bootstrap of fine clusters, {DRAWS} draws" if few else "normal limit, one-sided",
            estimate=size,
            estimate_name="standard error by coarse clusters over that by fine ones",
            low=size * lower,
            high=size * upper,
            n_used=design.n,
            caveats=(f"There are only {coarse.count} coarse clusters.",) if coarse.count < 10 else (),
        )

    def sentence(self, reading: Reading, about: About) -> str:
        size = f"{number(column(reading.estimate), 2)}{bounds(column(reading.low), column(reading.high))}"
        head, _, name = about.key.rpartition(": ")
        coarse, _, fine = head.partition(OVER)
        return (
            f"Clustering by {level_name(coarse)} instead of {_plain(fine)} multiplies the standard error of "
            f"{name} by {size}; {p_value(column(reading.p))}."
        )


def pairs(design: Design) -> tuple[tuple[Partition, Partition | None], ...]:
    """(coarse, fine) levels, fine None for single rows: each level over the next finer one it holds."""
    if design.group is None:
        return ()
    out: list[tuple[Partition, Partition | None]] = []
    for level in reversed(design.group.levels):
        if not 1 < level.count < design.n:
            continue
        inside = [v for v in design.group.levels if v is not level and level.relation(v) == "nests"]
        inside = [v for v in inside if v.count < design.n]
        out.append((level, min(inside, key=lambda v: v.count) if inside else None))
    return tuple(out)


def sums(scores: Array, up: Array, G: int) -> tuple[Array, Array, Array]:
    """θ, its variance, and Σ s² of fine scores (H, B) that lie in coarse clusters ``up`` (H,); each (B,)."""

    def add(values: Array) -> Array:
        part = Partition("coarse", up.astype(np.int32), ("",) * G)
        return part.sums(values)

    squares = scores**2
    within = add(squares)
    theta = np.sum(add(scores) ** 2 - within, axis=0)
    variance = 2 * np.sum(within**2 - add(squares**2), axis=0)
    return theta, variance, np.sum(squares, axis=0)


def _alike(part: Partition) -> float:
    """n²/Σn_g²: how many cells of one size are as uneven as these (Carter, Schnepel & Steigerwald 2017)."""
    sizes = part.sizes.astype(float)
    return float(sizes.sum() ** 2 / np.sum(sizes**2))


def _scores(direction: Array, residual: Array, fine: Partition | None) -> Array:
    rows = direction[:, None] * residual
    return rows if fine is None else fine.sums(rows)


def _bootstrap(fits: Fits, fine: Partition | None, up: Array, G: int, w: Array, z: Array) -> Array:
    """p of z from signs drawn for whole fine clusters, the model fitted again to each draw."""
    design, e = fits.design, fits.response.residual[:, 0]
    Qw = design.Q @ w
    H = len(up)
    S = design.Q * e[:, None] if fine is None else fine.sums(design.Q * e[:, None])
    s = Qw * e if fine is None else fine.sums(Qw * e)
    Mw = design.Q * Qw[:, None] if fine is None else fine.sums(design.Q * Qw[:, None])
    rng = fits.run.child("cluster-level")
    drawn: list[Array] = []
    batch = max(1, min(DRAWS, CHUNK // H))
    for start in range(0, DRAWS, batch):
        v = np.where(rng.random((H, min(batch, DRAWS - start))) < 0.5, -1.0, 1.0)
        # Residuals of the refit: M(v∘e); their scores lose what the coefficients take up.
        again = v * s[:, None] - Mw @ (S.T @ v)
        theta, variance, _ = sums(again, up, G)
        drawn.append(theta / np.sqrt(np.maximum(variance, 1e-300)))
    return exceedance(z, np.concatenate(drawn))


def _reach(
    fits: Fits, coarse: Partition, fine: Partition | None, term: Term, w: Array
) -> tuple[float, float]:
    """What both ends of the interval of a ratio of standard errors are to the ratio; NaN under one df.

    Each variance is a sum of squares of cluster scores, about χ² over its Satterthwaite df under the
    working model of like rows (Bell & McCaffrey 2002): their ratio is read by F.
    """
    design = fits.design
    top = _df(design, coarse, term.name, w)
    bottom = float(design.m) if fine is None else _df(design, fine, term.name, w)
    if not (top >= 1 and bottom >= 1):
        return float("nan"), float("nan")
    tail = (1 - fits.run.settings.confidence) / 2
    ends = stats.f.isf(tail, top, bottom), stats.f.ppf(tail, top, bottom)
    return float(1 / np.sqrt(ends[0])), float(1 / np.sqrt(ends[1]))


def _df(design: Design, part: Partition, name: str, w: Array) -> float:
    def make() -> float:
        found = sandwich.adjust(design.scores(part), w[:, None], "CR2")
        return float(sandwich.cluster_df(found.a, found.b)[0])

    return kept(design, ("score variance df", part.key, name), make)


def _up(coarse: Partition, fine: Partition | None) -> Array:
    return np.asarray(coarse.codes if fine is None else fine.parent(coarse))


def _terms(design: Design) -> tuple[Term, ...]:
    return tuple(t for t in design.focus() if len(t.columns) == 1)[:MOST_TERMS]


def _found(design: Design, about: About) -> tuple[Partition, Partition | None, Term]:
    for coarse, fine in pairs(design):
        for term in _terms(design):
            if about.key == f"{coarse.key}{OVER}{fine.key if fine is not None else ROW}: {term.name}":
                return coarse, fine, term
    raise KeyError(about.key)


def _plain(fine: str) -> str:
    return "single rows" if fine == ROW else level_name(fine)


def _plural(fine: Partition | None) -> str:
    return "rows" if fine is None else f"groups of {level_name(fine.key)}"
