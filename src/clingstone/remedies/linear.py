"""What every remedy that keeps the ordinary estimate shares: rows, joint tests, reading B columns."""

from __future__ import annotations

from abc import ABC, abstractmethod
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np

from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.maths import reference
from clingstone.maths.once import Array
from clingstone.needs import NotSupported, Refusal
from clingstone.remedies.joint import Joint
from clingstone.remedies.remedy import Account, Estimates, Flags, multi, rows

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

    @property
    def gone(self) -> Flags:
        """(k,) rows that cannot be served."""
        return np.array([name in self.unusable for name in self.names], dtype=bool)

    @property
    def own(self) -> tuple[int, ...]:
        """Rows that are coefficients."""
        return tuple(range(self.design.p))

    def fit(self, fits: Fits) -> Estimates:
        response, gone = fits.response, self.gone
        estimate = self.W.T @ response.coef
        se = np.sqrt(self.variance(response))
        se[gone] = np.nan
        low, high, p = self.refer(estimate, se, fits.run.settings.confidence)
        one = response.B == 1
        covariance = blanked(self.block(response, self.own)[:, :, 0], gone[: len(self.own)]) if one else None
        df = np.where(np.isnan(se), np.nan, self.df) if self.unusable else self.df
        return Estimates(estimate, se, df, low, high, p, covariance, self.joints(response, estimate))

    def joints(self, response: Response, estimate: Array) -> dict[str, Joint]:
        """Terms of several coefficients, where all of them can be served."""
        found = {t.name: self.joint_of(t.columns, response, estimate) for t in multi(self.design)}
        return {name: made for name, made in found.items() if made is not None}

    def joint_of(self, columns: tuple[int, ...], response: Response, estimate: Array) -> Joint | None:
        if self.gone[list(columns)].any():
            return None
        wald = reference.wald(estimate[list(columns)], self.block(response, columns))
        return None if np.all(np.isnan(wald)) else self.joint(wald, columns)


def blanked(covariance: Array, gone: Flags) -> Array:
    """(k, k) without what is of rows that cannot be served."""
    covariance[gone, :] = covariance[:, gone] = np.nan
    return covariance


def reported(design: Design) -> tuple[tuple[str, ...], Array]:
    """Names (k,) of the reported rows and their weights W (p, k) in the basis."""
    names, weights = rows(design)
    return names, design.basis.contrast(weights)


def stop_if_none_left(names: tuple[str, ...], unusable: Mapping[str, Refusal]) -> None:
    """Raise the refusal of the first row, the constant last, when not one row can be served."""
    if names and all(name in unusable for name in names):
        first = min(names, key=lambda name: name == "constant")
        why = unusable[first]
        raise NotSupported(f"{first}: {why.reason}", why.hint)


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
