"""Scent: who marks where, and what of it an animal perceives.

q_i = n_i A₀ u_i is the scent of group i without over-marking, so that mean scent over the area is 1. Perceived
foreign scent is smoothed with a Gaussian of the perception distance, normalised inside the area; without smoothing
one parameter set can have many steady states.
"""

import jax.numpy as jnp
from jaxtyping import Array, Float

from bayesrange.spaceuse._domain import Domain

CLOSEST = 1e-9
"""Smallest value that 1 − mQ is given inside an iteration; a solution that reaches it has no steady scent."""


def marks(
    scent: Float[Array, "groups ny nx"], over_marking: Float[Array, ""]
) -> tuple[Float[Array, "groups ny nx"], Float[Array, ""]]:
    """Marks in steady state where each group adds a share m of the foreign marks to its own.

    p_i = q_i (1 + m f_i), f_i = Σ_{j≠i} p_j, closed in each cell: Q = Σ q_i/(1 + m q_i), S = Σ p_i = Q/(1 − mQ),
    p_i = q_i (1 + mS)/(1 + m q_i).

    Args:
        scent: q_i ≥ 0 [1].
        over_marking: m ≥ 0 [1].

    Returns:
        p_i, and the largest m Q over all cells: marks are finite only where it is below 1.
    """
    share = scent / (1 + over_marking * scent)
    load = over_marking * share.sum(0)
    total = share.sum(0) / jnp.maximum(1 - load, CLOSEST)
    return share * (1 + over_marking * total)[None], load.max()


def perceive(field: Float[Array, "groups ny nx"], domain: Domain) -> Float[Array, "groups ny nx"]:
    """K∗field / K∗1 inside the area, K a Gaussian of the perception distance: as two small dense products."""
    groups, ny, nx = field.shape
    along_x = (field * domain.area[None]).reshape(groups * ny, nx) @ domain.kernel_x.T
    turned = jnp.swapaxes(along_x.reshape(groups, ny, nx), 1, 2).reshape(groups * nx, ny)
    along_y = (turned @ domain.kernel_y.T).reshape(groups, nx, ny)
    return jnp.swapaxes(along_y, 1, 2) / domain.perceived_area[None]


def foreign_scent(
    density: Float[Array, "groups ny nx"],
    marking: Float[Array, " groups"],
    over_marking: Float[Array, ""],
    domain: Domain,
) -> tuple[Float[Array, "groups ny nx"], Float[Array, ""]]:
    """F̃_i, the perceived scent of all other groups [1], and the load m Q of `marks`."""
    laid, load = marks(marking[:, None, None] * density, over_marking)
    perceived = perceive(laid, domain)
    return perceived.sum(0, keepdims=True) - perceived, load
