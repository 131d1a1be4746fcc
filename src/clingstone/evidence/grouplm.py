"""Groups: the Lagrange multiplier test of a variance between groups, with its exact tail."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np

from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.display import p_value, significant
from clingstone.evidence.anova import anova
from clingstone.evidence.finding import About, Reading, column
from clingstone.evidence.groups import AtLevels, caveats, level_name, repeats
from clingstone.evidence.read import ratio
from clingstone.maths.forms import Form, cells
from clingstone.maths.once import Array, kept
from clingstone.maths.partition import Partition
from clingstone.maths.ratio import Law
from clingstone.needs import Family, Needs, NotSupported

if TYPE_CHECKING:
    from clingstone.covariance.fits import Fits


@dataclass(frozen=True)
class GroupLM(AtLevels):
    """Score of the variance between groups, T = Σ_g (sum of e)²/e'e: locally best invariant.

    The p is exact for any unbalance and any covariates. The statistic is shown in its standardised form
    (Moulton & Randolph 1989), which subtracts the exact mean and divides by the exact standard deviation;
    :func:`scores` gives Breusch & Pagan's (1980) and Honda's (1985) beside it. Their normal limits are
    poor with unequal groups: with 12 groups and a group-level predictor the standardised one rejected
    6.9 % at 5 %, Honda's 1.9 %.
    """

    id: str = "group-lm"
    family: Family = "group"
    null: str = "The variance between groups is zero."
    alternative: str = "The variance between groups is greater than zero."
    needs: Needs = field(default=Needs(frozenset({"group"}), {"groups": 2}))
    source: str = "breusch-pagan-1980"
    primary: bool = False

    def read(self, fits: Fits, about: About, given: frozenset[str] = frozenset()) -> Reading:
        design, response = fits.design, fits.response
        part = repeats(design, about)
        law = _law(design, part)
        if law.constant:
            raise NotSupported(f"the model already has a coefficient for every {level_name(about.key)}")
        T = ratio(response, law.form)
        tails = law.tails(T, fits.tails)
        found = scores(response, part)
        table = anova(response, part)
        warn = list(caveats(design, part))
        if design.root is None and response.B == 1:
            warn.append(
                f"By other conventions: Breusch and Pagan's χ² is {significant(float(found.pagan[0]), 4)}, "
                f"Honda's normal score {significant(float(found.honda[0]), 3)}; their limits are rough with "
                "unequal groups."
            )
        return Reading(
            statistic=found.standardised,
            statistic_name="standardised score",
            p=np.asarray(tails.upper),
            log_p=np.asarray(tails.log_upper),
            p_method=f"{tails.method}, one-sided",
            estimate=table.icc if table.df1 and table.df2 > 0 else None,
            estimate_name="intraclass correlation",
            n_used=design.n,
            caveats=tuple(warn),
        )

    def sentence(self, reading: Reading, about: About) -> str:
        z = column(reading.statistic)
        way = "more" if z > 0 else "less"
        return (
            f"Residuals of {about.words} add up to {way} than independent ones would: the score of a "
            f"variance between groups lies {significant(abs(z))} standard deviations "
            f"{'above' if z > 0 else 'below'} its mean, {p_value(column(reading.p))}."
        )


@dataclass(frozen=True, eq=False)
class Scores:
    """The same score under three names, (B,) each.

    standardised : (T − E T)/√Var T. honda : √(n²/(2(Σn_g² − n)))·(T − 1). pagan : honda², two-sided χ²₁.
    """

    standardised: Array
    honda: Array
    pagan: Array


def scores(response: Response, part: Partition) -> Scores:
    """T with the moments under independence, exact and by the counts alone (rows of equal weight)."""
    law = _law(response.design, part)
    T = ratio(response, law.form)
    n = float(response.design.n)
    size = np.sqrt(n**2 / (2 * (float(np.sum(part.sizes.astype(float) ** 2)) - n)))
    honda = size * (T - 1)
    return Scores((T - law.mean) / np.sqrt(law.variance), honda, honda**2)


def _law(design: Design, part: Partition) -> Law:
    form: Form = kept(design, ("cells", part.key), lambda: cells(part, design.root))
    return Law(form, design.basis)
