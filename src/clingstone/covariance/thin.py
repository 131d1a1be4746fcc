"""A smaller table of whole places: where a search over many places starts."""

from __future__ import annotations

import numpy as np

from clingstone.design.derived import whole
from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.maths.basis import Basis, aliased
from clingstone.maths.once import frozen
from clingstone.structure.group import Groups
from clingstone.structure.spatial import Sites


def thin(response: Response, places: int, rng: np.random.Generator) -> Response:
    """The first column of y at the rows of some places, with every structure.

    Half of the places are drawn at random, and the nearest other place of each goes with it: so a part
    shows what is near to each other as the whole does, and what is far.

    Columns of the design that those rows cannot tell apart are left out: the covariance, not the mean,
    is wanted of it.
    """
    design = response.design
    sites = design.spatial
    if sites is None:
        raise ValueError("only a design with places can be thinned by place")
    drawn = rng.choice(sites.count, min(places, sites.count) // 2, replace=False)
    near = np.asarray(sites.tree.query(sites.points[drawn], k=2)[1])
    chosen = np.unique(np.r_[drawn, near.ravel()])
    rows = np.flatnonzero(np.isin(sites.part.codes, chosen))
    X = design.Q[rows]
    drop = set(aliased(X))
    basis = Basis.of(X[:, [j for j in range(design.p) if j not in drop]])
    group = design.group
    small = Design(
        basis=basis,
        names=tuple(str(j) for j in range(basis.p)),
        terms=(),
        group=None if group is None else Groups(tuple(g.take(rows) for g in group.levels), group.arrangement),
        serial=None if design.serial is None else design.serial.take(rows),
        spatial=Sites(sites.part.take(rows), frozen(sites.xy[chosen]), sites.kind, sites.unit),
        root=None if design.root is None else frozen(design.root[rows]),
    )
    # Both halves of y are already on the scale of √weights.
    e = basis.project(whole(response.column(0))[rows])
    return Response(small, frozen(basis.Q.T @ e), frozen(e), frozen(np.einsum("ij,ij->j", e, e)))
