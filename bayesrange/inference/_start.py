"""Mode and curvature of the posterior: where chains start and how their space is scaled."""

from collections.abc import Callable
from typing import NamedTuple

import numpy as np
from scipy.optimize import minimize

STEP = 1e-3
"""Step of the central differences of the gradient, on the unconstrained space."""
FLATTEST = 0.05
"""Least curvature taken seriously: an sd of 4.5 on the unconstrained space, beyond any prior here."""


class Start(NamedTuple):
    """Mode on the unconstrained space, and a factor of the inverse curvature there.

    Attributes:
        mode: position of the largest density that was found.
        scale: lower-triangular L with L Lᵀ = inverse curvature.
        potential: negative log density at the mode.
        evaluations: calls of value and gradient.
    """

    mode: np.ndarray
    scale: np.ndarray
    potential: float
    evaluations: int


def find_start(value_and_gradient: Callable[[np.ndarray], tuple[float, np.ndarray]], guess: np.ndarray) -> Start:
    """Mode by L-BFGS from a guess, curvature by central differences of the gradient.

    Args:
        value_and_gradient: potential and gradient at a position; may be infinite.
        guess: where to begin; its potential must be finite.

    Raises:
        FloatingPointError: the potential at the guess is not finite.
    """
    count = 0

    def guarded(z: np.ndarray) -> tuple[float, np.ndarray]:
        nonlocal count
        count += 1
        value, gradient = value_and_gradient(z)
        value, gradient = float(value), np.asarray(gradient, float)
        if np.isfinite(value) and np.isfinite(gradient).all():
            return value, gradient
        return 1e30, np.zeros_like(z)

    first, _ = guarded(guess)
    if first >= 1e30:
        raise FloatingPointError("The log-density is not finite where the search for its mode begins.")
    found = minimize(
        guarded, guess, jac=True, method="L-BFGS-B", options={"maxiter": 500, "maxcor": 20, "ftol": 1e-13, "gtol": 1e-5}
    )
    mode = found.x if found.fun <= first else guess
    curvature = np.empty((mode.size, mode.size))
    for i in range(mode.size):
        step = np.zeros(mode.size)
        step[i] = STEP
        curvature[i] = (guarded(mode + step)[1] - guarded(mode - step)[1]) / (2 * STEP)
    values, vectors = np.linalg.eigh((curvature + curvature.T) / 2)
    covariance = (vectors / np.maximum(np.abs(values), FLATTEST)) @ vectors.T
    return Start(mode, np.linalg.cholesky(covariance), float(min(found.fun, first)), count)
