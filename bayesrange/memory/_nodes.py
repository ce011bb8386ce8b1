"""Quadrature nodes about the start of each step, for the integral that normalises a step.

Radii are quantiles of a reference gamma, angles a golden-angle lattice. The reference is wider than the steps: the
error sits in the tail (measured: docs/performance.md). Every step has its own rotation, reflection and offset within
the strata of radii, so that errors average out over steps instead of bending shape and scale. Units: km, rad.
"""

from typing import NamedTuple

import numpy as np
from jaxtyping import Float
from scipy import optimize, special

from bayesrange.memory._steps import Steps

GOLDEN = np.pi * (3 - np.sqrt(5))
"""The golden angle [rad]."""

SMALLEST_RADIUS = 1e-9
"""Nodes lie no nearer to the start than this [km], a micrometre: a low quantile of a small shape underflows."""


class Nodes(NamedTuple):
    """Nodes of each step.

    Attributes:
        x: eastings [km].
        y: northings [km].
        radius: distance from the start [km].
        turn: from the step's heading, in (−π, π] [rad].
    """

    x: Float[np.ndarray, "steps nodes"]
    y: Float[np.ndarray, "steps nodes"]
    radius: Float[np.ndarray, "steps nodes"]
    turn: Float[np.ndarray, "steps nodes"]


class Reference(NamedTuple):
    """A gamma law of radii.

    Attributes:
        shape: [1].
        scale: [km].
    """

    shape: float
    scale: float


def fit_gamma(length: Float[np.ndarray, " steps"]) -> Reference:
    """The gamma law of greatest likelihood for positive lengths [km]; lengths of 0 are left out.

    Solves log a − ψ(a) = log(mean) − mean(log), scale = mean / a (Minka 2002, *Estimating a Gamma distribution*, from
    memory). Lengths all alike would ask for an endless shape: it stops at 1e6.
    """
    positive = length[length > 0]
    if not len(positive):
        raise ValueError("`length` must hold at least one positive step length [km]: there is nothing to fit.")
    spread = max(np.log(positive.mean()) - np.log(positive).mean(), 5.1e-7)

    def excess(log_shape: float) -> float:
        return log_shape - float(special.digamma(np.exp(log_shape))) - spread

    shape = float(np.exp(optimize.brentq(excess, np.log(1e-4), np.log(1e6), xtol=1e-12)))
    return Reference(shape, float(positive.mean()) / shape)


def wide_reference(length: Float[np.ndarray, " steps"]) -> Reference:
    """The nodes' reference: 0.6 × the shape and 3 × the scale of the gamma law fitted to positive lengths [km]."""
    fitted = fit_gamma(length)
    return Reference(0.6 * fitted.shape, 3 * fitted.scale)


def make_nodes(steps: Steps, reference: Reference, count: int, seed: int) -> Nodes:
    """Nodes about the start of each step.

    Args:
        steps: of one animal.
        reference: law of the radii.
        count: nodes per step.
        seed: the same seed gives the same nodes; take another for each animal.
    """
    random = np.random.default_rng(seed)
    size = (len(steps.time), 1)
    offset, rotation = random.uniform(size=size), random.uniform(0, 2 * np.pi, size)
    side = random.choice([-1.0, 1.0], size)
    index = np.arange(count)[None]
    radius = reference.scale * special.gammaincinv(reference.shape, (index + offset) / count)
    radius = np.maximum(radius, SMALLEST_RADIUS)
    turn = np.pi - np.mod(rotation + side * GOLDEN * index, 2 * np.pi)
    angle = steps.heading[:, None] + turn
    return Nodes(steps.x[:, None] + radius * np.cos(angle), steps.y[:, None] + radius * np.sin(angle), radius, turn)
