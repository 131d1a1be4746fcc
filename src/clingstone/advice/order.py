"""Does a first-order correlation along time fit? What is left of the errors once it is taken out."""

from __future__ import annotations

import numpy as np
from scipy import stats

from clingstone.advice.named import Fact, words, yes
from clingstone.covariance.fits import Fits
from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.display import number, p_value
from clingstone.evidence.autocorrelation import lag_products
from clingstone.evidence.lagged import lagged_response
from clingstone.evidence.portmanteau import LATER
from clingstone.evidence.whitened import whitened
from clingstone.maths.once import Array

LEVEL = 0.05
FEW = 5  # lags of the first look: a process under noise leaves a little at each of them
SEASON = 5  # the fewest steps at which a correlation is taken for one that returns
STRONG = 0.3  # a correlation that returns has to be larger


def order_facts(fits: Fits) -> list[Fact]:
    """Whether AR(1) leaves correlation behind, whether one returns after several steps, earlier responses."""
    design = fits.design
    if design.serial is None or not design.known:
        return []
    own = lagged_response(fits)
    out = [yes("earlier response in the model", bool(own), f"response of an earlier row: {own or 'none'}")]
    out.append(words("name of the earlier response", own))
    if frozenset({"serial"}) - fits.full_node or design.serial.tick is None or design.serial.ties:
        return out
    p = left_over(fits)
    out.append(yes("first order does not fit", p < LEVEL, f"whitened residuals: {p_value(p)}"))
    out.append(words("sign against the first order", p_value(p)))
    lag, r = returning(fits.response)
    out.append(yes("correlation that returns", lag > 0, f"largest correlation: {number(r, 2)} at lag {lag}"))
    out.append(words("steps of the return", f"{lag}"))
    return out


def left_over(fits: Fits) -> float:
    """p of Ljung and Box's statistic of the whitened residuals: few lags and many, the smaller times two.

    χ² with one df less than lags, for the correlation that was fitted (Box & Pierce 1970).
    """
    response = whitened(fits, frozenset({"serial"}))
    longest = int(_sizes(response.design).max())
    looks = sorted({k for k in (min(FEW, longest // 4), min(LATER, longest // 4)) if k > 1})
    if not looks:
        return 1.0
    found = [float(stats.chi2.sf(_statistic(response, k), k - 1)) for k in looks]
    return min(1.0, len(looks) * min(found))


def _statistic(response: Response, K: int) -> float:
    n, (products, pairs) = response.design.n, lag_products(response, K)
    r = products[:, 0] / response.ss[0]
    return float((1 + 2 / n) * n**2 * np.sum(r**2 / np.maximum(pairs, 1)))


def returning(response: Response) -> tuple[int, float]:
    """The lag at which a correlation comes back after it was gone, and its size; lag 0 where none does."""
    K = min(LATER, int(_sizes(response.design).max()) // 4)
    if K < SEASON:
        return 0, 0.0
    products, pairs = lag_products(response, K)
    n = response.design.n
    r: Array = products[:, 0] / response.ss[0] * n / np.maximum(pairs, 1)
    lag = int(np.argmax(r)) + 1
    bound = float(stats.norm.isf(LEVEL / (2 * K))) / np.sqrt(max(int(pairs[lag - 1]), 1))
    gone = lag >= SEASON and float(np.min(r[1 : lag - 1])) < r[lag - 1] / 3
    found = gone and r[lag - 1] > max(STRONG, bound)
    return (lag if found else 0), float(r[lag - 1])


def _sizes(design: Design) -> Array:
    assert design.serial is not None
    return np.asarray(design.serial.part.sizes, dtype=float)
