"""Groups: 6, 10, 20 and 40 of them, of one size and lopsided, an arm of groups beside an x of rows."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from clingstone.design.design import Assignment, Design, Term
from clingstone.evidence.registry import by_id
from clingstone.maths.once import Array
from clingstone.remedies import remedy
from clingstone.remedies.sandwich import ClusterRobust
from tests.remedies import cases
from tests.simulation.cells import COVERS, LEVEL, NOMINAL, SIZED, Bound, Covered, Sized, World

COUNTS = (6, 10, 20, 40)
SHARES = (0.0, 0.05, 0.2)
MANY = 399  # resamples that all columns share
ANY = Bound(0.0, 1.0, "a small share of groups: shown, not held to anything")


def sizes(G: int, even: bool) -> Array:
    """Rows of each group: 8, or from 2 up by steps so that the largest holds some third of all rows."""
    if even:
        return np.full(G, 8)
    found = np.resize([2, 3, 4, 6], G)
    found[0] = int(found.sum() / 2)
    return found


def design(G: int, even: bool) -> Design:
    rng = np.random.default_rng([G, even])
    group = np.repeat(np.arange(G), sizes(G, even))
    arm = (group % 2).astype(float)
    x = rng.standard_normal(len(group))
    X = np.column_stack([np.ones(len(group)), arm, x])
    terms = [
        Term("constant", (0,), "constant"),
        Term("arm", (1,), "numeric", ("arm",), focus=True),
        Term("x", (2,), "numeric", ("x",), focus=True),
    ]
    made = cases.design(X, ["constant", "arm", "x"], group=group, terms=terms)
    known = {"arm": arm, "x": x}
    return replace(made, assignment=Assignment({"arm": "clinic"}), covariates=known)


def world(G: int, even: bool, icc: float) -> World:
    made = design(G, even)
    assert made.group is not None
    part = made.group.finest

    def draw(rng: np.random.Generator, B: int) -> Array:
        u = np.sqrt(icc) * rng.standard_normal((part.count, B))
        return np.asarray(u[part.codes] + np.sqrt(1 - icc) * rng.standard_normal((made.n, B)))

    name = f"{G} {'equal' if even else 'lopsided'} groups, ICC {icc:g}"
    fast = (G in (6, 20) and not even and icc == 0.2) or (G == 10 and even and icc == 0)
    return World(name, made, draw, methods(G, even, icc), fast)


FEW = 10  # groups up to which a T² of their scores is cautious
T_SQUARED = Bound(0.015, LEVEL, "T² of few clusters rejects too seldom (Pustejovsky & Tipton 2018)")
GIANT = Bound(
    0.90,
    1.0,
    "df are those of independent rows, too many where one group holds a third of the rows and rows of one "
    "group hang together (Imbens & Kolesár 2016); group-means, mixed-intercept and cluster-jackknife hold",
)
THREE_ARMS = Bound(
    0.89,
    1.0,
    "three groups in each arm: six-point weights leave the bootstrap's own t too narrow (MacKinnon & Webb "
    "2018); plain means of 3 and 3 show the same",
)
NORMAL = Bound(0.0, 0.93, "normal quantiles with few clusters (Cameron, Gelbach & Miller 2008)")
NEARLY = Bound(0.93, 0.97, "x differs a little between groups by chance")
IGNORED = Bound(0.0, 0.92, "rows of a group taken for independent")


def methods(G: int, even: bool, icc: float) -> list[Sized | Covered]:
    both = {"arm": COVERS, "x": COVERS}
    found: list[Sized | Covered] = [
        Sized(by_id("group-endogeneity"), bound=T_SQUARED if G <= FEW else SIZED),
        Sized(by_id("slope-variation")),
    ]
    if icc == 0:
        found += [
            Sized(by_id("group-f")),
            Sized(by_id("intraclass-correlation")),
            Sized(by_id("group-lm")),
            Sized(by_id("restricted-lr"), draws=10_000),
            level_of_clusters(G, even),
        ]
    clusters = {"arm": COVERS if even or G < 20 or icc == 0 else GIANT, "x": COVERS}
    wild = {"arm": THREE_ARMS if G == 6 else clusters["arm"], "x": COVERS}
    patterns = 0 if 8 <= G <= 10 else MANY
    found += [
        Covered(
            remedy("ordinary"),
            {
                "arm": IGNORED if icc == 0.2 else NOMINAL if icc == 0 else ANY,
                "x": NOMINAL if icc == 0 else NEARLY,
            },
        ),
        Covered(remedy("cluster-robust"), clusters),
        Covered(remedy("cluster-jackknife"), both),
        Covered(remedy("wild-cluster-bootstrap"), wild, columns=1000, draws=patterns),
        Covered(remedy("group-means"), {"arm": NOMINAL if even else COVERS}),
        Covered(remedy("group-t"), {"x": COVERS}),
        Covered(remedy("fixed-effects"), {"x": COVERS}),
        Covered(remedy("within-between"), {"x [within]": COVERS, "arm": clusters["arm"]}),
        Covered(remedy("mixed-intercept"), both),
        Covered(remedy("mixed-robust"), both, columns=1000),
        Covered(remedy("randomisation"), {"arm": COVERS}, columns=1000, draws=MANY),
    ]
    if G == 6:
        old = ClusterRobust(kind="CR0", df="normal")
        found.append(
            Covered(old, {"arm": NORMAL, "x": NORMAL}, label="cluster-robust, CR0 with a normal quantile")
        )
    return found


def level_of_clusters(G: int, even: bool) -> Sized:
    """Where groups are few, or one is large, a column is referred to signs drawn for its own rows."""
    test = by_id("cluster-level")
    if even and G >= 20:
        return Sized(test, bound=Bound(0.03, LEVEL, "the plug-in variance is cautious with some 20 groups"))
    return Sized(test, columns=1000, each=True, quick=False)


WORLDS = tuple(world(G, even, icc) for G in COUNTS for even in (True, False) for icc in SHARES)
