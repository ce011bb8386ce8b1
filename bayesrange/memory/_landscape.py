"""The ground an animal moves over: standardised layers and the habitable sub-cells, read at any place.

Row 0 is south, column 0 west, as on the study's grid; places in km. The reading is the study's: bilinear between the
centres of inside cells, weights renormalised (docs/mathematics).
"""

from typing import NamedTuple

import jax
import jax.numpy as jnp
from jaxtyping import Array, Bool, Float, Int

SUB = 8
"""Sub-cells along the edge of a cell, by which the ground's edges are known."""


class Landscape(NamedTuple):
    """Square cells with layers on them (a pytree of arrays).

    Attributes:
        west: western edge [km].
        south: southern edge [km].
        cell: edge of a cell [km].
        layers: standardised layers at the cells' centres [sd]; finite everywhere, 0 where not inside.
        inside: cells with any habitable ground.
        sub_cells: which of each cell's 8 × 8 sub-cells are habitable.
    """

    west: Float[Array, ""]
    south: Float[Array, ""]
    cell: Float[Array, ""]
    layers: Float[Array, "layers ny nx"]
    inside: Bool[Array, "ny nx"]
    sub_cells: Bool[Array, "8*ny 8*nx"]


@jax.jit
def read_layers(
    landscape: Landscape, x: Float[Array, "*places"], y: Float[Array, "*places"]
) -> Float[Array, "*places layers"]:
    """Layers at each place [sd]: bilinear between centres of inside cells; 0 where none of the four is inside.

    Args:
        landscape: the ground.
        x: eastings [km].
        y: northings [km].
    """
    along, up = (x - landscape.west) / landscape.cell - 0.5, (y - landscape.south) / landscape.cell - 0.5
    column, row = jnp.floor(along), jnp.floor(up)
    right, upper = along - column, up - row
    ny, nx = landscape.inside.shape
    by_cell = landscape.layers.reshape(-1, ny * nx).T
    total, read = jnp.zeros_like(right), jnp.zeros((*right.shape, by_cell.shape[1]))
    for i, share_up in ((0, 1 - upper), (1, upper)):
        for j, share_right in ((0, 1 - right), (1, right)):
            flat, on_grid = _flat_index(row + i, column + j, (ny, nx))
            weight = jnp.where(on_grid & landscape.inside.ravel()[flat], share_right * share_up, 0.0)
            total += weight
            read += weight[..., None] * by_cell[flat]
    return jnp.where(total > 0, 1 / jnp.where(total > 0, total, 1.0), 0.0)[..., None] * read


@jax.jit
def allowed(landscape: Landscape, x: Float[Array, "*places"], y: Float[Array, "*places"]) -> Bool[Array, "*places"]:
    """Whether each place [km] lies in a habitable sub-cell."""
    column = jnp.floor((x - landscape.west) / landscape.cell * SUB)
    row = jnp.floor((y - landscape.south) / landscape.cell * SUB)
    rows, columns = landscape.sub_cells.shape
    flat, on_grid = _flat_index(row, column, (rows, columns))
    return on_grid & landscape.sub_cells.ravel()[flat]


def _flat_index(
    row: Float[Array, "*places"], column: Float[Array, "*places"], shape: tuple[int, int]
) -> tuple[Int[Array, "*places"], Bool[Array, "*places"]]:
    """Index row·nx + column, and whether the pair is on the grid; 0 where it is not (also for NaN)."""
    ny, nx = shape
    on_grid = (column >= 0) & (column < nx) & (row >= 0) & (row < ny)
    flat = jnp.where(on_grid, row, 0.0).astype(jnp.int32) * nx + jnp.where(on_grid, column, 0.0).astype(jnp.int32)
    return flat, on_grid
