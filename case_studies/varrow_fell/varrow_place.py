"""The invented place: outline of the fell, its lake, and the layers of cover and voles.

Varrow Fell does not exist: its coordinates lie in open sea. The place is the same for every seed of the simulator.
Arrays here have row 0 in the SOUTH. Units: metres in EPSG:32629, % for cover, 1/ha for voles.
"""

from dataclasses import dataclass

import numpy as np
import shapely
from scipy.ndimage import gaussian_filter
from scipy.special import expit

CRS = "EPSG:32629"
CELL_M = 50.0
PIXEL_M = 25.0  # of cover and voles
LAKE_PIXEL_M = 12.5
MARGIN_M = 200.0  # the layers reach this far beyond the cells
SUB_CELLS = 8  # per cell edge, for the share of a cell that is dry land in the area
ORIGIN_M = (500_000.0, 6_500_000.0)  # about 59° N 9° W, far from any coast
COVER_SEED, VOLES_SEED = 11, 12


@dataclass(frozen=True)
class Place:
    """A study area on square cells, with a lake and one layer that animals select.

    Attributes:
        area: the outline [m].
        west_m: west edge of the cells [m].
        south_m: south edge of the cells [m].
        share: (ny, nx) share of each cell that is dry land in the area, 0..1.
        lake: (rows, columns) of LAKE_PIXEL_M over the same ground as the cells; True on water.
        cover: (ny, nx) mean cover of each cell [%].
        cover_pixels: cover, (rows, columns) of PIXEL_M, MARGIN_M beyond the cells on each side [%].
        voles_pixels: voles, on the same pixels [1/ha].
    """

    area: shapely.Polygon
    west_m: float
    south_m: float
    share: np.ndarray
    lake: np.ndarray
    cover: np.ndarray
    cover_pixels: np.ndarray
    voles_pixels: np.ndarray

    @property
    def cover_mean_sd(self) -> tuple[float, float]:
        """Mean and standard deviation of cover over the dry land of the area [%]."""
        return mean_sd(self.cover, self.share)

    def habitable(self, xy: np.ndarray) -> np.ndarray:
        """Whether each place (n, 2) [m] is in the area and not in the lake."""
        column, row = np.floor((xy - (self.west_m, self.south_m)) / LAKE_PIXEL_M).astype(int).T
        rows, columns = self.lake.shape
        known = (column >= 0) & (column < columns) & (row >= 0) & (row < rows)
        dry = known.copy()
        dry[known] = ~self.lake[row[known], column[known]]
        dry[dry] = shapely.contains_xy(self.area, *xy[dry].T)
        return dry


class CoverReader:
    """Standardised cover at any habitable place: bilinear between cell centres, weights of cells without land left out.

    Mean 0 and standard deviation 1 over the dry land; 0 everywhere where cover is constant.
    """

    def __init__(self, place: Place) -> None:
        mean, sd = place.cover_mean_sd
        inside = place.share > 0
        self._weight = np.pad(inside.astype(float), 1)
        self._value = np.pad(np.where(inside, (place.cover - mean) / (sd if sd > 0 else 1.0), 0.0), 1)
        self._first = np.array([place.west_m - CELL_M / 2, place.south_m - CELL_M / 2])
        self.lowest, self.highest = float(self._value[1:-1, 1:-1][inside].min()), float(self._value.max())

    def __call__(self, xy: np.ndarray) -> np.ndarray:
        """Cover (n,) in standard deviations from its mean at places (n, 2) [m] in cells with land."""
        return bilinear(self._value, self._first, CELL_M, xy) / bilinear(self._weight, self._first, CELL_M, xy)


def bilinear(nodes: np.ndarray, first_m: np.ndarray, spacing_m: float, xy: np.ndarray) -> np.ndarray:
    """Values (n,) at places (n, 2) [m], between nodes (rows, columns) the first of which is at `first_m` (x, y)."""
    along, up = ((xy - first_m) / spacing_m).T
    column, row = along.astype(int), up.astype(int)
    right, upper = along - column, up - row
    south = nodes[row, column] * (1 - right) + nodes[row, column + 1] * right
    north = nodes[row + 1, column] * (1 - right) + nodes[row + 1, column + 1] * right
    return south * (1 - upper) + north * upper


def mean_sd(values: np.ndarray, share: np.ndarray) -> tuple[float, float]:
    """Mean and standard deviation over the cells, each weighing as much as the dry land in it."""
    mean = np.average(values, weights=share)
    return float(mean), float(np.sqrt(np.average((values - mean) ** 2, weights=share)))


def make_place(area: shapely.Polygon, water: shapely.Polygon | None = None, layers: bool = True) -> Place:
    """Lay the cells over an area, cut the lake into pixels and draw the layers.

    Args:
        area: outline [m].
        water: shore of the lake [m]; None for no lake.
        layers: False gives layers that are zero everywhere.
    """
    west, south, east, north = area.bounds
    west, south = np.floor(west / CELL_M) * CELL_M, np.floor(south / CELL_M) * CELL_M
    nx, ny = (int(np.ceil((far - near) / CELL_M)) for near, far in ((west, east), (south, north)))
    corner = (west, south)
    per_cell = int(CELL_M / LAKE_PIXEL_M)
    lake = _centres_in(water, corner, LAKE_PIXEL_M, (ny * per_cell, nx * per_cell))
    land = _centres_in(area, corner, CELL_M / SUB_CELLS, (ny * SUB_CELLS, nx * SUB_CELLS))
    land &= ~np.kron(lake, np.ones((SUB_CELLS // per_cell,) * 2, bool))
    share = land.reshape(ny, SUB_CELLS, nx, SUB_CELLS).mean(axis=(1, 3))

    per_cell, beyond = int(CELL_M / PIXEL_M), int(MARGIN_M / CELL_M)
    shape = ((ny + 2 * beyond) * per_cell, (nx + 2 * beyond) * per_cell)
    cover = np.round(100.0 * expit(_smooth_noise(COVER_SEED, shape, 300.0) - 0.4)) if layers else np.zeros(shape)
    voles = np.round(20.0 * np.exp(0.6 * _smooth_noise(VOLES_SEED, shape, 200.0))) if layers else np.zeros(shape)
    cells = cover.reshape(ny + 2 * beyond, per_cell, nx + 2 * beyond, per_cell).mean(axis=(1, 3))
    return Place(area, west, south, share, lake, cells[beyond:-beyond, beyond:-beyond], cover, voles)


def _centres_in(
    outline: shapely.Polygon | None, corner_m: tuple[float, float], edge_m: float, shape: tuple[int, int]
) -> np.ndarray:
    """Squares (rows, columns) whose centre lies in the outline."""
    if outline is None:
        return np.zeros(shape, bool)
    x = corner_m[0] + edge_m * (np.arange(shape[1]) + 0.5)
    y = corner_m[1] + edge_m * (np.arange(shape[0]) + 0.5)
    shapely.prepare(outline)
    return shapely.contains_xy(outline, *np.meshgrid(x, y))


def _smooth_noise(seed: int, shape: tuple[int, int], smoothing_m: float) -> np.ndarray:
    """White noise under a Gaussian of this sd [m], scaled to sd 1: correlated by exp(−d²/4 smoothing²)."""
    noise = np.random.default_rng(seed).standard_normal(shape)
    smooth = gaussian_filter(noise, smoothing_m / PIXEL_M, mode="wrap")
    return smooth / smooth.std()


def varrow_fell() -> Place:
    """Return the fell of this case study."""
    angle = np.radians(np.arange(0, 360, 10))
    far = 8300.0 * (1 + 0.06 * np.sin(3 * angle + 1.0) + 0.03 * np.sin(5 * angle + 0.3))
    area = np.column_stack([9000.0 + 1.06 * far * np.cos(angle), 8600.0 + far * np.sin(angle)])
    angle = np.radians(np.arange(0, 360, 15))
    far = 1 + 0.12 * np.sin(2 * angle + 0.7) + 0.08 * np.sin(5 * angle)
    along, across = 720.0 * far * np.cos(angle), 330.0 * far * np.sin(angle)
    lake = np.column_stack([9050.0 + 0.8 * along - 0.6 * across, 8550.0 + 0.6 * along + 0.8 * across])
    return make_place(*(shapely.Polygon(np.round(ring, -1) + ORIGIN_M) for ring in (area, lake)))
