"""Mode and curvature: exact on a Gaussian, at the mode of a banana, and plain words where there is no density."""

import numpy as np
import pytest
from scipy.optimize import rosen, rosen_der, rosen_hess

from bayesrange.inference import find_start
from bayesrange.inference._start import APART, whitening_scale

NOWHERE = np.zeros(3, bool)


def gaussian(mean, covariance):
    precision = np.linalg.inv(covariance)
    return lambda z: (0.5 * (z - mean) @ precision @ (z - mean), precision @ (z - mean))


def test_gaussian_gives_its_mean_and_covariance():
    mean, covariance = np.array([1.0, -2.0, 0.5]), np.array([[2.0, 0.6, 0.0], [0.6, 0.5, 0.1], [0.0, 0.1, 0.2]])
    start = find_start(gaussian(mean, covariance), np.zeros(3))
    # L-BFGS stops at a slope of 1e-5; central differences of a linear slope are exact to rounding over the step.
    np.testing.assert_allclose(start.mode, mean, atol=1e-4)
    scale = whitening_scale(start.curvature, NOWHERE)
    np.testing.assert_allclose(scale @ scale.T, covariance, rtol=1e-9, atol=1e-10)
    assert start.potential == pytest.approx(0.0, abs=1e-8)


def test_banana_is_climbed_to_its_top():
    start = find_start(lambda z: (rosen(z), rosen_der(z)), np.array([-1.2, 1.0]))
    # SciPy's Rosenbrock function: minimum 0 at (1, 1); its Hessian there has a condition number of 2508.
    np.testing.assert_allclose(start.mode, 1.0, atol=1e-3)
    # Central differences of step 1e-3 err by the fourth derivative, 2400 · step² / 6, beside terms of some hundreds
    np.testing.assert_allclose(start.curvature, rosen_hess(np.ones(2)), rtol=1e-3, atol=1e-3)
    inverse, scale = np.linalg.inv(rosen_hess(np.ones(2))), whitening_scale(start.curvature, NOWHERE[:2])
    # Least eigenvalue 0.40, so nothing is held up; the condition number magnifies the error
    np.testing.assert_allclose(scale @ scale.T, inverse, rtol=2e-2)


def test_flat_and_downward_directions_get_a_finite_scale():
    # A ridge (no curvature along the second axis) and a saddle (negative along the third).
    def ridge(z):
        return 0.5 * z[0] ** 2 + 0.5e-9 * z[1] ** 2 - 0.05 * z[2] ** 2 + 0.01 * z[2] ** 4, np.array(
            [z[0], 1e-9 * z[1], -0.1 * z[2] + 0.04 * z[2] ** 3]
        )

    start = find_start(ridge, np.array([1.0, 1.0, 0.0]))
    scale = whitening_scale(start.curvature, NOWHERE)
    assert np.isfinite(scale).all()
    assert np.sqrt(1 / 0.05) == pytest.approx(np.abs(scale).max())  # the flattest curvature that is believed


def test_infinite_potential_on_the_way_is_walked_around():
    def walled(z):
        return (np.inf, np.full(1, np.nan)) if z[0] > 3 else (0.5 * (z[0] - 2.5) ** 2, z - 2.5)

    assert find_start(walled, np.array([-30.0])).mode == pytest.approx(2.5, abs=1e-3)


def test_infinite_potential_at_the_guess_is_said():
    with pytest.raises(FloatingPointError, match="not finite where the search for its mode begins"):
        find_start(lambda z: (np.inf, np.zeros(1)), np.zeros(1))


def test_coordinates_that_stand_apart_get_a_scale_of_their_own():
    curvature = np.array([[4.0, 1.0, 0.5, 0.2], [1.0, 3.0, 0.3, 0.1], [0.5, 0.3, 1e-6, 0.0], [0.2, 0.1, 0.0, 400.0]])
    scale = whitening_scale(curvature, np.array([False, False, True, True]))
    np.testing.assert_allclose(scale[:2, :2] @ scale[:2, :2].T, np.linalg.inv(curvature[:2, :2]))
    np.testing.assert_array_equal(scale[2:, 2:], np.diag([APART[1], APART[0]]))  # flat and steep, held to the limits
    assert not scale[:2, 2:].any() and not scale[2:, :2].any()
