"""How many nodes a step needs: a pilot on the grain of the layers.

A layer rougher than the nodes' spacing is read too coarsely, whatever the memory does, so the number of nodes must
follow the layers. Units: km, h, rad.
"""

from collections.abc import Sequence

import jax.numpy as jnp
import numpy as np
from jaxtyping import Float
from scipy import special

from bayesrange.memory._landscape import Landscape, allowed, read_layers
from bayesrange.memory._nodes import Reference, make_nodes
from bayesrange.memory._steps import Steps

FINEST = 4096
"""Nodes that stand in for the integral itself."""

LARGEST_ERROR = 0.004
"""Error per step [nats, root mean square] that a number of nodes may have: twice that of 64 on smooth ground."""

SAMPLE = 300
"""Most steps a pilot reads."""


def quadrature_error(
    steps: Steps,
    landscape: Landscape,
    reference: Reference,
    counts: Sequence[int] = (64, 128, 256),
    seed: int = 0,
    finest: int = FINEST,
) -> dict[int, float]:
    """Error of the log normaliser per step at each number of nodes, for the layer and sign that are worst.

    Selection is 1 and −1 per sd for one layer at a time, without memory; the movement kernel is the gamma law the
    reference was made from, turns uniform. Steps are taken evenly from all given, at most `SAMPLE`; those without a
    node on habitable ground at any count are left out.

    Args:
        steps: of one or more animals.
        landscape: the ground.
        reference: wide law of the radii, from `wide_reference`.
        counts: numbers of nodes to try.
        seed: of the nodes.
        finest: number of nodes to compare with.

    Returns:
        Root mean square error over steps [nats] by number of nodes; 0 without layers.
    """
    if not len(steps.time):
        raise ValueError("`steps` is empty: the pilot needs steps to place nodes about.")
    chosen = np.unique(np.linspace(0, len(steps.time) - 1, min(SAMPLE, len(steps.time))).astype(int))
    steps = Steps(*(column[chosen] for column in steps))
    exact = _log_normalisers(steps, landscape, reference, finest, seed + 1)
    errors = {}
    for count in counts:
        with np.errstate(invalid="ignore"):  # a step without nodes on the ground at either count
            difference = _log_normalisers(steps, landscape, reference, count, seed) - exact
        difference = difference[:, np.isfinite(difference).all(0)]
        errors[count] = float(np.sqrt((difference**2).mean(1)).max()) if difference.size else 0.0
    return errors


def choose_count(errors: dict[int, float], largest_error: float = LARGEST_ERROR) -> int:
    """The smallest number of nodes whose error is below `largest_error` [nats]; the largest tried if none is."""
    return next((count for count in sorted(errors) if errors[count] < largest_error), max(errors))


def _log_normalisers(
    steps: Steps, landscape: Landscape, reference: Reference, count: int, seed: int
) -> Float[np.ndarray, "cases steps"]:
    """Log Σ w ω − log Σ w of each step, for each layer and sign; −inf without a node on habitable ground."""
    nodes = make_nodes(steps, reference, count, seed)
    x, y = jnp.asarray(nodes.x), jnp.asarray(nodes.y)
    layers, ground = np.asarray(read_layers(landscape, x, y)), np.asarray(allowed(landscape, x, y))
    shape, scale = reference.shape / 0.6, reference.scale / 3
    log_quad = (shape - reference.shape) * np.log(nodes.radius) + (1 / reference.scale - 1 / scale) * nodes.radius
    below = special.logsumexp(log_quad, axis=1)
    above = np.where(ground, log_quad, -np.inf)
    cases = [
        special.logsumexp(above + sign * layers[..., k], axis=1) for k in range(layers.shape[-1]) for sign in (1, -1)
    ]
    return np.array(cases).reshape(-1, len(below)) - below[None]
