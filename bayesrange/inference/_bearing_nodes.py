"""Fixes from bearings as nodes on the grid: the product of the bearings' own densities instead of an ellipse.

A bearing θ taken from a station has the von Mises density of κ = 1/sd² about the azimuth of the animal's place z. The
product over a set, as a function of z, is no ellipse where lines cross narrowly or a station is near: simulated
ellipses of three bearings with sd 6° held 92.5 % of true places instead of 95, regions of the product 95.0 %. It is
divided by its sum over the nodes, a constant that no parameter changes.
"""

import numpy as np
import pandas as pd

from bayesrange.study import Grid

FINEST, COARSEST = 24, 2
"""Nodes along a cell's edge, at the most and at the least."""

_BLOCK = 8  # cells along the edge of a block
_PER_SD = 3  # nodes along the short semi-axis of the fix's ellipse

type Bearings = dict[int, np.ndarray]
"""By the fix's position: x, y of the station [m], azimuth from grid north [rad] and κ of each bearing (bearings, 4)."""


def bearings_of(fixes: pd.DataFrame, rows: pd.DataFrame | None) -> Bearings:
    """The bearings of a study's fixes, from its table `bearings`."""
    if rows is None or rows.empty:
        return {}
    position = fixes[["file", "row"]].reset_index(drop=True).reset_index(names="fix")
    own = rows.merge(position, on=["file", "row"])
    kappa = 1 / np.radians(own["sd_deg"].to_numpy(float)) ** 2
    values = np.column_stack([own[["x", "y"]], np.radians(own["azimuth_deg"].to_numpy(float)), kappa])
    return {int(fix): values[at] for fix, at in own.groupby("fix").indices.items()}


def bearing_nodes(
    grid: Grid, place: np.ndarray, ellipse: np.ndarray, bearings: np.ndarray, reach: float
) -> tuple[np.ndarray, np.ndarray, np.ndarray] | None:
    """Easting, northing and share of each node on habitable ground; None where the ellipse does as well.

    That is so where it is much smaller than a cell. Nodes less likely than the fix's place by `reach` sds are left out.

    Args:
        grid: the study's cells.
        place: the fix [m].
        ellipse: sd along the long axis and across it [m], then its azimuth, which is not used.
        bearings: one fix's, as in `Bearings`.
        reach: sds of a normal error beyond which nothing is counted.
    """
    parts = int(np.ceil(_PER_SD * grid.cell_m / ellipse[1])) if ellipse[1] > 0 else FINEST + 1
    if parts > FINEST or ellipse[0] < grid.cell_m / 2:
        return None
    lowest = log_density(place[None], bearings)[0] - reach**2 / 2
    centres = _likely_cells(grid, bearings, lowest)
    parts = max(parts, COARSEST)
    at = ((np.arange(parts) + 0.5) / parts - 0.5) * grid.cell_m
    step = np.stack(np.meshgrid(at, at), axis=-1).reshape(-1, 2)
    nodes = (centres[:, None] + step).reshape(-1, 2)
    height = log_density(nodes, bearings)
    kept = height > lowest
    nodes, share = nodes[kept], np.exp(height[kept] - lowest)
    share /= share.sum()
    ground = grid.habitable_at(nodes[:, 0], nodes[:, 1])
    if not ground.any():
        return None
    return nodes[ground, 0], nodes[ground, 1], share[ground]


def _likely_cells(grid: Grid, bearings: np.ndarray, lowest: float) -> np.ndarray:
    """Centres of the inside cells in which the log density may reach `lowest`, (cells, 2) [m]; blocks first."""
    rows, columns = np.arange(0, grid.shape[0], _BLOCK), np.arange(0, grid.shape[1], _BLOCK)
    corner = np.stack(np.meshgrid(columns, rows), axis=-1).reshape(-1, 2)
    half = _BLOCK * grid.cell_m / 2
    middle = corner * grid.cell_m + (grid.west_m + half, grid.south_m + half)
    corner = corner[log_density(middle, bearings, blur_m=half * np.sqrt(2)) > lowest]
    within = np.stack(np.meshgrid(np.arange(_BLOCK), np.arange(_BLOCK)), axis=-1).reshape(-1, 2)
    column, row = (corner[:, None] + within).reshape(-1, 2).T
    there = (row < grid.shape[0]) & (column < grid.shape[1])
    column, row = column[there], row[there]
    inside = grid.inside[row, column]
    centres = np.column_stack([grid.x_m[column[inside]], grid.y_m[row[inside]]])
    return centres[log_density(centres, bearings, blur_m=grid.cell_m / np.sqrt(2)) > lowest]


def log_density(places: np.ndarray, bearings: np.ndarray, blur_m: float = 0.0) -> np.ndarray:
    """Sum of κ (cos(θ − μ(z)) − 1) over the bearings at each place.

    Args:
        places: (places, 2) [m].
        bearings: one fix's.
        blur_m: how far off a place may be [m]: its angle at the station is added to the sd of each bearing, so that
            what is low over all of a cell can be told from its centre.
    """
    east, north = (places[:, None, k] - bearings[None, :, k] for k in (0, 1))
    off = np.cos(bearings[:, 2] - np.arctan2(east, north)) - 1
    variance = 1 / bearings[:, 3]
    if blur_m:
        variance = variance + blur_m**2 / np.maximum(east**2 + north**2, blur_m**2)
    return (off / variance).sum(axis=1)
