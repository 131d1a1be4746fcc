"""Columns parted into deviations from group means and the means themselves, and the rows they give."""

from __future__ import annotations

from collections.abc import Collection
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from clingstone.design.design import Design
from clingstone.maths.basis import aliased
from clingstone.maths.once import Array
from clingstone.maths.partition import Partition
from clingstone.remedies.means import means
from clingstone.remedies.remedy import multi

WITHIN, BETWEEN = "within", "between"


@dataclass(frozen=True, eq=False)
class Split:
    """X (n, w) on the scale of the basis, lengths (w,) before parting; place of each (column, part).

    A mean column that the group-level columns and earlier means already span is left out (its place
    is missing): then group means say nothing of that predictor.
    """

    X: Array
    length: Array
    place: dict[tuple[int, str], int]
    inside: npt.NDArray[np.bool_]

    @classmethod
    def of(cls, design: Design, part: Partition, inside: npt.NDArray[np.bool_]) -> Split:
        """inside (p,) : columns that vary within groups."""
        X = design.Q @ design.basis.R
        length = np.linalg.norm(design.basis.R, axis=0)
        held = means(design, part, X[:, inside])[part.codes]
        if design.root is not None:
            held = held * design.root[:, None]
        apart = X[:, inside] - held
        held = np.where(np.linalg.norm(held, axis=0) > 1e-9 * length[inside], held, 0.0)
        level, varied = np.flatnonzero(~inside), np.flatnonzero(inside)
        # Both are constant within groups, so one row for each group tells what spans what.
        spanned = aliased(np.hstack([X[part.first][:, level], held[part.first]]))
        kept = [i for i in range(len(varied)) if len(level) + i not in spanned]
        place = {(int(j), ""): i for i, j in enumerate(level)}
        place |= {(int(j), WITHIN): len(level) + i for i, j in enumerate(varied)}
        start = len(level) + len(varied)
        place |= {(int(varied[i]), BETWEEN): start + at for at, i in enumerate(kept)}
        lengths = np.concatenate([length[level], length[varied], length[varied[kept]]])
        return cls(np.hstack([X[:, level], apart, held[:, kept]]), lengths, place, inside)

    def rows(self, design: Design) -> tuple[tuple[str, ...], Array, Array]:
        """Names (k,), weights (k, w) here and (k, p) in the pooled model: coefficients, then contrasts."""
        pooled = [(name, np.eye(design.p)[j]) for j, name in enumerate(design.names)]
        pooled += [(c.name, np.array(c.weights)) for c in design.contrasts]
        names, here, old = [], [], []
        for name, c in pooled:
            for kind in (WITHIN, BETWEEN) if np.any(c[self.inside] != 0) else ("",):
                names.append(f"{name} [{kind}]" if kind else name)
                here.append(self._weights(c, kind))
                old.append(c)
        return tuple(names), np.array(here), np.array(old)

    def _weights(self, c: Array, kind: str) -> Array:
        """(w,) a combination of the pooled coefficients, in one part; zero where that part is missing."""
        out = np.zeros(self.X.shape[1])
        for j in np.flatnonzero(c):
            key = (int(j), kind if self.inside[j] else "")
            if key not in self.place:
                return np.zeros_like(out)
            out[self.place[key]] = c[j]
        return out

    @property
    def coefficients(self) -> int:
        """Rows that are coefficients: two for each column that varies within groups."""
        return len(self.inside) + int(self.inside.sum())

    def differences(self) -> Array:
        """(d, w) within less between, for every column that has both."""
        out = []
        for j in np.flatnonzero(self.inside):
            if (int(j), BETWEEN) in self.place:
                row = np.zeros(self.X.shape[1])
                row[self.place[int(j), WITHIN]], row[self.place[int(j), BETWEEN]] = 1.0, -1.0
                out.append(row)
        return np.array(out).reshape(-1, self.X.shape[1])

    def wholes(self, design: Design, unusable: Collection[str]) -> dict[str, tuple[int, ...]]:
        """Places of the rows of each term of several columns, part by part, where all can be used."""
        names, _, _ = self.rows(design)
        out = {}
        for term in multi(design):
            kinds = (WITHIN, BETWEEN) if self.inside[list(term.columns)].any() else ("",)
            for kind in kinds:
                wanted = [
                    f"{design.names[j]} [{kind}]" if self.inside[j] else design.names[j] for j in term.columns
                ]
                if not any(name in unusable for name in wanted):
                    label = f"{term.name} [{kind}]" if kind else term.name
                    out[label] = tuple(names.index(name) for name in wanted)
        return out
