"""Columns of y over one design: the user's has one, a bootstrap or a rehearsal has many."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from clingstone.design.design import Design
from clingstone.maths.forms import Form
from clingstone.maths.once import Array, frozen, once
from clingstone.maths.partition import Partition


@dataclass(frozen=True, eq=False)
class Response:
    """B columns of y, split into what the design explains and what it leaves.

    coef : (p, B) Q'Y. residual : (n, B) MY. ss : (B,) e'e.
    """

    design: Design
    coef: Array
    residual: Array
    ss: Array

    @classmethod
    def of(cls, design: Design, Y: Array) -> Response:
        """From Y (n,) or (n, B), on the user's scale; precision weights are applied here."""
        Y = np.asarray(Y, dtype=float)
        Y = Y[:, None] if Y.ndim == 1 else Y
        if design.root is not None:
            Y = Y * design.root[:, None]
        e = design.basis.project(Y)
        return cls(design, frozen(design.Q.T @ Y), frozen(e), frozen(np.einsum("ij,ij->j", e, e)))

    @property
    def B(self) -> int:
        return int(self.residual.shape[1])

    @property
    def s2(self) -> Array:
        """(B,) e'e / m, the ordinary residual variance."""
        return np.asarray(self.ss / self.design.m)

    @once
    def sums(self, part: Partition) -> Array:
        """(G, B) Z'e, with √weights in Z."""
        root = self.design.root
        return part.sums(self.residual if root is None else self.residual * root[:, None])

    @once
    def scores(self, part: Partition) -> Array:
        """(G, p, B) Q_g'e_g."""
        Q = self.design.Q
        out = np.empty((part.count, self.design.p, self.B))
        for j in range(self.design.p):
            out[:, j, :] = part.products(Q[:, j], self.residual)
        return out

    @once
    def gram(self, form: Form) -> tuple[Array, Array]:
        """Q'SE (p, B) and the diagonal of E'SE (B,)."""
        SE = form.apply(self.residual)
        return np.asarray(self.design.Q.T @ SE), np.einsum("ij,ij->j", self.residual, SE)

    def column(self, b: int) -> Response:
        """One column as a response of its own."""
        pick = slice(b, b + 1)
        return Response(self.design, self.coef[:, pick], self.residual[:, pick], self.ss[pick])
