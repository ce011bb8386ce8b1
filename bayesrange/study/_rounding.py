"""To how many decimals coordinates were written: below it two fixes cannot be told apart."""

import numpy as np
from jaxtyping import Float
from numpy.typing import NDArray

METRES_PER_DEGREE = 111_195.0
"""Of latitude, on a sphere of 6,371 km."""
FINEST = 9  # decimals


def rounding(x: Float[NDArray, " n"], y: Float[NDArray, " n"], degrees: bool) -> float:
    """The step to which all coordinates are rounded [m]: a power of ten of the file's unit, from 1,000 down.

    Args:
        x: as in the file.
        y: as in the file.
        degrees: whether the file's unit is the degree.
    """
    values = np.concatenate([x, y])
    decimals = next((d for d in range(-3, FINEST) if np.array_equal(np.round(values, d), values)), FINEST)
    return float(10.0**-decimals * (METRES_PER_DEGREE if degrees else 1.0))
