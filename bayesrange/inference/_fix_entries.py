"""Which cells a fix reads, and with what weights: location error as a fixed quadrature.

The error is integrated by Gauss–Hermite on the bilinear density: 1 node below 0.1 cell, 3 per axis to 1 cell, 5 to 2;
beyond that by the Gaussian mass of each cell. An ellipse has nodes along its own axes, as many as each axis asks for;
beyond 2 cells the Gaussian mass of strips half a cell wide across the axis. None of it depends on the parameters, so
it is done once. Fixes from bearings are read from these themselves (`_bearing_nodes.py`).
"""

from collections.abc import Iterator

import numpy as np
from scipy.special import ndtr

from bayesrange._errors import StudyError
from bayesrange.inference._bearing_nodes import Bearings, bearing_nodes
from bayesrange.study import Grid

ORDERS = ((0.1, 1), (1.0, 3), (2.0, 5))
"""Error sd in cells up to which an order serves, and the nodes per axis."""

REACH = 5.0
"""Error sds beyond which cell masses are left out (less than 1e-6 of the mass)."""


ELLIPSE = ["error_major_m", "error_minor_m", "error_bearing_deg"]
"""Columns of a study's fixes where some error is an ellipse."""

STRIP = 0.5
"""Width of the strips across a long axis of an ellipse, in cells."""

_CIRCLE = 1e-6  # an ellipse whose axes differ by less than this share is a circle


def fix_entries(
    grid: Grid,
    x: np.ndarray,
    y: np.ndarray,
    error_m: np.ndarray,
    reading: str,
    ellipse: np.ndarray | None = None,
    bearings: Bearings | None = None,
) -> tuple[np.ndarray, np.ndarray]:
    """Cells and log weights of each fix, padded to the longest.

    Args:
        grid: the study's cells.
        x: easting of each fix [m].
        y: northing [m].
        error_m: error sd per axis [m]; 0 where the place is known.
        reading: "bilinear" or "cell".
        ellipse: where some error is one: sd along the long axis and across it [m] and the azimuth of the long axis
            [degrees clockwise from grid north] of each fix (fixes, 3); with equal axes `error_m` counts.
        bearings: of fixes that are read from them and not from their ellipse, which says only where to look.

    Returns:
        Flat cell index (fixes, entries) and log weight, −inf for padding.

    Raises:
        StudyError: fixes that read no habitable ground at all, with their count.
    """
    order = np.digitize(error_m / grid.cell_m, [limit for limit, _ in ORDERS])
    pieces: list[tuple[np.ndarray, np.ndarray, np.ndarray]] = []
    if ellipse is not None:
        oblong = ellipse[:, 0] > ellipse[:, 1] * (1 + _CIRCLE)
        for fix, own in (bearings or {}).items():
            found = bearing_nodes(grid, np.array([x[fix], y[fix]]), ellipse[fix], own, REACH)
            if found is not None:
                pieces.append(_merged(grid, fix, *found, reading))
                order[fix], oblong[fix] = -1, False
        order[oblong] = -1
        pieces.extend(_oblong(grid, np.flatnonzero(oblong), x, y, ellipse, reading))
    for level, (_, nodes) in enumerate(ORDERS):
        chosen = np.flatnonzero(order == level)
        pieces.append(_hermite(grid, chosen, x, y, error_m, nodes, reading))
    pieces.extend(_cell_masses(grid, np.flatnonzero(order == len(ORDERS)), x, y, error_m, reading))
    fix = np.concatenate([piece[0] for piece in pieces])
    cell = np.concatenate([piece[1] for piece in pieces])
    share = np.concatenate([piece[2] for piece in pieces])
    return _pad(fix, cell, share, x.size, grid)


def _hermite(
    grid: Grid, chosen: np.ndarray, x: np.ndarray, y: np.ndarray, error_m: np.ndarray, nodes: int, reading: str
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Entries of Gauss–Hermite nodes; nodes off habitable ground carry no density."""
    at, weight = np.polynomial.hermite_e.hermegauss(nodes)
    weight = weight / weight.sum()
    step_x, step_y = (step.ravel() for step in np.meshgrid(at, at))
    node_weight = np.outer(weight, weight).ravel()
    fix = np.repeat(chosen, nodes**2)
    node_x = (x[chosen, None] + error_m[chosen, None] * step_x).ravel()
    node_y = (y[chosen, None] + error_m[chosen, None] * step_y).ravel()
    mass = np.tile(node_weight, chosen.size)
    if nodes > 1:  # a single node is the fix itself, which the study reader has found on habitable ground
        mass = mass * grid.habitable_at(node_x, node_y)
    return _read_nodes(grid, fix, node_x, node_y, mass, reading)


def _read_nodes(
    grid: Grid, fix: np.ndarray, node_x: np.ndarray, node_y: np.ndarray, mass: np.ndarray, reading: str
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Entries of places with a mass each."""
    if reading == "cell":
        rows, columns = grid.cell_of(node_x, node_y)
        within = (rows >= 0) & (rows < grid.shape[0]) & (columns >= 0) & (columns < grid.shape[1])
        flat = np.where(within, rows * grid.shape[1] + columns, 0)
        mass = np.where(within & grid.inside.ravel()[flat], mass, 0.0)
        return fix, flat, mass
    rows, columns, corner = grid.bilinear(node_x, node_y)
    flat = rows * grid.shape[1] + columns
    return np.repeat(fix, 4), flat.ravel(), (corner * mass[:, None]).ravel()


def _oblong(
    grid: Grid, chosen: np.ndarray, x: np.ndarray, y: np.ndarray, ellipse: np.ndarray, reading: str
) -> Iterator[tuple[np.ndarray, np.ndarray, np.ndarray]]:
    """Entries of elliptical errors, merged within each fix as a long axis has many nodes."""
    corner_x, corner_y = np.meshgrid(grid.x_m[[0, -1]], grid.y_m[[0, -1]])
    for k in chosen:
        furthest = np.hypot(corner_x - x[k], corner_y - y[k]).max() + grid.cell_m
        (along, mass_along), (across, mass_across) = (_axis_nodes(sd, grid.cell_m, furthest) for sd in ellipse[k, :2])
        s, c = np.sin(np.radians(ellipse[k, 2])), np.cos(np.radians(ellipse[k, 2]))
        node_x = (x[k] + s * along[:, None] + c * across).ravel()
        node_y = (y[k] + c * along[:, None] - s * across).ravel()
        mass = np.outer(mass_along, mass_across).ravel()
        if mass.size > 1:
            ground = grid.habitable_at(node_x, node_y)
            node_x, node_y, mass = node_x[ground], node_y[ground], mass[ground]
        yield _merged(grid, int(k), node_x, node_y, mass, reading)


def _merged(
    grid: Grid, fix: int, node_x: np.ndarray, node_y: np.ndarray, mass: np.ndarray, reading: str
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Entries of one fix's nodes, one a cell."""
    _, cell, share = _read_nodes(grid, np.full(mass.size, fix), node_x, node_y, mass, reading)
    total = np.bincount(cell, share, minlength=grid.shape[0] * grid.shape[1])
    used = np.flatnonzero(total)
    return np.full(used.size, fix), used, total[used]


def _axis_nodes(sd: float, cell_m: float, furthest_m: float) -> tuple[np.ndarray, np.ndarray]:
    """Offsets along one axis of an ellipse [m] and the Gaussian mass of each."""
    level = int(np.digitize(sd / cell_m, [limit for limit, _ in ORDERS]))
    if level < len(ORDERS):
        at, weight = np.polynomial.hermite_e.hermegauss(ORDERS[level][1])
        return sd * at, weight / weight.sum()
    reach = min(REACH * sd, furthest_m)
    edges = np.linspace(-reach, reach, int(np.ceil(2 * reach / (STRIP * cell_m))) + 1)
    return (edges[:-1] + edges[1:]) / 2, np.diff(ndtr(edges / sd))


def _cell_masses(
    grid: Grid, chosen: np.ndarray, x: np.ndarray, y: np.ndarray, error_m: np.ndarray, reading: str
) -> Iterator[tuple[np.ndarray, np.ndarray, np.ndarray]]:
    """Entries of wide errors: the Gaussian mass of each cell, times its share in the density's normaliser."""
    share = grid.basis_share if reading == "bilinear" else grid.habitable
    half = grid.cell_m / 2
    for k in chosen:
        reach = REACH * error_m[k]
        columns = np.flatnonzero(np.abs(grid.x_m - x[k]) < reach + half)
        rows = np.flatnonzero(np.abs(grid.y_m - y[k]) < reach + half)
        along_x, along_y = (
            ndtr((centre + half - at) / error_m[k]) - ndtr((centre - half - at) / error_m[k])
            for centre, at in ((grid.x_m[columns], x[k]), (grid.y_m[rows], y[k]))
        )
        mass = np.outer(along_y, along_x) * share[np.ix_(rows, columns)]
        flat = rows[:, None] * grid.shape[1] + columns[None, :]
        yield np.full(mass.size, k), flat.ravel(), mass.ravel()


def _pad(fix: np.ndarray, cell: np.ndarray, share: np.ndarray, fixes: int, grid: Grid) -> tuple[np.ndarray, np.ndarray]:
    """Entries of the same fix and cell merged, in rows of equal length."""
    kept = share > 0
    cells = grid.shape[0] * grid.shape[1]
    key, place = np.unique(fix[kept].astype(np.int64) * cells + cell[kept], return_inverse=True)
    merged = np.bincount(place, weights=share[kept], minlength=key.size)
    owner, index = key // cells, key % cells
    count = np.bincount(owner, minlength=fixes)
    if (count == 0).any():
        lost = np.flatnonzero(count == 0)
        raise StudyError(
            f"fixes: {lost.size} fix(es) lie where no cell is habitable (the first is number {lost[0] + 1} of those "
            "used); "
            "check them against the area and the no-go layers."
        )
    width = int(count.max())
    slot = np.arange(key.size) - np.repeat(np.cumsum(count) - count, count)
    padded = np.full((fixes, width), np.argmax(grid.inside.ravel()), dtype=np.int32)
    log_share = np.full((fixes, width), -np.inf)
    padded[owner, slot] = index
    log_share[owner, slot] = np.log(merged)
    return padded, log_share
