"""The two-step estimate of Prais and Winsten, for comparison with AR(1) by restricted likelihood."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING, ClassVar

import numpy as np

from clingstone.covariance.algebras import Layered
from clingstone.covariance.pieces import SerialPiece
from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.maths import reference, reml
from clingstone.maths.once import Array
from clingstone.needs import Family, Limits, Needs, NotSupported
from clingstone.remedies.joint import Joint, wald_joint
from clingstone.remedies.linear import LinearReady, reported
from clingstone.remedies.remedy import Account, Estimand, Estimates, Plain, multi
from clingstone.remedies.serial import enough_times

if TYPE_CHECKING:
    from clingstone.covariance.fits import ErrorModel, Fits

STEPS, SETTLED = 100, 1e-10
RHO_MOST = 0.9999  # beyond, the transformed first row would carry no weight that rounding leaves


@dataclass(frozen=True, eq=False, kw_only=True)
class TwoStepReady(LinearReady):
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

    def solved(self, response: Response) -> tuple[Array, Array, bool]:
        """β̂ in the basis (p,), its covariance (p, p), and whether ρ settled; one column of y."""
        rho, settled = self.rho(response)
        gram = self.algebra.gram(np.array([np.arctanh(rho)]), response)
        delta, _, _ = reml.reduced(gram)
        s2 = float(reml.scale(gram, self.design.m)[0])
        return response.coef[:, 0] + delta[:, 0], np.asarray(s2 * np.linalg.inv(gram.QQ)), settled

    def fit(self, fits: Fits) -> Estimates:
        response = fits.response
        found = [self.solved(response.column(b)) for b in range(response.B)]
        estimate = np.stack([self.W.T @ coef for coef, *_ in found], axis=1)
        se = np.stack([np.sqrt(np.einsum("ik,ij,jk->k", self.W, phi, self.W)) for _, phi, _ in found], axis=1)
        low, high, p = reference.t_rows(estimate, se, self.df, fits.run.settings.confidence)
        joint = {}
        for term in multi(self.design):
            L = self.W[:, list(term.columns)]
            wald = [
                reference.wald((L.T @ coef)[:, None], (L.T @ phi @ L)[:, :, None])[0]
                for coef, phi, _ in found
            ]
            joint[term.name] = self.joint(np.array(wald), term.columns)
        W = self.W[:, : self.design.p]
        covariance = W.T @ found[0][1] @ W if response.B == 1 else None
        settled = np.array([ok for *_, ok in found])
        return Estimates(estimate, se, self.df, low, high, p, covariance, joint, converged=settled)

    def variance(self, response: Response) -> Array:
        return np.stack([self.block(response, (j,))[0, 0] for j in range(len(self.names))])

    def block(self, response: Response, columns: tuple[int, ...]) -> Array:
        L = self.W[:, list(columns)]
        each = [self.solved(response.column(b))[1] for b in range(response.B)]
        return np.stack([L.T @ phi @ L for phi in each], axis=2)

    def joint(self, wald: Array, columns: tuple[int, ...]) -> Joint:
        return wald_joint(wald, len(columns), float(self.design.m))

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
    needs: ClassVar[Needs] = Needs(parts=frozenset({"serial"}), known_design=True)
    source: ClassVar[str] = "prais-winsten-1954"

    def prepare(self, design: Design, working: ErrorModel | None) -> TwoStepReady:
        series = enough_times(design, self.limits)
        piece = SerialPiece("serial", design, series)
        if series.ties or not piece.whole or len(series.pairs(1)[0]) < 3:
            raise NotSupported("the two steps need rows one step apart, one at a time", "Use car1.")
        names, W = reported(design)
        df = np.full((len(names), 1), float(design.m))
        return TwoStepReady(design, names, W, df, "n − p", algebra=Layered(design, (piece,), piece))

    def conventions(self) -> tuple[tuple[str, PraisWinsten], ...]:
        return ()
