"""Minima of functions whose answer is known."""

from __future__ import annotations

import numpy as np
import pytest

from clingstone.maths import newton


def test_a_quadratic_is_found_with_its_curvature():
    A = np.array([[3.0, 1.0, 0.0], [1.0, 2.0, 0.5], [0.0, 0.5, 1.0]])
    b = np.array([1.0, -2.0, 0.3])
    found = newton.descend(lambda x: (float(x @ A @ x / 2 - b @ x), A @ x - b), np.zeros(3))
    np.testing.assert_allclose(found.x, np.linalg.solve(A, b), atol=5e-5)  # a decrement of 1e-8
    np.testing.assert_allclose(found.curvature, A, atol=1e-6)
    assert found.converged


def test_rosenbrock_in_awkward_units():
    def f(x):
        u, v = x[0], x[1] / 1e4
        value = (1 - u) ** 2 + 100 * (v - u**2) ** 2
        return value, np.array([-2 * (1 - u) - 400 * u * (v - u**2), 200 * (v - u**2) / 1e4])

    found = newton.descend(f, np.array([-1.2, 1e4]), scale=np.array([1.0, 1e4]))
    assert found.converged
    np.testing.assert_allclose(found.x, [1.0, 1e4], rtol=1e-4)


def test_a_bound_holds_a_coordinate_back():
    def f(x):
        return float((x[0] + 2) ** 2 + (x[1] - 1) ** 2), np.array([2 * (x[0] + 2), 2 * (x[1] - 1)])

    found = newton.descend(f, np.array([3.0, 3.0]), low=np.array([0.5, -9.0]))
    np.testing.assert_allclose(found.x, [0.5, 1.0], atol=1e-6)
    assert found.converged


def test_where_the_function_fails_the_search_steps_back():
    def f(x):
        if x[0] <= 0:
            raise np.linalg.LinAlgError
        return float(x[0] - np.log(x[0])), np.array([1 - 1 / x[0]])

    assert newton.descend(f, np.array([0.2])).x[0] == pytest.approx(1.0, abs=1e-4)
