"""Probability density of a fix, read off the cells.

`bilinear`: between the centres of inside cells, weights renormalised, with the density's integral over the habitable
area as normaliser. `cell`: constant within a cell. Location error enters as a fixed set of nodes per fix; nothing
here but the density depends on the parameters.
"""

from typing import NamedTuple

import jax
import jax.numpy as jnp
from jaxtyping import Array, Float, Int


class Reading(NamedTuple):
    """How each fix reads the cells (a pytree of arrays).

    Attributes:
        cell: flat index row·nx + column of each entry; padding points at an inside cell.
        log_share: log weight of each entry, −inf for padding; weights of a fix sum to at most 1 (to 1 if none of
            its error nodes lies outside the area).
        group: group of each fix.
        basis_area: integral of each cell's basis over the habitable area [km²].
    """

    cell: Int[Array, "fixes entries"]
    log_share: Float[Array, "fixes entries"]
    group: Int[Array, " fixes"]
    basis_area: Float[Array, "ny nx"]


def log_fix_density(log_density: Float[Array, "groups ny nx"], reading: Reading) -> Float[Array, " fixes"]:
    """Log of ∫ u(z) N(y; z, Σ) dz for each fix y [log 1/km²].

    Args:
        log_density: log u at cell centres, −inf outside.
        reading: from the fixes and the grid.
    """
    basis_area = jnp.asarray(reading.basis_area)[None]
    top = jax.lax.stop_gradient(log_density.max((1, 2), keepdims=True))
    mass = jnp.where(basis_area > 0, jnp.exp(log_density - top) * basis_area, 0.0).sum((1, 2))
    log_mass = jnp.log(mass) + top[:, 0, 0]
    flat = log_density.reshape(log_density.shape[0], -1)
    terms = flat[reading.group[:, None], reading.cell] + reading.log_share
    return jax.nn.logsumexp(terms, axis=1) - log_mass[reading.group]
