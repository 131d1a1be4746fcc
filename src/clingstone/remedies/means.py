"""One mean per group, then ordinary least squares of the means."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, ClassVar, Literal

import numpy as np
import numpy.typing as npt

from clingstone.design.derived import whole
from clingstone.design.design import Design, rows_of
from clingstone.design.response import Response
from clingstone.maths import reference, sandwich
from clingstone.maths.estimable import Reduced, reduced
from clingstone.maths.once import Array
from clingstone.maths.partition import Partition
from clingstone.needs import Family, Limits, Needs, NotSupported, Refusal
from clingstone.remedies.clusters import OverGroups, clusters
from clingstone.remedies.joint import Joint, hotelling_joint, wald_joint
from clingstone.remedies.linear import blanked, few_df, stop_if_none_left
from clingstone.remedies.remedy import GROUPED, Account, Estimand, Estimates, Price, multi, rows

if TYPE_CHECKING:
    from clingstone.covariance.fits import ErrorModel, Fits

UNEVEN = 3.0  # largest group over smallest beyond which means are clearly not equally exact


@dataclass(frozen=True, eq=False)
class MeansReady:
    """G group means in place of n rows.

    names (k,) rows; those of columns that vary within groups end in [between]. found : the columns' means,
    reduced. T (G, k) row weights of HC2, or None for s². inverse (p, k) : the rows in the whole table.
    """

    design: Design
    part: Partition
    at: str
    names: tuple[str, ...]
    found: Reduced
    scale: Array  # (G,) √weight of each mean
    T: Array | None
    df: Array
    rule: str
    unusable: Mapping[str, Refusal]
    notes: tuple[str, ...]
    inverse: Array
    joints: Mapping[str, tuple[int, ...]]

    @property
    def m(self) -> int:
        return self.part.count - len(self.found.kept)

    def fit(self, fits: Fits) -> Estimates:
        response, W, Q = fits.response, self.found.W, self.found.basis.Q
        Y = means(self.design, self.part, whole(response)) * self.scale[:, None]
        coef = Q.T @ Y
        e = self.found.basis.project(Y)
        s2 = np.sum(e**2, axis=0) / self.m
        estimate = W.T @ coef
        variance = np.sum(W**2, axis=0)[:, None] * s2 if self.T is None else (self.T**2).T @ e**2
        gone = np.array([name in self.unusable for name in self.names], dtype=bool)
        estimate[gone] = variance[gone] = np.nan
        se = np.sqrt(variance)
        covariance = None
        if response.B == 1:
            p = self.design.p
            covariance = blanked(self._block(e, s2, tuple(range(p)))[:, :, 0], gone[:p])
        joint = {
            name: made
            for name, columns in self.joints.items()
            if (made := self._joint(estimate[list(columns)], e, s2, columns)) is not None
        }
        df = np.where(np.isnan(se), np.nan, self.df)
        return replace(
            Estimates.by_t(estimate, se, df, fits.run.settings.confidence),
            covariance=covariance,
            joint=joint,
            names=self.names,
            ordinary=ordinary(response, self.inverse),
        )

    def _block(self, e: Array, s2: Array, columns: tuple[int, ...]) -> Array:
        pick = list(columns)
        if self.T is None:
            w = self.found.W[:, pick]
            return np.asarray((w.T @ w)[:, :, None] * s2)
        T = self.T[:, pick]
        return np.asarray(np.einsum("gs,gt,gb->stb", T, T, e**2))

    def _joint(self, estimate: Array, e: Array, s2: Array, columns: tuple[int, ...]) -> Joint | None:
        wald, q = reference.wald(estimate, self._block(e, s2, columns)), len(columns)
        if self.T is not None:
            return hotelling_joint(
                wald, q, sandwich.row_joint_df(self.found.basis.Q, self.T[:, list(columns)])
            )
        return wald_joint(wald, q, float(self.m))

    def account(self, fits: Fits) -> Account:
        weighted = not np.all(self.scale == self.scale[0])
        return Account(
            estimator=f"{'weighted ' if weighted else ''}least squares of one mean per {self.at}",
            covariance="HC2 over groups" if self.T is not None else "s²(X′X)⁻¹ over groups",
            factor="squared residuals over 1 − leverage" if self.T is not None else "s² = e′e/(G − p)",
            df_rule=self.rule,
            reference="t",
            items=(
                ("groups", f"{self.part.count}"),
                ("rows per group", f"{self.part.sizes.min()} to {self.part.sizes.max()}"),
                ("columns left", f"{len(self.found.kept)}"),
                ("weights of the means", "rows in the group" if weighted else "equal"),
            ),
            source="leyrat-2018, mackinnon-white-1985" if self.T is not None else "leyrat-2018",
        )


@dataclass(frozen=True)
class GroupMeans(OverGroups):
    """Ordinary least squares of group means: one row per group, t with G − p df.

    Exact for group-level predictors when groups are of one size and their errors normal, whatever the
    dependence inside a group; a column that varies within groups gets its between-group coefficient.
    """

    kind: Literal["equal", "weighted", "HC2"] = "equal"
    at: str = ""
    limits: Limits = field(default_factory=Limits)
    id: ClassVar[str] = "group-means"
    covers: ClassVar[frozenset[Family]] = frozenset({"group", "serial"})
    estimand: ClassVar[Estimand] = "between"
    needs: ClassVar[Needs] = GROUPED
    source: ClassVar[str] = "leyrat-2018"
    price: ClassVar[Price | None] = Price(10.0, 0.02)

    @property
    def name(self) -> str:
        return f"means of each {self.at}" if self.at else "means of groups"

    def prepare(self, design: Design, working: ErrorModel | None = None) -> MeansReady:
        part = clusters(design, self.at)
        X = design.Q @ design.basis.R
        averages = means(design, part, X)
        plain, C = rows(design)
        inside = varies(design, part)
        moved = (C[:, inside] != 0).any(axis=1)
        names = tuple(f"{n} [between]" if v else n for n, v in zip(plain, moved, strict=True))
        scale = np.sqrt(design.sizes(part)) if self.kind == "weighted" else np.ones(part.count)
        spread = averages * scale[:, None]
        found = reduced(spread, np.linalg.norm(spread, axis=0) + 1e-300, C)
        q = len(found.kept)
        if part.count <= q:
            raise NotSupported(
                f"{part.count} groups of {self.at} leave no degrees of freedom for {q} coefficients of means",
                "Fewer predictors that differ between groups, or more groups, would be needed.",
            )
        untold = Refusal(
            f"means by {self.at} do not tell it from other terms",
            "cluster-robust or mixed-intercept use the rows within groups as well.",
        )
        unusable = {name: untold for name, told in zip(names, found.told, strict=True) if not told}
        T, df = self._spread(found, part.count - q)
        unusable = {**few_df(names, df), **unusable}
        stop_if_none_left(names, unusable)
        return MeansReady(
            design,
            part,
            self.at,
            names,
            found,
            scale,
            T,
            df[:, None],
            "Satterthwaite" if self.kind == "HC2" else "groups − p",
            unusable,
            self._notes(part),
            design.basis.contrast(C),
            _joints(design, names, unusable, moved),
        )

    def _spread(self, found: Reduced, m: int) -> tuple[Array | None, Array]:
        """Row weights of HC2, or None for s², and df (k,)."""
        k = found.W.shape[1]
        if self.kind != "HC2":
            return None, np.full(k, float(m))
        T, lost, _ = sandwich.row_weights(found.basis.Q, found.W, 1)
        return T, np.where(lost > 1e-8, np.nan, sandwich.row_df(found.basis.Q, T))

    def _notes(self, part: Partition) -> tuple[str, ...]:
        if self.kind != "equal" or part.sizes.max() < UNEVEN * part.sizes.min():
            return ()
        return (
            f"Groups hold {part.sizes.min()} to {part.sizes.max()} rows, so their means are not equally "
            "exact; the interval treats them as if they were.",
        )

    def conventions(self) -> tuple[tuple[str, GroupMeans], ...]:
        return (
            ("means weighted by the rows of their group", replace(self, kind="weighted")),
            ("HC2 over groups, Satterthwaite df", replace(self, kind="HC2")),
        )


def _joints(
    design: Design, names: tuple[str, ...], unusable: Mapping[str, Refusal], moved: npt.NDArray[np.bool_]
) -> dict[str, tuple[int, ...]]:
    """Terms of several columns that can be tested at once, by the name that their rows have here."""
    return {
        term.name + (" [between]" if moved[list(term.columns)].any() else ""): term.columns
        for term in multi(design)
        if not any(names[j] in unusable for j in term.columns)
    }


def means(design: Design, part: Partition, columns: Array) -> Array:
    """(G, k) weighted means of columns that are on the scale of the basis."""
    if design.root is None:
        return part.means(columns)
    return part.sums(columns * design.root[:, None]) / design.sizes(part)[:, None]


def varies(design: Design, part: Partition) -> npt.NDArray[np.bool_]:
    """(p,) whether a column takes several values within some group."""
    X = rows_of(design, design.Q @ design.basis.R)
    off = np.abs(X - X[part.first][part.codes]).max(axis=0)
    return np.asarray(off > 1e-9 * (np.abs(X).max(axis=0) + 1e-300))


def ordinary(response: Response, W: Array) -> Array:
    """(k, B) ordinary standard errors of rows with weights W (p, k)."""
    return np.asarray(np.linalg.norm(W, axis=0)[:, None] * np.sqrt(response.s2))
