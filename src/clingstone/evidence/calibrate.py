"""From a residual autocorrelation to the correlation of the errors, with an interval by inversion.

The lag-one ratio T = e'Se/e'e of residuals falls short of the correlation ρ of the errors: regressors
and swept group means take part of it. Under a first-order process V(ρ) its mean is close to
E(ρ) = tr(MSMV)/tr(MV) − 2ρ/m, exact at ρ = 0; the last term is the bias of a ratio (Marriott & Pope
1954). Its standard deviation is the exact one at ρ = 0 times a factor, √(1 − ρ²) for long series and
from draws of the process where those are cheap. Both are inverted.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.interpolate import PchipInterpolator
from scipy.signal import lfilter

from clingstone.design.design import Design
from clingstone.maths.forms import Form
from clingstone.maths.markov import Links, at_rho
from clingstone.maths.once import Array
from clingstone.maths.partition import Partition
from clingstone.maths.ratio import Law

GRID = np.array([-0.95, -0.8, -0.6, -0.4, -0.2, 0.0, 0.2, 0.4, 0.6, 0.75, 0.85, 0.92, 0.97])
FINE = np.linspace(-0.95, 0.97, 769)
SPREAD = 4  # times n: the largest grid of series × steps that is laid out
DRAWN, MOST_DRAWS, FEWEST_DRAWS = 2_000_000, 400, 50  # numbers drawn per ρ; draws of a whole table


@dataclass(frozen=True, eq=False)
class Curve:
    """E(ρ) and the standard deviation of T on FINE."""

    mean: Array
    sd: Array

    def invert(self, T: Array, quantile: float) -> tuple[Array, Array, Array]:
        """ρ̂ and both ends of its interval, each (B,); an end beyond FINE becomes −1 or 1."""
        ends = [np.maximum.accumulate(self.mean + k * quantile * self.sd) for k in (0.0, 1.0, -1.0)]
        estimate, low, high = (np.interp(T, end, FINE) for end in ends)
        low = np.where(low > FINE[0], low, -1.0)
        high = np.where(high < FINE[-1], high, 1.0)
        lost = np.isnan(T)
        return (
            np.where(lost, np.nan, estimate),
            np.where(lost, np.nan, low),
            np.where(lost, np.nan, high),
        )


def curve(design: Design, law: Law, rng: np.random.Generator) -> Curve | None:
    """The curve of one design, or None where series cross the swept cells or steps are too spread out.

    design : its basis free of the cells that ``law`` sweeps. law : of S with e'Se = Σ e_t e_{t−1}
    within series.
    """
    series, swept, form = design.serial, law.swept, law.form
    assert series is not None
    if swept is not None and swept.relation(series.part) not in ("same", "nests"):
        return None
    lay = _Layout.of(design)
    if lay is None:
        return None
    u = None if swept is None else 1.0 / np.sqrt(swept.sizes.astype(float))[swept.codes]
    means = _means(design, form, swept, u, lay)
    size = lay.shape[0] * lay.shape[1]
    if size * FEWEST_DRAWS <= DRAWN:
        z = rng.standard_normal((*lay.shape, int(np.clip(DRAWN // size, FEWEST_DRAWS, MOST_DRAWS))))
        drawn = np.array([np.std(_drawn(design, form, swept, lay, z, float(rho))) for rho in GRID])
        factor = drawn / drawn[GRID == 0.0]  # the same z for every ρ, so much of the noise divides out
    else:
        factor = np.sqrt(1 - GRID**2)
    sd = np.sqrt(law.variance) * factor
    return Curve(*(np.asarray(PchipInterpolator(GRID, values)(FINE)) for values in (means, sd)))


def _drawn(design: Design, form: Form, swept: Partition | None, lay: _Layout, z: Array, rho: float) -> Array:
    """(draws,) T of errors drawn from a stationary process with correlation ρ per step."""
    noise = np.sqrt(1 - rho**2)
    start = z.copy()
    start[:, 0] /= noise
    path = lfilter([noise], [1.0, -rho], start, axis=1)[lay.series, lay.step]
    e = design.basis.project(path)
    if swept is not None:
        e = e - swept.means(e)[swept.codes]
    return np.asarray(np.einsum("ij,ij->j", e, form.apply(e)) / np.einsum("ij,ij->j", e, e))


def _means(design: Design, form: Form, swept: Partition | None, u: Array | None, lay: _Layout) -> Array:
    """E(ρ) on GRID, from traces: M = I − QQ' − UU', U the unit vectors of the swept cells, u their sum.

    S and V link rows of one series only, and series lie within cells, so U'SU and U'VU are diagonal
    and one vector u stands for all of U.
    """
    Q = design.Q
    SQ = form.apply(Q)
    QSQ, pairs = Q.T @ SQ, float(form.S.sum())
    inside = _products(design, lay, np.hstack([Q, SQ]), Q)
    if u is not None:
        assert swept is not None
        Su = form.apply(u)
        s, QSu = swept.sums(u * Su), swept.sums(Q * Su[:, None])
        # Every sum over cells of what V(ρ)u is multiplied by is a product with a vector that knows no ρ.
        by = np.column_stack([u, Su, u * s[swept.codes], np.einsum("ij,ij->i", Q, QSu[swept.codes])])
        along = _products(design, lay, by, u[:, None])
    out = np.empty(len(GRID))
    for i in range(len(GRID)):
        QVQ, SQVQ = inside[i, : design.p], inside[i, design.p :]
        whole = float(design.n) - float(np.trace(QVQ))
        # tr SV: every linked pair is one step apart.
        cross = GRID[i] * pairs - 2 * float(np.trace(SQVQ)) + float(np.sum(QSQ * QVQ))
        if u is not None:
            uVu, SuVu, suVu, QSuQVu = along[i, :, 0]
            whole -= uVu
            cross += suVu - 2 * SuVu + 2 * QSuQVu
        out[i] = cross / whole - 2 * GRID[i] / design.m
    return out


def _products(design: Design, lay: _Layout, left: Array, right: Array) -> Array:
    """(len(GRID), l, r) left'V(ρ)right."""
    assert design.serial is not None
    sums = Links(design.serial.steps).lag_sums(left, right)
    if sums is not None:
        return at_rho(sums, GRID)
    flat, wide = lay.spread(left).reshape(left.shape[1], -1), lay.spread(right)
    return np.stack([flat @ lay.apply(wide, float(rho)).reshape(len(wide), -1).T for rho in GRID])


@dataclass(frozen=True, eq=False)
class _Layout:
    """Rows laid out on series × steps, so that V(ρ) is two recursive filters along the steps."""

    series: npt.NDArray[np.int32]
    step: npt.NDArray[np.int64]
    shape: tuple[int, int]

    @classmethod
    def of(cls, design: Design) -> _Layout | None:
        serial = design.serial
        assert serial is not None
        if serial.tick is None or serial.ties:
            return None
        part = serial.part
        start = serial.tick[part.first][part.codes]
        step = serial.tick - start
        shape = (part.count, int(step.max()) + 1)
        if shape[0] * shape[1] > SPREAD * design.n + 1000:
            return None
        return cls(part.codes, step, shape)

    def spread(self, block: Array) -> Array:
        """Rows (n, k) → (k, series, steps), zeros where a step has no row."""
        grid = np.zeros((block.shape[1], *self.shape))
        grid[:, self.series, self.step] = block.T
        return grid

    def apply(self, grid: Array, rho: float) -> Array:
        """V(ρ) of what is laid out, V_ij = ρ^|t_i − t_j| within series."""
        ahead = lfilter([1.0], [1.0, -rho], grid, axis=2)
        back = lfilter([1.0], [1.0, -rho], grid[:, :, ::-1], axis=2)[:, :, ::-1]
        return np.asarray(ahead + back - grid)
