"""The study area as arrays: cells, their habitable areas and the smoothing that perception does.

Row 0 is south, column 0 is west. Units: km and km². Everything here is made once per study in NumPy and then handed
to the solvers as an argument, so that one compiled program serves every study of the same shape.
"""

from typing import NamedTuple

import jax.numpy as jnp
import numpy as np
from jaxtyping import Array, Bool, Float


class Domain(NamedTuple):
    """Cells of the study area (a pytree of arrays).

    Attributes:
        x: cell centres, west to east [km].
        y: cell centres, south to north [km].
        area: habitable area of each cell [km²]; 0 outside.
        kernel_x: one-dimensional Gaussian between columns, sd = perception distance [1].
        kernel_y: the same between rows [1].
        perceived_area: the kernel applied to `area`: the normaliser of a perceived field [km²].
    """

    x: Float[Array, " nx"]
    y: Float[Array, " ny"]
    area: Float[Array, "ny nx"]
    kernel_x: Float[Array, "nx nx"]
    kernel_y: Float[Array, "ny ny"]
    perceived_area: Float[Array, "ny nx"]

    @property
    def inside(self) -> Bool[Array, "ny nx"]:
        """True where animals can be."""
        return self.area > 0


def make_domain(x: np.ndarray, y: np.ndarray, area: np.ndarray, perception: float) -> Domain:
    """Domain of square cells.

    Args:
        x: centres of the columns [km], equally spaced, ascending.
        y: centres of the rows [km], same spacing.
        area: habitable area of each cell, shape (ny, nx) [km²].
        perception: distance over which scent is perceived, the sd of a Gaussian [km]; 0 means scent is read where
            it lies. Below about a cell and with strong avoidance one parameter set can have several steady states.

    Raises:
        ValueError: shapes that do not agree, or a negative distance.
    """
    x, y, area = np.asarray(x, float), np.asarray(y, float), np.asarray(area, float)
    if area.shape != (y.size, x.size):
        raise ValueError(
            f"`area` must have one row per `y` and one column per `x`, {(y.size, x.size)}, got {area.shape}."
        )
    if perception < 0:
        raise ValueError(f"`perception` is a distance in km and cannot be negative, got {perception}.")
    kernel_x, kernel_y = _gaussian(x, perception), _gaussian(y, perception)
    perceived = kernel_y @ area @ kernel_x.T
    tiny = 1e-300  # cells farther from the area than the kernel reaches; masked everywhere
    arrays = (x, y, area, kernel_x, kernel_y, np.maximum(perceived, tiny))
    return Domain(*(jnp.asarray(a) for a in arrays))


def _gaussian(at: np.ndarray, sd: float) -> np.ndarray:
    if sd == 0:
        return np.eye(at.size)
    return np.exp(-0.5 * ((at[:, None] - at[None, :]) / sd) ** 2)
