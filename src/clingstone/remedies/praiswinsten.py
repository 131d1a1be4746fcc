"""The two-step estimate of Prais and Winsten, for comparison with AR(1) by restricted likelihood."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING, ClassVar

import numpy as np

from clingstone.covariance.layered import Layered
from clingstone.covariance.pieces import SerialPiece
from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.maths import reml
from clingstone.needs import Family, Limits, Needs, NotSupported
from clingstone.remedies.columns import Column, FittedReady, apart
from clingstone.remedies.linear import reported
from clingstone.remedies.remedy import DATED, Account, Estimand, Estimates, Plain
from clingstone.remedies.serial import enough_times

if TYPE_CHECKING:
    from clingstone.covariance.fits import ErrorModel, Fits

STEPS, SETTLED = 100, 1e-10
RHO_MOST = 0.9999  # beyond, the transformed first row would carry no weight that rounding leaves


@dataclass(frozen=True, eq=False, kw_only=True)
class TwoStepReady(FittedReady):
    algebra: Layered

    def rho(self, response: Response) -> tuple[float, bool]:
        """ρ = Σe_t e_{t−1}/Σe²_{t−1} of the current residuals, repeated until it settles."""
        series = self.design.serial
        assert series is not None
        earlier, later = series.pairs(1)
        e, rho = response.residual[:, 0], 0.0
        for _ in range(STEPS):
            before = rho
            rho = float(np.clip(e[earlier] @ e[later] / (e[earlier] @ e[earlier]), -RHO_MOST, RHO_MOST))
            delta, _, _ = reml.reduced(self.algebra.gram(np.array([np.arctanh(rho)]), response))
            e = response.residual[:, 0] - self.design.Q @ delta[:, 0]
            if abs(rho - before) < SETTLED:
                return rho, True
        return rho, False

    def solved(self, response: Response) -> tuple[Column, bool]:
        """One column of y, and whether ρ settled."""
        rho, settled = self.rho(response)
        gram = self.algebra.gram(np.array([np.arctanh(rho)]), response)
        delta, _, _ = reml.reduced(gram)
        m = self.design.m
        phi = np.asarray(float(reml.scale(gram, m)[0]) * np.linalg.inv(gram.QQ))
        return Column.even(response.coef[:, 0] + delta[:, 0], phi, float(m)), settled

    def fit(self, fits: Fits) -> Estimates:
        found = [self.solved(one) for one in apart(fits.response)]
        return self.estimates(
            [column for column, _ in found],
            fits.run.settings.confidence,
            None,
            np.array([settled for _, settled in found]),
        )

    def account(self, fits: Fits) -> Account:
        rho, _ = self.rho(fits.response.column(0))
        return Account(
            estimator="generalised least squares, ρ from the residuals, first rows kept (Prais–Winsten)",
            covariance="σ²(X′V⁻¹X)⁻¹",
            factor="σ² = e′V⁻¹e/(n − p)",
            df_rule=self.rule,
            reference="t",
            items=(("ρ per step", f"{rho:.6g}"),),
            source="prais-winsten-1954",
        )


@dataclass(frozen=True)
class PraisWinsten(Plain):
    """AR(1) with ρ from the residuals, iterated; t with n − p df. A convention of ``ar1``."""

    at: str = ""
    limits: Limits = field(default_factory=Limits)
    id: ClassVar[str] = "ar1"
    name: ClassVar[str] = "autoregressive errors along time, in two steps"
    covers: ClassVar[frozenset[Family]] = frozenset({"serial"})
    estimand: ClassVar[Estimand] = "pooled"
    needs: ClassVar[Needs] = DATED
    source: ClassVar[str] = "prais-winsten-1954"

    def prepare(self, design: Design, working: ErrorModel | None) -> TwoStepReady:
        series = enough_times(design, self.limits)
        piece = SerialPiece("serial", design, series)
        if series.ties or not piece.whole or len(series.pairs(1)[0]) < 3:
            raise NotSupported("the two steps need rows one step apart, one at a time", "Use car1.")
        names, W = reported(design)
        return TwoStepReady(design, names, W, "n − p", algebra=Layered(design, (piece,), piece))

    def conventions(self) -> tuple[tuple[str, PraisWinsten], ...]:
        return ()
