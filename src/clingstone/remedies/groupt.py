"""The model fitted in every group by itself, then an ordinary t of the groups' estimates."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, ClassVar

import numpy as np
import numpy.typing as npt

from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.maths import reference, resample
from clingstone.maths.once import Array
from clingstone.maths.partition import Partition
from clingstone.needs import Family, Limits, Needs, Refusal
from clingstone.remedies.clusters import OverGroups, clusters
from clingstone.remedies.joint import Joint, hotelling_joint
from clingstone.remedies.linear import stop_if_none_left
from clingstone.remedies.remedy import GROUPED, Account, Estimand, Estimates, Price, multi, rows

if TYPE_CHECKING:
    from clingstone.covariance.fits import ErrorModel, Fits

EVERY = 12  # groups up to which all sign changes are counted out
MANY = 9999


@dataclass(frozen=True, eq=False)
class GroupTReady:
    """Estimates per group, θ_g = θ̂ + a_g's_g. a (k, G, p). used (k, G): groups that can tell the row."""

    design: Design
    part: Partition
    at: str
    names: tuple[str, ...]
    W: Array
    a: Array
    used: npt.NDArray[np.bool_]
    signs: bool
    unusable: Mapping[str, Refusal]
    notes: tuple[str, ...]

    @property
    def rule(self) -> str:
        return "sign changes" if self.signs else "groups − 1"

    def each(self, response: Response, row: int) -> Array:
        """(G_used, B) the estimates of the groups that can tell a row."""
        g = self.used[row]
        moved = np.einsum("gp,gpb->gb", self.a[row][g], response.scores(self.part)[g])
        return np.asarray((self.W[:, row] @ response.coef)[None] + moved)

    def fit(self, fits: Fits) -> Estimates:
        response, level = fits.response, fits.run.settings.confidence
        estimate, se, low, high, p = np.full((5, len(self.names), response.B), np.nan)
        df = np.full((len(self.names), 1), np.nan)
        for j, name in enumerate(self.names):
            if name in self.unusable:
                continue
            each = self.each(response, j)
            G = len(each)
            estimate[j], se[j] = each.mean(axis=0), each.std(axis=0, ddof=1) / np.sqrt(G)
            if self.signs:
                found = self._signed(fits, each, estimate[j], se[j], name)
                below, above = found.ends(1 - level)
                low[j], high[j], p[j] = estimate[j] - below, estimate[j] + above, found.p(estimate[j])
            else:
                df[j] = G - 1.0
                pick = slice(j, j + 1)
                low[pick], high[pick], p[pick] = reference.t_rows(estimate[pick], se[pick], df[pick], level)
        joint = {} if self.signs else self._joints(response)
        return Estimates(estimate, se, df, low, high, p, joint=joint)

    def _signed(self, fits: Fits, each: Array, mean: Array, se: Array, name: str) -> resample.Curves:
        """Sign changes of θ_g − θ₀; t is a monotone function of their sum, which is used."""
        G = len(each)
        exact = G <= EVERY
        rng = fits.run.child(f"group-t:{self.at}:{name}")
        V = resample.every_sign(G) if exact else resample.random_signs(rng, MANY, G)
        none = np.zeros((len(V), 1))
        q0 = np.broadcast_to(G**2 * se**2, (len(V), len(se)))
        return resample.Curves(V @ (each - mean), V.sum(axis=1)[:, None], q0, none, none, q0, se**2, exact)

    def _joints(self, response: Response) -> dict[str, Joint]:
        """Hotelling's T² over the groups that can tell every coefficient of a term."""
        out: dict[str, Joint] = {}
        for t in multi(self.design):
            q = len(t.columns)
            g = np.all(self.used[list(t.columns)], axis=0)
            G = int(g.sum())
            if q >= G or any(self.design.names[j] in self.unusable for j in t.columns):
                continue
            S = response.scores(self.part)[g]
            each = np.stack(
                [
                    (self.W[:, j] @ response.coef)[None] + np.einsum("gp,gpb->gb", self.a[j][g], S)
                    for j in t.columns
                ]
            )
            off = each - each.mean(axis=1, keepdims=True)
            V = np.einsum("sgb,tgb->stb", off, off) / (G - 1) / G
            made = hotelling_joint(reference.wald(each.mean(axis=1), V), q, float(G - 1))
            if made is not None:
                out[t.name] = made
        return out

    def account(self, fits: Fits) -> Account:
        told = {n: int(u.sum()) for n, u in zip(self.names, self.used, strict=True) if n not in self.unusable}
        return Account(
            estimator=f"ordinary least squares in each {self.at} by itself, then the plain mean",
            covariance="spread of the group estimates over G",
            factor="G − 1",
            df_rule=self.rule,
            reference="sign changes of the group estimates" if self.signs else "t",
            items=(
                ("groups", f"{self.part.count}"),
                *((f"groups that tell {name}", f"{count}") for name, count in told.items()),
            ),
            source="ibragimov-muller-2010",
        )


@dataclass(frozen=True)
class GroupT(OverGroups):
    """The model fitted in every group by itself; t of the group estimates (Ibragimov & Müller 2010).

    Valid for two-sided levels up to 8.3 % however much the groups differ in spread, as long as their
    estimates are independent and near normal. The estimand is the plain mean of the groups' own
    coefficients; what does not vary within groups cannot be told.
    """

    signs: bool = False
    at: str = ""
    limits: Limits = field(default_factory=Limits)
    id: ClassVar[str] = "group-t"
    covers: ClassVar[frozenset[Family]] = frozenset({"group", "serial"})
    estimand: ClassVar[Estimand] = "within"
    needs: ClassVar[Needs] = GROUPED
    source: ClassVar[str] = "ibragimov-muller-2010"
    price: ClassVar[Price | None] = Price(10.0, 0.02)

    @property
    def name(self) -> str:
        return f"an estimate in each {self.at}, then t" if self.at else "an estimate in each group, then t"

    def prepare(self, design: Design, working: ErrorModel | None = None) -> GroupTReady:
        part = clusters(design, self.at)
        names, C = rows(design)
        W = design.basis.contrast(C)
        a, used = _by_group(design.scores(part), W)
        usable = used.sum(axis=1)
        unusable = {
            name: Refusal(
                f"only {count} of {part.count} groups of {self.at} tell it by themselves"
                if count
                else f"no {self.at} tells it by itself: it does not vary there, or has too few rows",
                "cluster-robust, or means of groups for what varies between them, are still possible.",
            )
            for name, count in zip(names, usable, strict=True)
            if count < 2
        }
        stop_if_none_left(names, unusable)
        return GroupTReady(
            design, part, self.at, names, W, a, used, self.signs, unusable, self._notes(names, used, unusable)
        )

    def _notes(
        self, names: tuple[str, ...], used: npt.NDArray[np.bool_], unusable: Mapping[str, Refusal]
    ) -> tuple[str, ...]:
        left = {n: int(np.sum(~u)) for n, u in zip(names, used, strict=True) if n not in unusable}
        some = [f"{count:,} for {name}" for name, count in left.items() if count]
        if not some:
            return ()
        return (f"Groups that cannot tell a row by themselves are left out of it: {', '.join(some)}.",)

    def conventions(self) -> tuple[tuple[str, GroupT], ...]:
        return (("sign changes of the group estimates in place of t", replace(self, signs=True)),)


def _by_group(M: Array, W: Array) -> tuple[Array, npt.NDArray[np.bool_]]:
    """M_g⁺w (k, G, p), and whether w lies in the range of M_g (k, G)."""
    values, vectors = np.linalg.eigh(M)
    live = values > 1e-12 * np.maximum(values[:, -1:], 1e-300)
    seen = np.einsum("gij,ik->gjk", vectors, W)
    part = np.where(live, 1 / np.where(live, values, 1.0), 0.0)
    a = np.einsum("gij,gjk->kgi", vectors, part[:, :, None] * seen)
    outside = np.einsum("gj,gjk->kg", (~live).astype(float), seen**2)
    return a, outside <= 1e-10 * np.sum(W**2, axis=0)[:, None]
