"""A design whose rows lie in partitions that are never in memory together: only its views are here.

Every view is a sum over rows, groups or neighbours in time, so partitions add up: R and Q'y by a tree of
small QR factorizations (Demmel, Grigori, Hoemmen & Langou 2012), all else by addition. Rooms above read the
same methods as of a design in memory; whatever asks for the rows themselves is refused.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from typing import Any, NoReturn

import numpy as np

from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.maths.basis import Basis, aliased
from clingstone.maths.markov import Links
from clingstone.maths.once import Array
from clingstone.maths.partition import Partition, Relation
from clingstone.maths.sandwich import grams
from clingstone.needs import NotSupported

CANCELLED = 1e-7  # a length found by subtracting sums of squares keeps half the digits of one from rows
SAMPLE = "Examine a sample of whole groups that fits in memory."


class Elsewhere:
    """Stands where an array over all rows would stand. Any use but its shape raises NotSupported."""

    def __init__(self, *shape: int) -> None:
        self.shape = shape

    def __len__(self) -> int:
        return self.shape[0]

    def _refuse(self, *args: object, **kwargs: object) -> NoReturn:
        raise NotSupported("it needs all rows at once, and they lie in partitions", SAMPLE)

    __array__ = __array_ufunc__ = __array_function__ = _refuse
    __getitem__ = __matmul__ = __rmatmul__ = __add__ = __radd__ = __sub__ = __rsub__ = _refuse
    __mul__ = __rmul__ = __truediv__ = __rtruediv__ = __neg__ = __pow__ = _refuse

    def __getattr__(self, name: str) -> Any:
        if name.startswith("__"):
            raise AttributeError(name)
        self._refuse()


def elsewhere(*shape: int) -> Any:
    """An ``Elsewhere`` in the place of an array."""
    return Elsewhere(*shape)


@dataclass(frozen=True, eq=False)
class LagSums:
    """Sums over the links of neighbours in series that are ``length`` steps apart.

    count : how many. ends, pairs : [Q, e]'S[Q, e] (p + 1, p + 1) for S = D_Δ and A_Δ of ``maths.markov``.
    """

    count: int
    ends: Array
    pairs: Array

    def __add__(self, other: LagSums) -> LagSums:
        return LagSums(self.count + other.count, self.ends + other.ends, self.pairs + other.pairs)


@dataclass(frozen=True, eq=False)
class Sums:
    """What a partition tells of its rows, and, added up, what all partitions do.

    Groups and series are whole within a partition. labels (G,); sizes (G,); Q, e : group sums (G, p), (G,);
    QQ, Qe : (G, p, p) Q_g'Q_g and (G, p) Q_g'e_g. links : by length. products, counts : (K,) Σ e_t e_{t−k}
    and the number of pairs, k = 1 … K. twice : (p, p) (SQ)'(SQ) for S = A_1/2. step, spacing : of the times.
    """

    n: int
    ss: float
    labels: tuple[str, ...]
    sizes: Array
    Q: Array
    e: Array
    QQ: Array
    Qe: Array
    links: Mapping[float, LagSums] = field(default_factory=dict)
    products: Array = field(default_factory=lambda: np.zeros(0))
    counts: Array = field(default_factory=lambda: np.zeros(0))
    twice: Array = field(default_factory=lambda: np.zeros((0, 0)))
    step: float = float("nan")

    @classmethod
    def of(cls, block: Response, part: Partition, top: int) -> Sums:
        """From a partition held in memory, in (series, time) order; top : the longest lag, 0 for none."""
        design, e = block.design, block.residual
        out = cls(
            n=design.n,
            ss=float(block.ss[0]),
            labels=part.labels,
            sizes=part.sizes.astype(float),
            Q=part.sums(design.Q),
            e=part.sums(e[:, 0]),
            QQ=grams(design.Q, part),
            Qe=np.stack([part.sums(q * e[:, 0]) for q in design.Q.T], axis=1),
        )
        series = design.serial
        if series is None or top == 0:
            return out
        Z = np.hstack([design.Q, e])
        links = Links(series.steps)
        found = {}
        for length, count, (ends, pairs) in zip(*links.lengths, links.forms, strict=True):
            found[float(length)] = LagSums(int(count), Z.T @ ends.apply(Z), Z.T @ pairs.apply(Z))
        lags = [series.pairs(k) for k in range(1, top + 1)]
        one = next(
            (pairs for length, (_, pairs) in zip(links.lengths[0], links.forms, strict=True) if length == 1),
            None,
        )
        SQ = np.zeros_like(design.Q) if one is None else np.asarray(one.apply(design.Q)) / 2
        return replace(
            out,
            links=found,
            products=np.array([float(e[a, 0] @ e[b, 0]) for a, b in lags]),
            counts=np.array([float(len(a)) for a, _ in lags]),
            twice=SQ.T @ SQ,
            step=series.step,
        )

    def __add__(self, other: Sums) -> Sums:
        if not np.isclose(self.step, other.step, rtol=1e-9, atol=0, equal_nan=True):
            raise NotSupported(
                f"the times of some partitions run in steps of {self.step:g}, of others of {other.step:g}",
                SAMPLE,
            )
        links = dict(self.links)
        for length, sums in other.links.items():
            links[length] = links[length] + sums if length in links else sums
        return Sums(
            n=self.n + other.n,
            ss=self.ss + other.ss,
            labels=self.labels + other.labels,
            sizes=np.concatenate([self.sizes, other.sizes]),
            Q=np.concatenate([self.Q, other.Q]),
            e=np.concatenate([self.e, other.e]),
            QQ=np.concatenate([self.QQ, other.QQ]),
            Qe=np.concatenate([self.Qe, other.Qe]),
            links=dict(sorted(links.items())),
            products=self.products + other.products,
            counts=self.counts + other.counts,
            twice=self.twice + other.twice,
            step=self.step,
        )


class PartedBasis(Basis):
    """R and the numbers of rows and columns; Q is elsewhere."""

    def __init__(self, n: int, R: Array) -> None:
        super().__init__(elsewhere(n, R.shape[1]), R)


class PartedCells(Partition):
    """Cells with their labels and sizes; which row lies in which is elsewhere."""

    def __init__(self, key: str, labels: tuple[str, ...], sizes: Array) -> None:
        super().__init__(key, elsewhere(int(sizes.sum())), labels)
        object.__setattr__(self, "_sizes", sizes.astype(np.int64))

    @property
    def sizes(self) -> Any:
        return self._sizes  # type: ignore[attr-defined]

    def relation(self, other: Partition) -> Relation:
        if other is self:
            return "same"
        raise NotSupported("it needs all rows at once, and they lie in partitions", SAMPLE)


@dataclass(frozen=True, eq=False)
class PartedDesign(Design):
    """A design with one partition of the rows, from sums. The sums are those of its own basis."""

    held: Sums | None = None

    @property
    def whole(self) -> Sums:
        assert self.held is not None
        return self.held

    def sizes(self, part: Partition) -> Array:
        return self.whole.sizes

    def sums(self, part: Partition) -> Array:
        return self.whole.Q

    def scores(self, part: Partition) -> Array:
        return self.whole.QQ

    def level_of(self, term: str) -> str:
        raise NotSupported("it needs all rows at once, and they lie in partitions", SAMPLE)

    def absorbed(self, part: Partition) -> tuple[PartedDesign, Array, tuple[str, ...]]:
        """The design with cell means swept out, T with Q̃ = (Q − means)T, and the names that this removes."""
        T = self.whole.Q / np.sqrt(self.whole.sizes)[:, None]
        inner = np.eye(self.p) - T.T @ T  # Q'(I − ZZ⁻)Q
        R = self.basis.R
        X = _root(inner) @ R
        original = np.linalg.norm(R, axis=0)
        gone = {j for j in range(self.p) if np.linalg.norm(X[:, j]) <= CANCELLED * original[j]}
        keep = [j for j in range(self.p) if j not in gone]
        lost = {keep[i] for i in aliased(X[:, keep], CANCELLED)} if keep else set()
        keep = [j for j in keep if j not in lost]
        made = triangle(X[:, keep]) if keep else np.zeros((0, 0))
        terms = tuple(
            replace(t, columns=tuple(keep.index(j) for j in t.columns if j in keep))
            for t in self.terms
            if any(j in keep for j in t.columns)
        )
        derived = replace(
            self,
            basis=PartedBasis(self.n, made),
            names=tuple(self.names[j] for j in keep),
            terms=terms,
            contrasts=(),
            swept=self.swept + part.count,
            held=None,
        )
        turn = R[:, keep] @ np.linalg.inv(made) if keep else np.zeros((self.p, 0))
        return derived, turn, tuple(self.names[j] for j in sorted(gone | lost))


def triangle(X: Array) -> Array:
    """(p, p) R of X = QR, zeros below where X has fewer rows than columns."""
    short = X.shape[1] - X.shape[0]
    full = np.vstack([X, np.zeros((short, X.shape[1]))]) if short > 0 else X
    return np.asarray(np.linalg.qr(full, mode="r"), dtype=float)


def _root(A: Array) -> Array:
    """A^½ of a positive semi-definite matrix."""
    values, vectors = np.linalg.eigh(A)
    return np.asarray(np.sqrt(np.maximum(values, 0.0))[:, None] * vectors.T)


@dataclass(frozen=True, eq=False)
class PartedResponse(Response):
    """One column of y over a parted design."""

    @classmethod
    def made(cls, design: PartedDesign, coef: Array, ss: float) -> PartedResponse:
        """coef : (p,) Q'y. ss : e'e."""
        return cls(design, coef[:, None], elsewhere(design.n, 1), np.array([ss]))

    def column(self, b: int) -> Response:
        return self

    def _held(self) -> Sums:
        assert isinstance(self.design, PartedDesign)
        return self.design.whole

    def sums(self, part: Partition) -> Array:
        return self._held().e[:, None]

    def scores(self, part: Partition) -> Array:
        return self._held().Qe[:, :, None]

    def swept(self, part: Partition) -> PartedResponse:
        """The same y with cell means swept out; only its sum of squares and coefficients are known."""
        assert isinstance(self.design, PartedDesign)
        held, (derived, turn, _) = self.design.whole, self.design.absorbed(part)
        te = held.e / np.sqrt(held.sizes)
        tQ = held.Q / np.sqrt(held.sizes)[:, None]
        # Qe − means: Q'e = 0, so what sweeping leaves of the cross product is minus that of the means.
        cross = turn.T @ (-(tQ.T @ te))
        inside = turn.T @ (np.eye(held.Q.shape[1]) - tQ.T @ tQ) @ self.coef[:, 0]
        ss = held.ss - float(te @ te) - float(cross @ cross)
        return PartedResponse.made(derived, cross + inside, ss)
