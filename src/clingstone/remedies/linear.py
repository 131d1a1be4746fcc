"""What every remedy that keeps the ordinary estimate shares: rows, joint tests, reading B columns."""

from __future__ import annotations

from abc import ABC, abstractmethod
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np

from clingstone.design.design import Design, Term
from clingstone.design.response import Response
from clingstone.maths import reference
from clingstone.maths.once import Array
from clingstone.needs import NotSupported, Refusal
from clingstone.remedies.joint import Joint
from clingstone.remedies.remedy import Account, Estimates, multi, rows

if TYPE_CHECKING:
    from clingstone.covariance.fits import Fits


@dataclass(frozen=True, eq=False)
class LinearReady(ABC):
    """Ordinary least squares with a covariance of its own; subclasses give the covariance.

    names (k,), W (p, k) : reported rows as contrasts in the basis. df : (k, 1).
    """

    design: Design
    names: tuple[str, ...]
    W: Array
    df: Array
    rule: str
    unusable: Mapping[str, Refusal] = field(default_factory=dict)
    notes: tuple[str, ...] = ()

    # ---- given by subclasses -----------------------------------------------------------

    @abstractmethod
    def variance(self, response: Response) -> Array:
        """(k, B) variance of every reported row."""

    @abstractmethod
    def block(self, response: Response, columns: tuple[int, ...]) -> Array:
        """(q, q, B) covariance of some reported rows."""

    @abstractmethod
    def joint(self, wald: Array, columns: tuple[int, ...]) -> Joint | None:
        """F, df1, df2, p from the Wald statistic of some coefficients, or None where there is no df."""

    @abstractmethod
    def account(self, fits: Fits) -> Account: ...

    # ---- shared ------------------------------------------------------------------------

    def refer(self, estimate: Array, se: Array, confidence: float) -> tuple[Array, Array, Array]:
        """low, high, p: Student's t unless a subclass knows better."""
        return reference.t_rows(estimate, se, self.df, confidence)

    def fit(self, fits: Fits) -> Estimates:
        response = fits.response
        estimate = self.W.T @ response.coef
        se = np.sqrt(self.variance(response))
        se[[name in self.unusable for name in self.names]] = np.nan
        low, high, p = self.refer(estimate, se, fits.run.settings.confidence)
        covariance = None
        if response.B == 1:
            covariance = self.block(response, tuple(range(self.design.p)))[:, :, 0]
            gone = [name in self.unusable for name in self.design.names]
            covariance[gone, :] = covariance[:, gone] = np.nan
        found = ((t, self._joint_of(t, response, estimate)) for t in multi(self.design))
        joint = {t.name: j for t, j in found if j is not None}
        df = np.where(np.isnan(se), np.nan, self.df) if self.unusable else self.df
        return Estimates(estimate, se, df, low, high, p, covariance, joint)

    def _joint_of(self, term: Term, response: Response, estimate: Array) -> Joint | None:
        if any(self.design.names[j] in self.unusable for j in term.columns):
            return None
        columns = list(term.columns)
        statistic = reference.wald(estimate[columns], self.block(response, term.columns))
        if np.all(np.isnan(statistic)):
            return None
        return self.joint(statistic, term.columns)


def reported(design: Design) -> tuple[tuple[str, ...], Array]:
    """Names (k,) of the reported rows and their weights W (p, k) in the basis."""
    names, weights = rows(design)
    return names, design.basis.contrast(weights)


def stop_if_none_left(names: tuple[str, ...], unusable: Mapping[str, Refusal]) -> None:
    """Raise the first refusal when not one row can be served."""
    if names and all(name in unusable for name in names):
        raise next(iter(unusable.values())).error()


def few_df(names: tuple[str, ...], df: Array) -> dict[str, Refusal]:
    """Rows whose df is below one, or not defined."""
    out = {}
    for name, value in zip(names, df.ravel(), strict=True):
        if not value >= 1.0 - 1e-9:
            found = "not defined" if np.isnan(value) else f"{value:.2f}"
            out[name] = Refusal(
                f"its degrees of freedom are {found}, and an interval needs at least one",
                "More clusters in which it varies would be needed.",
            )
    return out


def positive_m(design: Design) -> None:
    if design.m < 1:
        raise NotSupported(
            f"{design.n} rows and {design.p} coefficients leave no residual degrees of freedom",
            "Use fewer terms or more rows.",
        )
