"""Columns of y drawn as what they add up to, never as rows.

Under independent rows with intercepts of one level, V = σ²I + τ²ZZ', a procedure that sees y only through
its cluster scores Q_g'y_g, its cluster sums z_g'y_g and y'y can be fed from their own law: with
A_g = [Q_g, z_g] and A_g'A_g = F_gF_g',

    A_g'y_g = τu_g A_g'z_g + σF_gζ_g,    y'y = Σ_g (τ²u_g²c_g + 2τσu_g (F_gζ_g)_z + σ²‖ζ_g‖²) + σ²χ²_r,

u_g and ζ_g standard normal, c_g = z_g'z_g, r the rows that no A_g spans. The cost does not depend on n.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.maths.forms import Form
from clingstone.maths.once import Array, kept, once
from clingstone.maths.partition import Partition

NO_ROWS = np.zeros((0, 0))


@dataclass(frozen=True, eq=False)
class Drawn(Response):
    """B columns known by their sums and scores over the cells of one partition; there are no rows.

    part : the partition. raw : (G, p + 1, B) A_g'y_g.
    """

    part: Partition = field(kw_only=True)
    raw: Array = field(kw_only=True, repr=False)

    @property
    def B(self) -> int:
        return int(self.coef.shape[1])

    @once
    def sums(self, part: Partition) -> Array:
        self._known(part)
        return np.asarray(self.raw[:, -1] - self.design.sums(part) @ self.coef)

    @once
    def scores(self, part: Partition) -> Array:
        self._known(part)
        return np.asarray(self.raw[:, :-1] - np.matmul(self.design.scores(part), self.coef))

    def gram(self, form: Form) -> tuple[Array, Array]:
        raise ValueError(f"columns drawn by {self.part.key} have no rows to apply {form.key} to")

    def column(self, b: int) -> Drawn:
        pick = slice(b, b + 1)
        return Drawn(
            self.design,
            self.coef[:, pick],
            NO_ROWS,
            self.ss[pick],
            part=self.part,
            raw=self.raw[:, :, pick],
        )

    def _known(self, part: Partition) -> None:
        if part.key != self.part.key:
            raise ValueError(f"columns drawn by {self.part.key} have no sums by {part.key}")


@dataclass(frozen=True, eq=False)
class Law:
    """What the design gives to the draw: F (G, p + 1, p + 1), last (G, p + 1) = A_g'z_g, and r."""

    F: Array
    last: Array
    rest: int


def law(design: Design, part: Partition) -> Law:
    """The law of the sums and scores of one partition; kept with the design."""
    return kept(design, ("drawn law", part.key), lambda: _law(design, part))


def _law(design: Design, part: Partition) -> Law:
    p, G = design.p, part.count
    C = np.empty((G, p + 1, p + 1))
    C[:, :p, :p] = design.scores(part)
    C[:, :p, p] = C[:, p, :p] = design.sums(part)
    C[:, p, p] = design.sizes(part)
    # Unit diagonal, so that the rank rule does not depend on the units of weights.
    scale = np.sqrt(np.maximum(np.einsum("gii->gi", C), 1e-300))
    values, vectors = np.linalg.eigh(C / (scale[:, :, None] * scale[:, None, :]))
    seen = values > 1e-10 * values[:, -1:]
    F = scale[:, :, None] * vectors * np.sqrt(np.where(seen, values, 0.0))[:, None, :]
    # Any F of full column rank with FF' = A'A is A'U for an orthonormal U that spans A, so ‖ζ‖² is ‖P_Aε‖².
    return Law(F, C[:, :, p].copy(), int(design.n - seen.sum()))


def draw(
    design: Design, part: Partition, tau2: float, sigma2: float, rng: np.random.Generator, B: int
) -> Drawn:
    """B columns with intercepts of variance τ² over the cells and row noise σ²."""
    found = law(design, part)
    G, q, _ = found.F.shape
    zeta = rng.standard_normal((G, q, B))
    white = np.matmul(found.F, zeta)
    # Directions that a cell does not span have a column of zeros in F, and no part in y'y.
    alive = np.any(found.F != 0, axis=1)[:, :, None]
    square = sigma2 * np.einsum("gqb,gqb->b", zeta * alive, zeta)
    square += sigma2 * rng.chisquare(found.rest, B) if found.rest else 0.0
    raw = np.sqrt(sigma2) * white
    if tau2 > 0:
        u = np.sqrt(tau2) * rng.standard_normal((G, B))
        square += found.last[:, -1] @ u**2 + 2 * np.einsum("gb,gb->b", u, raw[:, -1])
        raw += found.last[:, :, None] * u[:, None, :]
    coef = raw[:, :-1].sum(axis=0)
    ss = np.maximum(square - np.einsum("pb,pb->b", coef, coef), 0.0)
    return Drawn(design, coef, NO_ROWS, ss, part=part, raw=raw)
