"""Kernels, and sites at the top of a model."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import special
from scipy.spatial.distance import cdist

from clingstone.maths import matern, reml
from clingstone.maths.groups import Load


@pytest.mark.parametrize("smoothness", [0.5, 1.5, 2.5])
def test_kernels_are_the_bessel_form(smoothness: float) -> None:
    # Matérn: 2^{1−κ}/Γ(κ) x^κ K_κ(x), x = √(2κ) d/φ (Stein 1999); for κ = ½ x = d/φ.
    d = np.array([0.01, 0.3, 1.0, 4.0])
    x = np.sqrt(2 * smoothness) * d / 0.7
    bessel = 2 ** (1 - smoothness) / special.gamma(smoothness) * x**smoothness * special.kv(smoothness, x)
    assert matern.kernel(d, 0.7, smoothness) == pytest.approx(bessel, rel=1e-12)
    assert matern.kernel(np.zeros(1), 0.7, smoothness)[0] == 1.0


@pytest.mark.parametrize("smoothness", [0.5, 1.5, 2.5])
def test_practical_range_is_where_a_twentieth_is_left(smoothness: float) -> None:
    at = np.array([matern.PRACTICAL[smoothness] * 2.2])
    assert matern.kernel(at, 2.2, smoothness)[0] == pytest.approx(0.05, abs=1e-6)


def test_other_smoothness_is_refused() -> None:
    with pytest.raises(ValueError, match=r"0\.5, 1\.5, 2\.5"):
        matern.kernel(np.ones(1), 1.0, 1.0)


def test_one_eigendecomposition_serves_every_ratio() -> None:
    rng = np.random.default_rng(0)
    xy = rng.uniform(size=(12, 2))
    R = matern.kernel(cdist(xy, xy), 0.3)
    load = Load(
        rng.integers(1, 5, 12).astype(float), rng.standard_normal((12, 2)), rng.standard_normal((12, 3))
    )
    base = reml.independent(2, np.array([90.0, 90.0, 90.0]))
    spectrum = matern.Spectrum.of(load, R)
    for ratio in (0.0, 0.2, 30.0):
        one, other = matern.top(base, load, ratio * R), spectrum.top(base, ratio)
        assert np.allclose(one.QQ, other.QQ, atol=1e-11)
        assert np.allclose(one.QE, other.QE, atol=1e-11)
        assert np.allclose(one.EE, other.EE, atol=1e-11)
        assert one.logdet == pytest.approx(other.logdet, abs=1e-11)
