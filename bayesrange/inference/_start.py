"""Mode and curvature of the posterior: where chains start and how their space is scaled."""

from collections.abc import Callable
from typing import NamedTuple

import numpy as np
from scipy.optimize import minimize

STEP = 1e-3
"""Step of the central differences of the gradient, on the unconstrained space."""
APART = (0.3, 1.0)
"""Least and largest scale of a log spread or a correlation's coordinate: 1 is about what its prior leaves open."""
FLATTEST = 0.05
"""Least curvature taken seriously: an sd of 4.5 on the unconstrained space, beyond any prior here."""


class Start(NamedTuple):
    """Mode on the unconstrained space, and the curvature there.

    Attributes:
        mode: position of the largest density that was found.
        curvature: second derivatives of the potential at the mode, by central differences of the gradient.
        potential: negative log density at the mode.
        evaluations: calls of value and gradient.
    """

    mode: np.ndarray
    curvature: np.ndarray
    potential: float
    evaluations: int


def whitening_scale(curvature: np.ndarray, apart: np.ndarray, prior: np.ndarray | None = None) -> np.ndarray:
    """Factor L of the sampler's coordinates z = mode + L w, from the curvature.

    L Lᵀ is the inverse curvature; directions flatter than `FLATTEST` count as that flat, or, where the prior's own
    curvature is given, those flatter than the prior as flat as the prior. Spreads and correlations of a hierarchy stand
    apart: the curvature at one spread says little about another, so that they get a scale of their own and no
    correlation with the rest.

    Args:
        curvature: second derivatives of the potential.
        apart: True for the coordinates that stand apart.
        prior: second derivatives of the prior's potential.
    """
    scale = np.zeros_like(curvature)
    rest = np.flatnonzero(~apart)
    own = curvature[np.ix_(rest, rest)]
    covariance = _inverse(own) if prior is None else _inverse_within(own, prior[np.ix_(rest, rest)])
    scale[np.ix_(rest, rest)] = np.linalg.cholesky(covariance)
    own = np.flatnonzero(apart)
    scale[own, own] = np.clip(1 / np.sqrt(np.maximum(curvature[own, own], 1e-12)), *APART)
    return scale


def _inverse(curvature: np.ndarray) -> np.ndarray:
    values, vectors = np.linalg.eigh(curvature)
    return (vectors / np.maximum(np.abs(values), FLATTEST)) @ vectors.T


def _inverse_within(curvature: np.ndarray, prior: np.ndarray) -> np.ndarray:
    """Inverse curvature, no wider than the prior in any direction.

    A likelihood that curves the wrong way at the mode, as one of decay times does, would cancel the prior's curvature
    and make a direction look many times wider than it can be; one such direction sets the step size of all.
    """
    values, vectors = np.linalg.eigh(prior)
    root = vectors / np.sqrt(np.maximum(values, FLATTEST))  # columns: the prior's own axes, one prior sd long
    values, vectors = np.linalg.eigh(root.T @ curvature @ root)
    axes = root @ vectors
    return (axes / np.maximum(values, 1.0)) @ axes.T


ValueAndGradient = Callable[[np.ndarray], tuple[float, np.ndarray]]


def find_start(value_and_gradient: ValueAndGradient, guess: np.ndarray) -> Start:
    """Mode by L-BFGS from a guess, and the curvature at it.

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
    options = {"maxiter": 500, "maxcor": 20, "ftol": 1e-13, "gtol": 1e-5}
    found = minimize(guarded, guess, jac=True, method="L-BFGS-B", options=options)
    mode = found.x if found.fun <= first else guess
    return Start(mode, curvature_at(guarded, mode), float(min(found.fun, first)), count)


def curvature_at(value_and_gradient: ValueAndGradient, z: np.ndarray) -> np.ndarray:
    """Second derivatives of the potential at z, by central differences of its gradient; 0 where that is no number."""
    curvature = np.empty((z.size, z.size))
    for i in range(z.size):
        step = np.zeros(z.size)
        step[i] = STEP
        ahead, behind = (np.asarray(value_and_gradient(z + side * step)[1], float) for side in (1, -1))
        curvature[i] = np.nan_to_num((ahead - behind) / (2 * STEP), nan=0.0, posinf=0.0, neginf=0.0)
    return (curvature + curvature.T) / 2
