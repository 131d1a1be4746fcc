"""Ends of a spectrum: dense eigenvalues as the twin, and spectra on which Lanczos converges slowly."""

from __future__ import annotations

import numpy as np
import pytest

from clingstone.maths.lanczos import spectrum_ends


@pytest.mark.parametrize("n", [1, 2, 30, 400])
def test_ends_of_a_dense_matrix(n):
    A = np.random.default_rng(n).standard_normal((n, n))
    S = A + A.T
    value = np.linalg.eigvalsh(S)
    low, high = spectrum_ends(lambda v: S @ v, n, 400)
    assert low == pytest.approx(value[0], rel=1e-8)
    assert high == pytest.approx(value[-1], rel=1e-8)


def test_ends_that_converge_slowly_are_bounded_from_outside():
    """A path of 5000 rows: eigenvalues crowd at both ends, the gap there is 1e-6 of the length."""
    n = 5000

    def apply(v):
        out = np.zeros(n)
        out[1:] += 0.5 * v[:-1]
        out[:-1] += 0.5 * v[1:]
        return out

    edge = np.cos(np.pi / (n + 1))
    low, high = spectrum_ends(apply, n, 100)
    assert edge <= high < 1.01
    assert -1.01 < low <= -edge


def test_a_multiple_of_the_identity():
    low, high = spectrum_ends(lambda v: 3.0 * v, 50, 100)
    assert low == pytest.approx(3.0, abs=1e-12)
    assert high == pytest.approx(3.0, abs=1e-12)


def test_a_spectrum_of_zero():
    assert spectrum_ends(lambda v: 0.0 * v, 5, 10) == (0.0, 0.0)
