"""An upper bound of a place's attraction ω, tile by tile, kept up to date while an animal walks.

A tile is a block of the landscape's cells. A layer read within it cannot exceed the values of the inside cells in and
around it; a stay's presence cannot exceed what it is at the tile's nearest point. Both are cheap: presence is the
product of a part along x and one along y.
"""

from typing import NamedTuple

import jax
import jax.numpy as jnp
from jaxtyping import Array, Bool, Float, Int

from bayesrange.memory._landscape import Landscape
from bayesrange.memory._likelihood import StepParameters

LARGEST = 48
"""Tiles along a side, at the most: more make the bound tighter and its upkeep dearer."""
SLACK = 1e-9
"""Added to the log bound: far above the rounding in it, far below what would cost a proposal."""


class Tiles(NamedTuple):
    """Blocks of cells (a pytree of arrays).

    Attributes:
        x: western edges of the columns of tiles, and the eastern edge of the last [km].
        y: southern edges of the rows, and the northern edge of the last [km].
        still: log bound of what does not change, layers and the pull home; −inf without habitable ground.
    """

    x: Float[Array, " tx+1"]
    y: Float[Array, " ty+1"]
    still: Float[Array, "ty tx"]


def make_tiles(parameters: StepParameters, landscape: Landscape) -> Tiles:
    """Tiles for a landscape, with the bound of Σ b h − η|z − c| on each."""
    ny, nx = landscape.inside.shape
    block = -(-max(ny, nx) // LARGEST)
    rows, columns = -(-ny // block), -(-nx // block)
    x = landscape.west + landscape.cell * block * jnp.arange(columns + 1)
    y = landscape.south + landscape.cell * block * jnp.arange(rows + 1)
    selected = jnp.tensordot(parameters.selection, landscape.layers, 1)
    around = _block_max(jnp.where(landscape.inside, selected, -jnp.inf), 3, 1, ((1, 1), (1, 1)))
    spare = ((0, rows * block - ny), (0, columns * block - nx))
    at_best = _block_max(jnp.where(landscape.inside, around, -jnp.inf), block, block, spare)
    home_x, home_y = parameters.home
    along_x, along_y = _distances(x, home_x), _distances(y, home_y)
    nearest, farthest = (
        jnp.sqrt(a[None] ** 2 + b[:, None] ** 2 + parameters.home_eps**2) for a, b in zip(along_x, along_y, strict=True)
    )
    pull = -parameters.home_pull * jnp.where(parameters.home_pull > 0, nearest, farthest)
    pull = jnp.where(parameters.home_pull == 0, 0.0, pull)
    return Tiles(x, y, at_best + pull)


def presence_bound(
    tiles: Tiles, x: Float[Array, " stays"], y: Float[Array, " stays"], encoding_range: Float[Array, ""]
) -> tuple[Float[Array, "stays ty"], Float[Array, "stays tx"]]:
    """Largest presence exp(−|z − x_s|²/2σ²) on each tile, as factors along y and along x.

    Args:
        tiles: blocks of cells.
        x: eastings of the stays [km].
        y: northings [km].
        encoding_range: σ [km].
    """
    along_x, along_y = jax.vmap(_distances, (None, 0))(tiles.x, x)[0], jax.vmap(_distances, (None, 0))(tiles.y, y)[0]
    return jnp.exp(-0.5 * (along_y / encoding_range) ** 2), jnp.exp(-0.5 * (along_x / encoding_range) ** 2)


def within_reach(
    tiles: Tiles, x: Float[Array, ""], y: Float[Array, ""], reach: Float[Array, ""]
) -> Bool[Array, "ty tx"]:
    """Tiles that a step of the given length [km] can come to."""
    along_x, along_y = _distances(tiles.x, x)[0], _distances(tiles.y, y)[0]
    return along_x[None] ** 2 + along_y[:, None] ** 2 <= (reach * (1.0 + SLACK)) ** 2


def tile_of(tiles: Tiles, x: Float[Array, " places"], y: Float[Array, " places"]) -> Int[Array, " places"]:
    """Flat index of the tile that holds each place [km]; that of the nearest tile for places beside them."""
    rows, columns = tiles.still.shape
    edge = tiles.x[1] - tiles.x[0]
    column = jnp.clip(jnp.floor((x - tiles.x[0]) / edge), 0, columns - 1)
    row = jnp.clip(jnp.floor((y - tiles.y[0]) / edge), 0, rows - 1)
    return (row * columns + column).astype(jnp.int32)


def _distances(
    edges: Float[Array, " edges"], at: Float[Array, ""]
) -> tuple[Float[Array, " edges-1"], Float[Array, " edges-1"]]:
    """Smallest and largest distance along one axis from a place to each interval between edges [km]."""
    low, high = edges[:-1] - at, at - edges[1:]
    return jnp.maximum(jnp.maximum(low, high), 0.0), jnp.maximum(jnp.abs(low), jnp.abs(high))


def _block_max(
    values: Float[Array, "ny nx"], window: int, stride: int, padding: tuple[tuple[int, int], tuple[int, int]]
) -> Float[Array, "rows columns"]:
    """Largest value in each window; padding is −inf."""
    return jax.lax.reduce_window(values, -jnp.inf, jax.lax.max, (window, window), (stride, stride), padding)
