"""Cells inside the area for which a layer has no value: where they are, and filling them from the nearest cell."""

import math

import numpy as np
from jaxtyping import Bool, Float
from numpy.typing import NDArray
from scipy import ndimage

from bayesrange.study._grid import Grid
from bayesrange.study._tables import counted


def fill_nearest(
    values: Float[NDArray, "ny nx"], grid: Grid, within_m: float
) -> tuple[Float[NDArray, "ny nx"], int, float]:
    """Give cells inside the area that have no value that of the nearest cell, centre to centre, that has one.

    Cells outside the area lend their value too. What lies farther than `within_m` [m] stays missing.

    Returns:
        The values, how many cells were filled, and the longest distance [m] over which one was.
    """
    distance_m, nearest = _to_known(values, grid)
    filled = np.isnan(values) & grid.inside & (distance_m <= within_m)
    if not filled.any():
        return values, 0, 0.0
    return np.where(filled, nearest, values), int(filled.sum()), float(distance_m[filled].max())


def missing_cells(
    values: Float[NDArray, "ny nx"], grid: Grid, filled: Float[NDArray, "ny nx"] | None = None
) -> str | None:
    """The end of a sentence on the cells inside the area that have no value: how many, where, what to do.

    Args:
        values: on every cell of the grid, those outside the area too.
        grid: the grid.
        filled: the same once the user has had them filled, None if filling was not asked for.
    """
    missing = np.isnan(values if filled is None else filled) & grid.inside
    count = int(missing.sum())
    if not count:
        return None
    told = f"{count} of {int(grid.inside.sum())} cells inside the area have no value ({_where(missing, grid)})"
    if np.isnan(values).all():
        return f"{told}; give a file that has values there."
    farthest = float(_to_known(values, grid)[0][missing].max())
    step = 10 ** math.floor(math.log10(farthest))
    enough = f"{math.ceil(farthest / step - 1e-9) * step:g}"
    if filled is not None:
        return (
            f"{told}, and a cell that has one is up to {farthest:.0f} m away, farther than fill_within_m; give a "
            f"raster that covers the whole area, or fill_within_m = {enough}."
        )
    return (
        f"{told}; give a raster that covers the whole area, draw the area within it, or take the value of the nearest "
        f'cell by fill = "nearest" and fill_within_m = {enough}.'
    )


def _where(missing: Bool[NDArray, "ny nx"], grid: Grid) -> str:
    """Centre of the largest patch, and the extent of all."""
    pieces, count = ndimage.label(missing, np.ones((3, 3)))
    sizes = ndimage.sum_labels(missing, pieces, np.arange(1, count + 1))
    row, column = ndimage.center_of_mass(missing, pieces, int(np.argmax(sizes)) + 1)
    x, y = grid.west_m + (column + 0.5) * grid.cell_m, grid.south_m + (row + 0.5) * grid.cell_m
    patches = f"around x = {x:.0f}, y = {y:.0f}"
    if count > 1:
        patches = f"in {count} patches, the largest of {counted(int(sizes.max()), 'cell', 'cells')} {patches}"
    rows, columns = np.nonzero(missing)
    west, east = grid.west_m + columns.min() * grid.cell_m, grid.west_m + (columns.max() + 1) * grid.cell_m
    south, north = grid.south_m + rows.min() * grid.cell_m, grid.south_m + (rows.max() + 1) * grid.cell_m
    return f"{patches}, within x {west:.0f} to {east:.0f} and y {south:.0f} to {north:.0f}"


def _to_known(values: Float[NDArray, "ny nx"], grid: Grid) -> tuple[Float[NDArray, "ny nx"], Float[NDArray, "ny nx"]]:
    """Distance [m] to the nearest cell with a value, infinite if there is none, and that cell's value."""
    unknown = np.isnan(values)
    if unknown.all():
        return np.full(values.shape, np.inf), values
    distance, (row, column) = ndimage.distance_transform_edt(unknown, return_indices=True)
    return distance * grid.cell_m, values[row, column]
