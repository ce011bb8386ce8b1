"""Isopleths and overlaps of a utilisation distribution on cells."""

import jax
import jax.numpy as jnp
from jaxtyping import Array, Float

ISOPLETHS = (50, 95)
"""Shares of use that are reported, in percent."""


def rank_mass(
    density: Float[Array, "groups ny nx"], area: Float[Array, "ny nx"]
) -> tuple[Float[Array, "groups ny nx"], Float[Array, "groups ny nx"]]:
    """Mass in cells denser than each cell, and the cell's own mass; equal cells in their order."""
    groups = density.shape[0]
    mass = (density * area).reshape(groups, -1)
    order = jnp.argsort(-density.reshape(groups, -1), axis=1)
    ranked = jnp.take_along_axis(mass, order, axis=1)
    before = jnp.cumsum(ranked, axis=1) - ranked
    denser = jax.vmap(lambda at, values: jnp.zeros_like(values).at[at].set(values))(order, before)
    return denser.reshape(density.shape), mass.reshape(density.shape)


def isopleth_levels(
    denser: Float[Array, "groups ny nx"],
    mass: Float[Array, "groups ny nx"],
    area: Float[Array, "ny nx"],
    levels: Float[Array, " isopleths"],
) -> tuple[Float[Array, "isopleths groups ny nx"], Float[Array, "isopleths groups"]]:
    """Which cells the smallest region of a given mass holds, and its area.

    The cell that the level cuts counts by the share of its mass that is needed, so that the area moves smoothly.

    Args:
        denser: from `rank_mass`.
        mass: from `rank_mass`; sums to 1 over a group.
        area: habitable area of each cell [km²].
        levels: shares of use, 0 to 1.

    Returns:
        Share of each cell inside the isopleth (0 to 1), and areas [km²].
    """
    needed = levels[:, None, None, None] - denser[None]
    share = jnp.clip(needed / jnp.where(mass > 0, mass, 1.0)[None], 0.0, 1.0)
    share = jnp.where((mass > 0)[None], share, 0.0)
    return share, (share * area).sum((2, 3))


def overlaps(density: Float[Array, "groups ny nx"], area: Float[Array, "ny nx"]) -> Float[Array, "groups groups"]:
    """Bhattacharyya coefficient ∫√(u_i u_j) of each pair of groups (Bhattacharyya 1943): 0 apart, 1 the same."""
    root = jnp.sqrt(density * area).reshape(density.shape[0], -1)
    return root @ root.T
