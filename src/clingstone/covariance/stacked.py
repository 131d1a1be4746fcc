"""Rows under an AR(1) process at few link lengths: R⁻¹ as a weighted sum of fixed forms.

What each form amounts to (its Gram, and its loads on the cells above the rows) is worked out once; at
any ρ all that is left is to weigh the forms. Independent rows are the identity alone.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from clingstone.design.response import Response
from clingstone.maths.basis import Gram
from clingstone.maths.groups import Classes, Load
from clingstone.maths.markov import Links
from clingstone.maths.once import Array
from clingstone.maths.partition import Partition


@dataclass(frozen=True, eq=False)
class Forms:
    """F forms, the identity first: Grams QQ (F, pp), QE (B, F, p), EE (B, F), one column lying together.

    c (F, G), TQ (F, Gp), TE (B, F, G) : z'Sz, z'SQ and z'SE cell by cell; None without cells above.
    """

    QQ: Array
    QE: Array
    EE: Array
    c: Array | None = None
    TQ: Array | None = None
    TE: Array | None = None

    @classmethod
    def of(cls, response: Response, links: Links | None, cells: Partition | None) -> Forms:
        design = response.design
        p, B = design.p, response.B
        QQ, QE, EE = [np.eye(p).ravel()], [np.zeros((p, B))], [response.ss]
        loads = []
        if cells is not None:
            loads.append((design.sizes(cells), design.sums(cells), response.sums(cells)))
        z = np.ones(design.n) if design.root is None else design.root
        for form in (form for pair in (links.forms if links is not None else ()) for form in pair):
            qe, ee = response.gram(form)
            QQ.append(design.gram(form).ravel())
            QE.append(qe)
            EE.append(ee)
            if cells is not None:
                Sz = form.apply(z)
                loads.append(
                    (
                        cells.sums(z * Sz),
                        cells.products(Sz, design.Q),
                        cells.products(Sz, response.residual),
                    )
                )
        grams = np.stack(QQ), _by_column(QE), np.ascontiguousarray(np.stack(EE).T)
        if not loads:
            return cls(*grams)
        c, TQ, TE_all = zip(*loads, strict=True)
        return cls(*grams, np.stack(c), np.stack([one.ravel() for one in TQ]), _by_column(TE_all))

    def gram(self, w: Array, logdet: float) -> Gram:
        """[Q, e]'R⁻¹[Q, e] at weights (F,), all columns of y at one ρ."""
        p = self.QE.shape[2]
        return Gram((w @ self.QQ).reshape(p, p), np.matmul(w, self.QE).T, self.EE @ w, logdet)

    def load(self, w: Array) -> Load | None:
        """What the cells amount to under R⁻¹ at weights (F,)."""
        if self.c is None or self.TQ is None or self.TE is None:
            return None
        return Load(w @ self.c, (w @ self.TQ).reshape(self.c.shape[1], -1), np.matmul(w, self.TE).T)

    def classes(self) -> Classes | None:
        """Cells of equal loads together; None where that saves nothing."""
        if self.c is None:
            return None
        F, G = self.c.shape
        loads = [load for w in np.eye(F) if (load := self.load(w)) is not None]
        return Classes.of(loads, most=np.inf if F == 1 else G)


def _by_column(blocks: tuple[Array, ...] | list[Array]) -> Array:
    """(k, B) blocks as (B, F, k), the values of one column of y lying together."""
    return np.ascontiguousarray(np.stack(blocks).transpose(2, 0, 1))
