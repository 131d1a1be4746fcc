"""Ordinary least squares with a variance from a few smooth maps of the scores."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, ClassVar

import numpy as np

from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.display import significant
from clingstone.maths import scpc
from clingstone.maths.longrun import RatioLaw
from clingstone.maths.once import Array, kept, once
from clingstone.maths.scpc import Components
from clingstone.needs import Family, Limits, Needs, NotSupported
from clingstone.remedies.joint import Joint, hotelling_joint
from clingstone.remedies.linear import LinearReady, reported
from clingstone.remedies.places import OnMap, enough_sites
from clingstone.remedies.remedy import Account, Estimand, Price

if TYPE_CHECKING:
    from clingstone.covariance.fits import ErrorModel, Fits

FEWEST = 25
LEAST, MOST = 0.03, 0.15  # mean pairwise correlation guarded against, and too strong for this way
CONDITIONAL = 3000  # sites up to which the law is worked out for each coefficient as well
EVERY = 3  # of the strengths, for a coefficient's own law above 1,000 sites


@dataclass(frozen=True, eq=False, kw_only=True)
class ComponentsReady(LinearReady):
    """maps : what the scores are projected on. q : how many. laws : per reported row, its own given the
    predictors, beside those of a mean that the maps hold."""

    maps: Components
    q: int
    laws: tuple[tuple[RatioLaw, ...], ...]
    mean_correlation: float
    fitted_correlation: float

    def block(self, response: Response, columns: tuple[int, ...]) -> Array:
        assert self.design.spatial is not None
        part = self.design.spatial.part
        a = self.design.Q @ self.W[:, list(columns)]
        R = self.maps.R[:, : self.q] * np.sqrt(part.count / self.q)
        L = np.stack([R.T @ part.sums(a[:, i : i + 1] * response.residual) for i in range(len(columns))])
        return np.asarray(np.einsum("irb,jrb->ijb", L, L))

    def variance(self, response: Response) -> Array:
        return np.stack([self.block(response, (j,))[0, 0] for j in range(len(self.names))])

    def refer(self, estimate: Array, se: Array, confidence: float) -> tuple[Array, Array, Array]:
        """Every law has a say: the widest interval and the largest p, which invert each other."""
        se = np.where(se > 0, se, np.nan)
        c = self._critical(confidence)[:, None]
        common = self.maps.laws[self.q - 1]
        p = [scpc.tail((*common, *own), t) for own, t in zip(self.laws, estimate / se, strict=True)]
        return estimate - c * se, estimate + c * se, np.stack(p)

    @once
    def _critical(self, confidence: float) -> Array:
        common = self.maps.critical(self.q, 1 - confidence)
        return np.array([scpc.critical(own, 1 - confidence, common) for own in self.laws])

    def joint(self, wald: Array, columns: tuple[int, ...]) -> Joint | None:
        return hotelling_joint(wald, len(columns), float(self.q))

    def account(self, fits: Fits) -> Account:
        level = fits.run.settings.confidence
        c = self._critical(level)
        items = [
            ("maps", f"{self.q}"),
            ("mean pairwise correlation guarded against", f"{self.mean_correlation:.3f}"),
            ("the same in the fitted covariance", significant(self.fitted_correlation, 2)),
            (f"critical values at {level:.0%}", f"{c.min():.3f} to {c.max():.3f}"),
        ]
        return Account(
            estimator="ordinary least squares",
            covariance="mean square of the scores projected on smooth maps of the places",
            factor="none",
            df_rule=self.rule,
            reference="the worst law of t over exponential correlations up to that mean correlation",
            items=tuple(items),
            source="muller-watson-2022, bakirov-szekely-2006",
        )


@dataclass(frozen=True)
class SpatialComponents(OnMap):
    """Ordinary estimates; the scores are projected on the q smoothest maps of the places.

    The critical value holds for every exponential correlation up to a mean pairwise correlation: 0.03,
    or what the fitted covariance implies where that is more. It is the larger of the one for a mean
    and the coefficient's own, given its predictors.
    """

    at: str = ""
    limits: Limits = field(default_factory=Limits)
    least: float = LEAST
    id: ClassVar[str] = "spatial-components"
    name: ClassVar[str] = "robust to smooth dependence over the map"
    covers: ClassVar[frozenset[Family]] = frozenset({"spatial"})
    estimand: ClassVar[Estimand] = "pooled"
    needs: ClassVar[Needs] = Needs(parts=frozenset({"spatial"}), known_design=True, unweighted=True)
    source: ClassVar[str] = "muller-watson-2022"
    price: ClassVar[Price | None] = Price(800.0, 2.0)

    def prepare(self, design: Design, working: ErrorModel | None = None) -> ComponentsReady:
        sites = enough_sites(design, FEWEST, "smooth maps need")
        fitted = 0.0 if working is None else _mean_correlation(design, working)
        strength = max(self.least, fitted)
        if strength > MOST:
            raise NotSupported(
                f"two places taken at random correlate by {fitted:.2f} under the fitted covariance, and this "
                f"way holds up to {MOST}",
                "The dependence reaches too far across the map; a wider map would be needed.",
            )
        # Steps of a hundredth keep the maps from being made anew for every replicate.
        strength = max(self.least, float(np.ceil(100 * strength - 1e-9)) / 100)
        maps = kept(
            sites,
            ("smooth maps", strength),
            lambda: Components.of(sites.points, strength, np.random.default_rng(0)),
        )
        names, W = reported(design)
        q, _ = kept(maps, ("q",), lambda: maps.best(0.05))
        laws = kept(design, ("component laws", strength, q), lambda: _laws(design, W, maps, q))
        notes: tuple[str, ...] = ()
        if sites.count > CONDITIONAL:
            notes = (f"With {sites.count:,} places the law is that of a mean, not of each coefficient.",)
        return ComponentsReady(
            design,
            names,
            W,
            np.full((len(names), 1), float(q)),
            f"{q} smooth maps, worst law",
            notes=notes,
            maps=maps,
            q=q,
            laws=laws,
            mean_correlation=strength,
            fitted_correlation=fitted,
        )

    def conventions(self) -> tuple[tuple[str, SpatialComponents], ...]:
        return (("guarded against a mean correlation of 0.10", replace(self, least=0.10)),)


def _laws(design: Design, W: Array, maps: Components, q: int) -> tuple[tuple[RatioLaw, ...], ...]:
    """Per reported row: the laws of its own t given the predictors; none above so many places."""
    assert design.spatial is not None
    part = design.spatial.part
    if part.count > CONDITIONAL:
        return tuple(() for _ in W.T)
    rates = maps.rates if part.count <= scpc.SAMPLE else maps.rates[::EVERY]
    R = (maps.R[:, :q] * np.sqrt(part.count / q))[part.codes]
    blocks = []
    for w in W.T:
        a = design.Q @ w
        F = a[:, None] * R
        F = F - design.Q @ (design.Q.T @ F)
        blocks.append(part.sums(np.column_stack([a, F])))
    whole = maps.covariances(np.hstack(blocks), rates)
    out = []
    for j, block in enumerate(blocks):
        own = slice(j * (q + 1), (j + 1) * (q + 1))
        found = [RatioLaw.of(omega[own, own]) for omega in whole]
        out.append((*found, RatioLaw.of(block.T @ block)))
    return tuple(out)


def _mean_correlation(design: Design, working: ErrorModel) -> float:
    """Mean correlation of the errors of two different places' means, over at most 1,000 places."""
    assert design.spatial is not None
    from scipy.spatial.distance import pdist

    from clingstone.maths import matern

    sites = design.spatial
    variances = {key: float(v[0]) for key, v in working.variances.items()}
    own = variances.pop("spatial", 0.0)
    row = variances.pop("row")
    reach = float(working.shape["spatial.range"][0])
    if own <= 0 or not np.isfinite(reach):
        return 0.0
    some = sites.points
    if sites.count > scpc.SAMPLE:
        some = some[np.random.default_rng(0).choice(sites.count, scpc.SAMPLE, replace=False)]
    apart = sites.along(pdist(some))
    R = np.exp(apart * (-matern.PRACTICAL[0.5] / reach))
    total = own + sum(variances.values()) + row / float(sites.part.sizes.mean())
    return own / total * float(R.mean())
