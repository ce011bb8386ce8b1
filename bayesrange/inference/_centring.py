"""How far groups differ, roughly, and which coordinates suit a hierarchy: before any sampling.

The joint mode of a hierarchy is a poor guide to the spread between groups. Here each group's own estimate of a
coefficient, with its sampling variance from the curvature, gives a quick marginal posterior of the spread.
"""

from typing import NamedTuple

import numpy as np

GRID = np.geomspace(1e-2, 4.0, 80)
"""Spreads that are weighed, in units of the prior's scale."""
CAUTIOUS = 0.05
"""Quantile of the spread that decides on the centring."""


class Typical(NamedTuple):
    """A typical point of one coefficient's hierarchy, on the unconstrained scale.

    Attributes:
        spread: root of the posterior mean of the squared spread.
        values: the groups' values, drawn towards the common mean by that spread.
        centring: share of centring of each group's coordinate: by the spread's 5 % quantile, because the centred form
            has a narrow neck wherever the spread may be near 0.
    """

    spread: float
    values: np.ndarray
    centring: np.ndarray


def typical(values: np.ndarray, expected: np.ndarray, spread: float, information: np.ndarray, scale: float) -> Typical:
    """Typical spread and values of one coefficient.

    Args:
        values: groups' values at the joint mode.
        expected: where the population expects them there.
        spread: spread there.
        information: curvature of each group's log-likelihood in its value.
        scale: scale of the half-normal prior of the spread.
    """
    information = np.maximum(information, 1e-6)
    own = values + (values - expected) / (information * spread**2)  # what the fixes say without the population
    deviation = own - expected
    grid = GRID * scale
    variance = grid[:, None] ** 2 + 1 / information[None, :]
    centre = (deviation / variance).sum(1) / (1 / variance).sum(1)
    density = -0.5 * np.log(variance).sum(1) - 0.5 * ((deviation - centre[:, None]) ** 2 / variance).sum(1)
    density += -0.5 * GRID**2 + np.log(grid)  # prior; the grid is even in the logarithm
    weight = np.exp(density - density.max())
    weight /= weight.sum()
    usual = float(np.sqrt((weight * grid**2).sum()))
    least = float(grid[np.searchsorted(weight.cumsum(), CAUTIOUS)])
    share, centring = (gain / (1 + gain) for gain in (information * usual**2, information * least**2))
    return Typical(usual, expected + deviation * share, centring)
