"""A GLS remedy on many columns of y at once: the same numbers as column by column, without the loop."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Protocol

import numpy as np

from clingstone.covariance.information import ingredients_each
from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.maths import reference
from clingstone.maths.each import Grams, Minima, Places
from clingstone.maths.eachdf import KenwardEach, SlopesEach
from clingstone.maths.once import Array
from clingstone.remedies.columns import Column, Rule, plain_df
from clingstone.remedies.joint import Joint, f_joint
from clingstone.remedies.remedy import Estimates, Flags, multi

if TYPE_CHECKING:
    from clingstone.covariance.algebras import Chosen
    from clingstone.covariance.fits import Fits


class Reading(Protocol):
    """What is asked of the fit whose columns are read."""

    @property
    def design(self) -> Design: ...

    @property
    def names(self) -> tuple[str, ...]: ...

    @property
    def W(self) -> Array: ...

    @property
    def kenward(self) -> bool: ...

    def at_zero(self, found: Array, W: Array, bound: Flags) -> Array: ...

    def column_at(self, fits: Fits, algebra: Chosen, y: Response, theta: Array, bound: Flags) -> Column: ...


class Many(Protocol):
    """An algebra over the columns of one response: their estimates, and Grams each at its own θ."""

    @property
    def algebra(self) -> Chosen: ...

    def minima(self) -> Minima: ...

    def grams(self, theta: Array, columns: Places) -> Grams: ...

    def slopes(self, theta: Array, columns: Places, free: Sequence[int]) -> SlopesEach: ...


@dataclass(eq=False)
class _Columns:
    """What is read of every column: Φ (B, p, p), df (k, B), and per multi-df term scale and df2 (B,)."""

    phi: Array
    df: Array
    joint: dict[str, tuple[Array, Array]]

    @classmethod
    def empty(cls, ready: Reading, B: int) -> _Columns:
        p, k = ready.design.p, len(ready.names)
        terms = {t.name: (np.ones(B), np.full(B, np.nan)) for t in multi(ready.design)}
        return cls(np.empty((B, p, p)), np.empty((k, B)), terms)


def read_each(ready: Reading, rule: Rule, fits: Fits, many: Many) -> Estimates:
    """The fit of a GLS remedy by REML for B > 1."""
    found = many.minima()
    B, m = fits.response.B, ready.design.m
    every = np.arange(B)
    here = many.grams(found.theta, every)
    delta, c, _ = here.reduced()
    coef = fits.response.coef + delta.T
    s2 = c / m
    read = _Columns.empty(ready, B)
    if (df := plain_df(rule, m)) is not None:
        read.phi[:] = s2[:, None, None] * np.linalg.inv(here.QQ)
        read.df[:] = df
        for _, df2 in read.joint.values():
            df2[:] = df
    elif ready.kenward:
        _kenward(ready, many, found, s2, read)
    else:
        _satterthwaite(ready, fits, many, found, read)
    estimate = ready.W.T @ coef
    half = np.einsum("ik,bij->bkj", ready.W, read.phi, optimize=True)
    se = np.sqrt(np.einsum("bkj,jk->kb", half, ready.W))
    joint = {t.name: _joint(ready, t.name, t.columns, coef, read) for t in multi(ready.design)}
    boundary = np.any(found.at_bound, axis=0)
    made = Estimates.by_t(estimate, se, read.df, fits.run.settings.confidence)
    return replace(made, joint=joint, boundary=boundary, converged=found.converged)


def _kenward(ready: Reading, many: Many, found: Minima, s2: Array, read: _Columns) -> None:
    seen = ingredients_each(many.algebra, found.theta, s2)
    assert seen is not None
    kr = KenwardEach.of(seen)
    bound = np.logical_or.reduce(found.at_bound, axis=0)
    read.phi[:] = np.where(bound[:, None, None], kr.phi, kr.adjusted)
    df = kr.df(ready.W)
    read.df[:] = np.clip(df, 1.0, float(ready.design.m)).T
    for pattern in np.unique(found.at_bound[:, bound], axis=1).T:
        here = np.all(found.at_bound == pattern[:, None], axis=0)
        read.df[:, here] = ready.at_zero(df[here], ready.W, pattern).T
    for term in multi(ready.design):
        scale, df2 = kr.joint(ready.W[:, list(term.columns)])
        read.joint[term.name][0][:], read.joint[term.name][1][:] = scale, df2


def _satterthwaite(ready: Reading, fits: Fits, many: Many, found: Minima, read: _Columns) -> None:
    patterns, which = np.unique(found.at_bound, axis=1, return_inverse=True)
    for j in range(patterns.shape[1]):
        columns = np.flatnonzero(which.ravel() == j)
        free = [int(i) for i in np.flatnonzero(~patterns[:, j])]
        slopes = many.slopes(found.theta[:, columns], columns, free)
        read.phi[columns] = slopes.phi
        sound = slopes.sound
        good = columns[sound]
        kept = slopes.only(sound)
        read.df[:, good] = kept.df(ready.W).T
        for term in multi(ready.design):
            scale, df2 = kept.joint(ready.W[:, list(term.columns)])
            read.joint[term.name][0][good], read.joint[term.name][1][good] = scale, df2
        for b in columns[~sound].tolist():
            _alone(ready, fits, many, found, b, read)


def _alone(ready: Reading, fits: Fits, many: Many, found: Minima, b: int, read: _Columns) -> None:
    """A column whose observed information has no inverse takes the slow way of one column."""
    column = ready.column_at(
        fits, many.algebra, fits.response.column(b), found.theta[:, b], found.at_bound[:, b]
    )
    read.phi[b] = column.phi
    read.df[:, b] = [column.df(w) for w in ready.W.T]
    for term in multi(ready.design):
        scale, df2 = column.joint(ready.W[:, list(term.columns)])
        read.joint[term.name][0][b], read.joint[term.name][1][b] = scale, df2


def _joint(ready: Reading, name: str, columns: tuple[int, ...], coef: Array, read: _Columns) -> Joint:
    L = ready.W[:, list(columns)]
    q = L.shape[1]
    covariance = np.moveaxis(np.einsum("pa,bpq,qc->bac", L, read.phi, L, optimize=True), 0, -1)
    scale, df2 = read.joint[name]
    F = scale * reference.wald(L.T @ coef, covariance) / q
    return f_joint(F, q, df2)
