"""The grid: square cells over the area, and how a place on it is read.

Row 0 is south, column 0 west. A cell is inside if any of its 8 × 8 sub-cells has its centre in the area and not on
no-go ground. Reading is bilinear between the centres of inside cells, weights renormalised (docs/mathematics).
"""

from dataclasses import dataclass

import numpy as np
import pyproj
import rasterio.features
import shapely
from affine import Affine
from jaxtyping import Bool, Float, Int
from numpy.typing import NDArray
from rasterio.transform import from_origin
from scipy import ndimage

from bayesrange._errors import StudyError

SUB = 8  # sub-cells along a cell's edge
_MOST_ALONG = 100_000  # cells along a side, beyond which the grid is not even laid out to tell its size
LARGEST = 400  # cells along a side, above which a fit would take days
_EDGE = 0.06  # an overhang by this share of a cell holds no sub-cell's centre (those lie 1/16 in): no cells for it


@dataclass(frozen=True)
class Grid:
    """Square cells that cover the study area; `habitable` and `basis_share` say how much of each counts.

    Attributes:
        west_m: western edge [m].
        south_m: southern edge [m].
        cell_m: edge of a cell [m].
        crs: the study's reference system.
        habitable: share of the cell inside the area and not no-go, from 8 × 8 sub-cells.
        basis_share: integral of the cell's renormalised bilinear basis over the habitable sub-cells [cell areas];
            exactly 1 away from edges.
        sub_cells: which of the 8 × 8 sub-cells are habitable, row 0 in the south.
    """

    west_m: float
    south_m: float
    cell_m: float
    crs: pyproj.CRS
    habitable: Float[NDArray, "ny nx"]
    basis_share: Float[NDArray, "ny nx"]
    sub_cells: Bool[NDArray, "rows columns"]

    @property
    def shape(self) -> tuple[int, int]:
        """Numbers of rows and columns."""
        ny, nx = self.habitable.shape
        return ny, nx

    @property
    def x_m(self) -> Float[NDArray, " nx"]:
        """Eastings of the cells' centres [m], ascending."""
        return self.west_m + self.cell_m * (np.arange(self.shape[1]) + 0.5)

    @property
    def y_m(self) -> Float[NDArray, " ny"]:
        """Northings of the cells' centres [m], ascending."""
        return self.south_m + self.cell_m * (np.arange(self.shape[0]) + 0.5)

    @property
    def inside(self) -> Bool[NDArray, "ny nx"]:
        """Cells with any habitable ground."""
        return self.habitable > 0

    @property
    def habitable_km2(self) -> float:
        """Habitable area [km²]."""
        return float(self.habitable.sum() * self.cell_m**2 / 1e6)

    @property
    def transform(self) -> Affine:
        """Pixel to coordinate for a raster with its first row in the NORTH: write `values[::-1]` with it."""
        return from_origin(self.west_m, self.south_m + self.shape[0] * self.cell_m, self.cell_m, self.cell_m)

    def cell_of(
        self, x: Float[NDArray, " n"], y: Float[NDArray, " n"]
    ) -> tuple[Int[NDArray, " n"], Int[NDArray, " n"]]:
        """Row and column of the cell that holds each place [m]; −1 for both outside the grid."""
        ny, nx = self.shape
        column = np.floor((x - self.west_m) / self.cell_m)
        row = np.floor((y - self.south_m) / self.cell_m)
        outside = ~((column >= 0) & (column < nx) & (row >= 0) & (row < ny))
        return np.where(outside, -1, row).astype(np.int64), np.where(outside, -1, column).astype(np.int64)

    def habitable_at(self, x: Float[NDArray, " n"], y: Float[NDArray, " n"]) -> Bool[NDArray, " n"]:
        """Whether each place [m] lies in a habitable sub-cell."""
        column = np.floor((x - self.west_m) / self.cell_m * SUB)
        row = np.floor((y - self.south_m) / self.cell_m * SUB)
        rows, columns = self.sub_cells.shape
        within = (column >= 0) & (column < columns) & (row >= 0) & (row < rows)
        return within & self.sub_cells[np.where(within, row, 0).astype(int), np.where(within, column, 0).astype(int)]

    def bilinear(
        self, x: Float[NDArray, " n"], y: Float[NDArray, " n"]
    ) -> tuple[Int[NDArray, "n 4"], Int[NDArray, "n 4"], Float[NDArray, "n 4"]]:
        """Rows, columns and weights of the four cells between whose centres each place [m] lies.

        Weights of cells that are not inside are 0 and the others sum to 1; where none is inside all four are 0.
        """
        ny, nx = self.shape
        along, up = (x - self.west_m) / self.cell_m - 0.5, (y - self.south_m) / self.cell_m - 0.5
        column, row = np.floor(along), np.floor(up)
        right, upper = along - column, up - row
        columns = np.stack([column, column + 1, column, column + 1], axis=1)
        rows = np.stack([row, row, row + 1, row + 1], axis=1)
        weights = np.stack([(1 - right) * (1 - upper), right * (1 - upper), (1 - right) * upper, right * upper], axis=1)
        on_grid = (columns >= 0) & (columns < nx) & (rows >= 0) & (rows < ny)
        rows = np.where(on_grid, rows, 0).astype(np.int64)
        columns = np.where(on_grid, columns, 0).astype(np.int64)
        weights = np.where(on_grid & self.inside[rows, columns], weights, 0.0)
        total = weights.sum(axis=1, keepdims=True)
        return rows, columns, np.divide(weights, total, out=np.zeros_like(weights), where=total > 0)


@dataclass(frozen=True)
class Frame:
    """Where the grid's cells lie, before it is known which of them are habitable."""

    west_m: float
    south_m: float
    cell_m: float
    ny: int
    nx: int

    def transform(self, parts: int = 1) -> Affine:
        """North-up transform of the cells, each edge cut into `parts`."""
        edge = self.cell_m / parts
        return from_origin(self.west_m, self.south_m + self.ny * self.cell_m, edge, edge)


def frame_of(area: shapely.Polygon | shapely.MultiPolygon, cell_m: float) -> Frame:
    """The area's bounding box, snapped outward to multiples of the cell [m].

    Rounded coordinates (GeoJSON has 6 or 7 decimals of a degree) do not add a row of empty cells.
    """
    with np.errstate(over="ignore"):
        west, south, east, north = (np.asarray(area.bounds) / cell_m).tolist()
    if not max(east - west, north - south) < _MOST_ALONG:
        raise StudyError(
            f"[study] cell_m: cells of {cell_m:g} m would be more than {_MOST_ALONG:,} along a side of the study area; "
            "use larger ones."
        )
    first_x, first_y = int(np.floor(west + _EDGE)), int(np.floor(south + _EDGE))
    last_x, last_y = int(np.ceil(east - _EDGE)), int(np.ceil(north - _EDGE))
    if last_x <= first_x or last_y <= first_y:
        wide, high = (area.bounds[k + 2] - area.bounds[k] for k in (0, 1))
        raise StudyError(
            f"[study] cell_m: the study area is only {wide:.3g} m by {high:.3g} m, too small for cells of "
            f"{cell_m:g} m; check the area's polygon, or use smaller cells."
        )
    return Frame(first_x * cell_m, first_y * cell_m, cell_m, last_y - first_y, last_x - first_x)


def area_sub_cells(area: shapely.Polygon | shapely.MultiPolygon, frame: Frame) -> Bool[NDArray, "rows columns"]:
    """Sub-cells whose centre is in the area; row 0 south."""
    shape = (frame.ny * SUB, frame.nx * SUB)
    north_up = rasterio.features.geometry_mask([area], shape, frame.transform(SUB), invert=True)
    return north_up[::-1]


def without_scraps(
    habitable_sub_cells: Bool[NDArray, "rows columns"], frame: Frame
) -> tuple[Bool[NDArray, "rows columns"], list[str]]:
    """The ground without scraps: less than one cell of it that hangs on to the rest by a corner at the most.

    Cutting a polygon into square cells makes such scraps at its edge; without this a sound area would count as two
    pieces.

    Returns:
        The sub-cells that stay, and a sentence for the user where something was left out.
    """
    blocks = habitable_sub_cells.reshape(frame.ny, SUB, frame.nx, SUB)
    share = blocks.mean(axis=(1, 3))
    pieces, count = ndimage.label(share > 0)
    if count <= 1:
        return habitable_sub_cells, []
    size = ndimage.sum_labels(share, pieces, np.arange(1, count + 1))
    scraps = (size < 1) & (size < size.max())
    if not scraps.any():
        return habitable_sub_cells, []
    gone = np.isin(pieces, np.flatnonzero(scraps) + 1)
    lost = size[scraps].sum() * frame.cell_m**2
    said = (
        f"{int(scraps.sum())} scrap(s) of ground at the edge of the area, together {lost:.0f} m² and each less than a "
        "cell, touch the "
        "rest by a corner at the most and are left out."
    )
    return (blocks & ~gone[:, None, :, None]).reshape(habitable_sub_cells.shape), [said]


def build_grid(frame: Frame, crs: pyproj.CRS, habitable_sub_cells: Bool[NDArray, "rows columns"]) -> Grid:
    """The grid with the habitable share and basis share of each cell.

    Raises:
        StudyError: nothing habitable, or the inside cells fall into unconnected pieces.
    """
    blocks = habitable_sub_cells.reshape(frame.ny, SUB, frame.nx, SUB).swapaxes(1, 2)
    habitable = blocks.mean(axis=(2, 3))
    if not habitable.any():
        raise StudyError("[study] area: no ground is left once the no-go layers are taken out; check them.")
    refuse_pieces(habitable, frame)
    return Grid(
        frame.west_m,
        frame.south_m,
        frame.cell_m,
        crs,
        habitable,
        _basis_share(blocks, habitable > 0),
        habitable_sub_cells,
    )


def refuse_pieces(habitable: Float[NDArray, "ny nx"], frame: Frame) -> None:
    """Refuse inside cells that do not hang together by their edges: no animal could get from one to the other."""
    pieces, count = ndimage.label(habitable > 0)
    if count <= 1:
        return
    sizes = ndimage.sum_labels(habitable, pieces, np.arange(1, count + 1)) * (frame.cell_m / 1000) ** 2
    centres = ndimage.center_of_mass(habitable, pieces, np.arange(1, count + 1))
    told = []
    for k in np.argsort(-sizes)[:4]:
        row, column = centres[k]
        x, y = frame.west_m + (column + 0.5) * frame.cell_m, frame.south_m + (row + 0.5) * frame.cell_m
        told.append(f"{sizes[k]:.3g} km² around x = {x:.0f}, y = {y:.0f}")
    more = f" and {count - 4} more" if count > 4 else ""
    raise StudyError(
        f"[study] area: the habitable cells fall into {count} unconnected pieces ({'; '.join(told)}{more}); "
        "keep one piece in the area's polygon, or study them one by one."
    )


def _basis_share(blocks: Bool[NDArray, "ny nx sub sub"], inside: Bool[NDArray, "ny nx"]) -> Float[NDArray, "ny nx"]:
    """Midpoint rule over habitable sub-cells of each inside cell's renormalised bilinear weight [cell areas]."""
    ny, nx = inside.shape
    padded = np.pad(inside.astype(float), 1)
    share = np.zeros((ny + 2, nx + 2))
    offsets = (np.arange(SUB) + 0.5) / SUB
    for i, up in enumerate(offsets):
        for j, along in enumerate(offsets):
            corners = [
                (slice(1 + dy, 1 + dy + ny), slice(1 + dx, 1 + dx + nx), wy * wx)
                for dy, wy in _neighbours(up)
                for dx, wx in _neighbours(along)
            ]
            weights = [weight * padded[rows, columns] for rows, columns, weight in corners]
            total = sum(weights)
            used = blocks[:, :, i, j]
            for (rows, columns, _), weight in zip(corners, weights, strict=True):
                share[rows, columns] += np.divide(weight, total, out=np.zeros((ny, nx)), where=used)
    return share[1:-1, 1:-1] / SUB**2


def _neighbours(offset: float) -> tuple[tuple[int, float], tuple[int, float]]:
    """The cell itself and its neighbour on the nearer side, with linear weights, at an offset from 0 to 1."""
    if offset < 0.5:
        return (-1, 0.5 - offset), (0, 0.5 + offset)
    return (0, 1.5 - offset), (1, offset - 0.5)
