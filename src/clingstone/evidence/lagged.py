"""Earlier residuals as explanations of later ones, and models that hold the response of an earlier row."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from clingstone.design.derived import whole
from clingstone.design.design import Design, rows_of
from clingstone.design.response import Response
from clingstone.evidence.read import degenerate
from clingstone.maths.once import Array, kept
from clingstone.structure.serial import Series

if TYPE_CHECKING:
    from clingstone.covariance.fits import Fits

LAGS = (1, 2)  # steps back at which a predictor is compared with the response
AGREE = 0.95  # share of pairs that must agree: first rows are often filled with something else


def earlier_residuals(response: Response, k: int) -> list[Array]:
    """k arrays (n, B): the residual 1, …, k steps earlier in the same series, 0 where there is none."""
    series, out = _series(response.design), []
    for lag in range(1, k + 1):
        earlier, later = series.pairs(lag)
        block = np.zeros_like(response.residual)
        block[later] = response.residual[earlier]
        out.append(block)
    return out


def partial_r2(response: Response, k: int) -> tuple[Array, int]:
    """R² (B,) of residuals on earlier residuals and the model, and the number of lags used."""
    E, Q, e = earlier_residuals(response, k), response.design.Q, response.residual
    v = np.stack([np.einsum("ij,ij->j", block, e) for block in E], axis=1)  # (B, k)
    QE = [Q.T @ block for block in E]
    S = np.empty((response.B, k, k))
    for i in range(k):
        for j in range(i + 1):
            cross = np.einsum("ij,ij->j", E[i], E[j]) - np.einsum("ij,ij->j", QE[i], QE[j])
            S[:, i, j] = S[:, j, i] = cross
    lost = degenerate(response)
    S[lost] = np.eye(k)
    scale = np.sqrt(np.einsum("bii->bi", S))
    scale = np.where(scale > 0, scale, 1.0)
    # The pseudo-inverse drops lags that the model already spans; its rank is the same in every column.
    unit = S / (scale[:, :, None] * scale[:, None, :])
    rank = int(np.linalg.matrix_rank(unit[0], tol=1e-10, hermitian=True))
    inverse = np.linalg.pinv(unit, rcond=1e-10, hermitian=True)
    u = v / scale
    r2 = np.einsum("bi,bij,bj->b", u, inverse, u) / np.where(lost, np.nan, response.ss)
    return np.asarray(np.clip(r2, 0.0, 1.0)), max(rank, 1)


def one_lag(response: Response) -> tuple[Array, Array, float]:
    """Coefficient (B,) of the residual one step earlier beside the model, its standard error, its df."""
    (E,), e = earlier_residuals(response, 1), response.residual
    rest = response.design.basis.project(E)
    size = np.einsum("ij,ij->j", rest, rest)
    df = float(response.design.m - 1)
    with np.errstate(divide="ignore", invalid="ignore"):
        b = np.einsum("ij,ij->j", rest, e) / np.where(degenerate(response), np.nan, size)
        se = np.sqrt((response.ss - b**2 * size) / df / size)
    return b, se, df


def lagged_response(fits: Fits) -> str:
    """The column of the model that is the response of an earlier row of the series, or "".

    Only for a single column of y: drawn ones do not stand in the model.
    """
    response = fits.response
    if response.B != 1 or not fits.design.known or fits.design.serial is None:
        return ""
    return kept(response, ("lagged response",), lambda: _find(response))


def _find(response: Response) -> str:
    design = response.design
    series = _series(design)
    if series.tick is None or series.ties:
        return ""
    y = rows_of(design, whole(response))[:, 0]
    X = rows_of(design, design.Q @ design.basis.R)
    columns = dict(zip(design.names, X.T, strict=True)) | dict(design.covariates)
    scale = float(np.abs(y).max())
    for lag in LAGS:
        earlier, later = series.pairs(lag)
        if len(earlier) < 3 or np.ptp(y[earlier]) == 0:
            continue
        for name, x in columns.items():
            same = np.abs(np.asarray(x)[later] - y[earlier]) <= 1e-9 * scale
            if same.mean() >= AGREE:
                return name
    return ""


def _series(design: Design) -> Series:
    assert design.serial is not None
    return design.serial
