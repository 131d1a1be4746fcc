"""Groups: the restricted likelihood ratio of one variance with its exact law, alone and given others."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np

from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.display import p_value, percent, significant
from clingstone.evidence.anova import Anova, anova
from clingstone.evidence.finding import About, Reading, column
from clingstone.evidence.groups import BesideOthers, caveats, level_name, repeats
from clingstone.evidence.read import degenerate, exceedance
from clingstone.maths import restricted
from clingstone.maths.once import Array, kept
from clingstone.maths.partition import Partition
from clingstone.needs import Family, Needs, NotSupported
from clingstone.run import Run

if TYPE_CHECKING:
    from clingstone.covariance.fits import Fits

DRAWS = 10_000


@dataclass(frozen=True)
class RestrictedLR(BesideOthers):
    """Restricted likelihood ratio of the variance between the groups of one level.

    Alone its null law is exact by draws in the spectrum of Z'MZ (Crainiceanu & Ruppert 2004). Given other
    structures the same draws serve, as if what the others add were known (Greven, Crainiceanu,
    Küchenhoff & Peters 2008): close, and far better than the half-and-half mixture with few groups.
    """

    id: str = "restricted-lr"
    family: Family = "group"
    null: str = "The variance between groups is zero."
    alternative: str = "The variance between groups is greater than zero."
    needs: Needs = field(default=Needs(frozenset({"group"}), {"groups": 2}))
    source: str = "greven-2008"
    primary: bool = False

    def read(self, fits: Fits, about: About, given: frozenset[str] = frozenset()) -> Reading:
        design, key = fits.design, f"group:{about.key}"
        part, table = spread(fits.response, about)
        statistic, share = ratio(fits, key, given)
        law = null_draws(design, part, table.df1, fits.run)
        words = "exact law" if not given else "law as if the other structures were known"
        return Reading(
            statistic=statistic,
            statistic_name="restricted likelihood ratio",
            df=1.0,
            p=exceedance(statistic, law),
            p_method=f"{words}, {len(law):,} draws",
            estimate=share,
            estimate_name="share of the residual variance",
            n_used=design.n,
            caveats=caveats(design, part),
        )

    def sentence(self, reading: Reading, about: About) -> str:
        return shared(reading, about)


def spread(response: Response, about: About) -> tuple[Partition, Anova]:
    """A level and its analysis of variance. Raises NotSupported where the model leaves it no room."""
    part = repeats(response.design, about)
    table = anova(response, part)
    if table.df1 == 0 or table.df2 < 1:
        raise NotSupported(f"the model already has a coefficient for every {level_name(about.key)}")
    return part, table


def ratio(fits: Fits, key: str, given: frozenset[str] = frozenset()) -> tuple[Array, Array]:
    """Restricted likelihood ratio (B,) of one variance beside those given, and its share."""
    wide, narrow = fits[given | {key}], fits[given]
    statistic = np.maximum(2.0 * (wide.loglik - narrow.loglik), 0.0)
    return np.where(degenerate(fits.response), np.nan, statistic), np.asarray(wide.shares()[key])


def shared(reading: Reading, about: About) -> str:
    """What rows of one group share, with the restricted likelihood ratio that tests it."""
    return (
        f"{about.words[:1].upper()}{about.words[1:]} share {percent(column(reading.estimate))} of what "
        f"the model leaves over (restricted likelihood ratio {significant(column(reading.statistic))}, "
        f"{p_value(column(reading.p))})."
    )


def null_draws(design: Design, part: Partition, rank: int, run: Run, N: int = DRAWS) -> Array:
    """Draws of the restricted likelihood ratio of a level without an effect; kept with the design."""

    def make() -> Array:
        found = restricted.modes(design.sizes(part), design.sums(part), rank)
        return restricted.draws(found, design.m, run.child(f"restricted-lr:{part.key}"), N)

    return kept(design, ("restricted-lr", part.key, run.settings.seed, N), make)
