"""Ordinary least squares with a long-run variance, within series."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from functools import partial
from typing import TYPE_CHECKING, ClassVar, Literal, TypeGuard

import numpy as np

from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.maths import reference
from clingstone.maths.longrun import Grid, RatioLaw, joint_law
from clingstone.maths.once import Array, kept, once
from clingstone.needs import Family, Limits, Needs, NotSupported, memory
from clingstone.remedies.joint import Joint, hotelling_joint
from clingstone.remedies.kernel import Bandwidth, KernelReady, by_lags
from clingstone.remedies.linear import LinearReady, positive_m, reported
from clingstone.remedies.remedy import Account, Estimand, Plain
from clingstone.remedies.serial import under_noise
from clingstone.structure.serial import Series

if TYPE_CHECKING:
    from clingstone.covariance.fits import ErrorModel, Fits

EXACT_ROWS = 10_000  # above, t with ν df: the law of t needs a table of all cosines by all
RHO_LIMIT = 0.999  # a working ρ nearer to one has no stationary law to refer to


@dataclass(frozen=True, eq=False, kw_only=True)
class LongRunReady(LinearReady):
    """nu : df of the cosines, all series together.

    laws : per reported row, the exact law of t under AR(1) with ``rho``, a share ``noise`` of the variance
    being row noise; empty when t is used.
    """

    grid: Grid
    nu: float
    rho: float
    noise: float
    laws: tuple[RatioLaw, ...]

    def block(self, response: Response, columns: tuple[int, ...]) -> Array:
        a = self.design.Q @ self.W[:, list(columns)]
        scores = a[:, :, None] * response.residual[:, None, :]
        L = np.stack([self.grid.cosine_sums(scores[:, i]) for i in range(len(columns))], axis=1)
        return np.asarray(np.einsum("rsb,rtb->stb", L, L))

    def variance(self, response: Response) -> Array:
        return np.stack([self.block(response, (j,))[0, 0] for j in range(len(self.names))])

    def refer(self, estimate: Array, se: Array, confidence: float) -> tuple[Array, Array, Array]:
        if not self.laws:
            return reference.t_rows(estimate, se, self.df, confidence)
        se = np.where(se > 0, se, np.nan)
        c = np.array([law.quantile(1 - confidence) for law in self.laws])[:, None]
        p = np.stack([law.tail(t) for law, t in zip(self.laws, estimate / se, strict=True)])
        return estimate - c * se, estimate + c * se, p

    def joint(self, wald: Array, columns: tuple[int, ...]) -> Joint | None:
        q = len(columns)
        if not self.laws:
            return hotelling_joint(wald, q, self.nu)
        eta, scale = self._joint_law(columns)
        return hotelling_joint(scale * wald, q, eta)

    @once
    def _joint_law(self, columns: tuple[int, ...]) -> tuple[float, float]:
        """η and scale under the working AR(1); Lazarus et al. (2018) take η = ν and a scale of one."""
        a = self.design.Q @ self.W[:, list(columns)]
        q, r = len(columns), int(self.grid.counts.sum())
        memory(8.0 * (q * r) ** 2 * 4, f"the joint law of {q} coefficients with {r} cosines")
        held = partial(_correlate, self.grid, rho=self.rho, noise=self.noise)
        aa, _, FF = self.grid.law(self.design.Q, a, held)
        return joint_law(FF.transpose(0, 2, 1, 3), aa)

    def account(self, fits: Fits) -> Account:
        items: list[tuple[str, str]] = [("series", f"{len(self.grid.lengths)}"), ("steps", f"{self.grid.N}")]
        if missing := self.grid.N - self.design.n:
            items.append(("missing steps, entered as zero scores", f"{missing}"))
        items.append(("cosines ν = ⌊0.4 N^⅔⌋", f"{int(self.grid.counts.sum())}"))
        if self.laws:
            items.append(("ρ of the working AR(1) in the law of t", f"{self.rho:.3f}"))
            if self.noise > 0:
                items.append(("share of row noise over it", f"{self.noise:.3f}"))
        return Account(
            estimator="ordinary least squares",
            covariance="long-run variance of the scores, equal-weighted cosines",
            factor="none",
            df_rule=self.rule,
            reference="exact law of t under the working AR(1)" if self.laws else "t",
            items=tuple(items),
            source="lazarus-2018" + (", bakirov-szekely-2006" if self.laws else ""),
            bandwidths=by_lags(_kernel(self.design, self.grid, self.names, self.W), fits.response),
        )


@dataclass(frozen=True)
class Hac(Plain):
    """Ordinary estimates with a covariance that allows dependence along time.

    The mean of the first ν squared cosine sums of the scores (Lazarus, Lewis, Stock & Watson 2018). Up to
    10,000 rows the t statistic is referred to its own law under normal errors with the AR(1) correlation
    fitted to the data, a ratio of quadratic forms of rank ν + 1; above, to t with ν df.

    kernel : cosines, or Bartlett (Newey & West 1987) with lags by ``bandwidth``. law : "exact" and "t" go
    with cosines, "fixed-b" (Kiefer & Vogelsang 2005) and "normal" with Bartlett.
    """

    kernel: Literal["cosine", "bartlett"] = "cosine"
    law: Literal["exact", "t", "fixed-b", "normal"] = "exact"
    bandwidth: Bandwidth = "textbook"
    corrected: bool = True
    at: str = ""
    limits: Limits = field(default_factory=Limits)
    id: ClassVar[str] = "hac"
    name: ClassVar[str] = "robust to dependence along time"
    covers: ClassVar[frozenset[Family]] = frozenset({"serial"})
    estimand: ClassVar[Estimand] = "pooled"
    needs: ClassVar[Needs] = Needs(parts=frozenset({"serial"}), known_design=True, unweighted=True)
    source: ClassVar[str] = "lazarus-2018"

    def working(self, fits: Fits) -> ErrorModel | None:
        """The AR(1) of the residuals, under row noise where they ask for it; None where none can be had."""
        if "serial" not in fits.components or self.kernel == "bartlett":
            return None
        model = fits[{"serial"}]
        noisy = under_noise(fits) if self.law == "exact" and fits.design.n <= EXACT_ROWS else None
        if noisy is None:
            return model
        rho, noise = (np.array([noisy[name]]) for name in ("rho", "noise"))
        return replace(model, shape={**model.shape, "serial.rho": rho, "serial.noise": noise})

    def prepare(self, design: Design, working: ErrorModel | None) -> LongRunReady | KernelReady:
        positive_m(design)
        grid = self._grid(design.serial)
        names, W = reported(design)
        notes: tuple[str, ...] = ()
        if len(grid.lengths) > 1:
            notes = (
                f"The {len(grid.lengths)} series enter as blocks; "
                "what they differ in as a whole is not covered.",
            )
        if self.kernel == "bartlett":
            fixed = self.law == "fixed-b"
            return _kernel(design, grid, names, W, self.bandwidth, fixed, self.corrected, notes)
        rho, said = _working_rho(working)
        noise = float(working.shape["serial.noise"][0]) if _noisy(working) else 0.0
        laws: tuple[RatioLaw, ...] = ()
        if self.law == "exact" and design.n <= EXACT_ROWS:
            laws = _exact_laws(design, grid, W, rho, noise)
            df, rule = np.array([law.df for law in laws]), "exact cosine law"
        else:
            df, rule = np.full(len(names), _block_df(grid)), "ν cosines"
        return LongRunReady(
            design,
            names,
            W,
            df[:, None],
            rule,
            notes=said + notes,
            grid=grid,
            nu=_block_df(grid),
            rho=rho,
            noise=noise,
            laws=laws,
        )

    def _grid(self, serial: Series | None) -> Grid:
        if serial is None:
            raise NotSupported("no serial structure was declared", "Name the time column with time=.")
        if serial.tick is None:
            raise NotSupported(
                "the times are irregularly spaced, and cosines need whole steps",
                "Use ar1, which works by elapsed time, or cluster-robust by series.",
            )
        if serial.ties:
            raise NotSupported(
                f"{serial.ties} rows share their series and time with another row",
                "Name the column that tells the series apart with series=.",
            )
        least = self.limits.serial_estimate_rows
        short = int(np.sum(serial.part.sizes < least))
        if short:
            raise NotSupported(
                f"{short} of {serial.part.count} series have fewer than {least} rows "
                f"(the shortest has {serial.part.sizes.min()})",
                "With many short series use cluster-robust by series; with one, ar1.",
            )
        return Grid.of(serial.part.codes, serial.tick)

    def conventions(self) -> tuple[tuple[str, Hac], ...]:
        bartlett = replace(self, kernel="bartlett", law="normal")
        return (
            ("the same cosines with t and ν df", replace(self, law="t")),
            ("Bartlett kernel, ⌊4(n/100)^(2/9)⌋ lags, factor n/(n − p), normal quantile", bartlett),
            (
                "Bartlett kernel, lags by the rule of Newey and West, no factor, normal quantile",
                replace(bartlett, bandwidth="newey-west", corrected=False),
            ),
            (
                "Bartlett kernel, lags by the rule of Andrews, factor n/(n − p), normal quantile",
                replace(bartlett, bandwidth="andrews"),
            ),
            (
                "Bartlett kernel, 1.3√n lags, factor n/(n − p), fixed-b critical values",
                replace(bartlett, bandwidth="wide", law="fixed-b"),
            ),
        )


def _kernel(
    design: Design,
    grid: Grid,
    names: tuple[str, ...],
    W: Array,
    lags: Bandwidth = "textbook",
    fixed: bool = False,
    corrected: bool = True,
    notes: tuple[str, ...] = (),
) -> KernelReady:
    return KernelReady.made(
        design,
        names,
        W,
        grid,
        notes=notes,
        lags=lags,
        fixed=fixed,
        corrected=corrected,
        what="long-run variance of the scores, Bartlett kernel",
        source="newey-west-1987",
    )


def _block_df(grid: Grid) -> float:
    """ν for one series; for several, Satterthwaite's df of the blocks under equal spread, (ΣN)²/Σ N²/ν."""
    nu, N = grid.counts, grid.lengths
    return float(N.sum() ** 2 / np.sum(N**2 / nu))


def _working_rho(working: ErrorModel | None) -> tuple[float, tuple[str, ...]]:
    if working is None or "serial.rho" not in working.shape:
        return 0.0, ("The law of t takes independent errors, because no serial correlation could be fitted.",)
    rho = float(working.shape["serial.rho"][0])
    if abs(rho) <= RHO_LIMIT:
        return rho, ()
    held = float(np.copysign(RHO_LIMIT, rho))
    return held, (f"The fitted correlation of {rho:.4f} is held at {held} in the law of t.",)


def _noisy(working: ErrorModel | None) -> TypeGuard[ErrorModel]:
    return working is not None and "serial.noise" in working.shape


def _correlate(grid: Grid, block: Array, rho: float, noise: float) -> Array:
    """ΩH of a first-order process that holds 1 − noise of the variance, the rest row noise."""
    return (
        (1 - noise) * grid.correlate(block, rho) + noise * block if noise > 0 else grid.correlate(block, rho)
    )


def _exact_laws(design: Design, grid: Grid, W: Array, rho: float, noise: float = 0.0) -> tuple[RatioLaw, ...]:
    """Per reported row, the law of (a'ε)²/‖F'ε‖², a = Qw, F = MD_aC, under Ω = AR(1) with ρ and row noise."""
    r = int(grid.counts.sum())
    memory(8.0 * r**2 * 4, f"the exact law with {r} cosines")
    held = partial(_correlate, grid, rho=rho, noise=noise)

    def one(w: Array) -> RatioLaw:
        aa, aF, FF = grid.law(design.Q, (design.Q @ w)[:, None], held)
        return RatioLaw.of(np.block([[aa, aF[:, 0]], [aF[:, 0].T, FF[0, :, 0]]]))

    return kept(design, ("cosine laws", rho, noise), lambda: tuple(one(w) for w in W.T))
