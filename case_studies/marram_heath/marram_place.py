"""The invented place: outline of the heath, setts, adults and the earthworm layer.

Marram Heath does not exist: its coordinates lie in open sea. The place is the same for every seed of the simulator.
Rasters here have row 0 in the SOUTH. Units: metres in EPSG:32631, kg/ha for earthworms.
"""

from dataclasses import dataclass

import numpy as np
import shapely
from scipy.ndimage import gaussian_filter
from scipy.special import expit

CRS = "EPSG:32631"
CELL_M = 100.0
PIXEL_M = 50.0
MARGIN_M = 300.0  # the layer reaches this far beyond the cells
SUB_CELLS = 8  # per cell edge, for the share of a cell that lies in the area
ORIGIN_M = (500_000.0, 6_200_000.0)  # about 56° N 3° E, far from any coast
EARTHWORM_SEED = 7

# Metres from ORIGIN_M, anticlockwise from the south-west; the bay opens to the south-east.
OUTLINE_M = (
    (1130, 720), (1790, 480), (2440, 390), (3050, 520), (3560, 430), (4020, 560), (4330, 910), (4480, 1310),
    (4790, 1590), (5180, 1660), (5490, 1430), (5620, 1040), (5960, 760), (6370, 860), (6690, 1320), (6840, 1930),
    (6770, 2540), (6890, 3150), (6800, 3780), (6560, 4390), (6230, 5010), (5690, 5480), (5060, 5720), (4390, 5840),
    (3720, 5690), (3010, 5790), (2330, 5610), (1680, 5360), (1120, 4980), (710, 4390), (520, 3720), (440, 3010),
    (560, 2330), (490, 1650), (730, 1100),
)  # fmt: skip
# Group, sett (metres from ORIGIN_M), adults.
GROUPS = (
    ("Alder", 2440, 3610, 4),
    ("Bracken", 3510, 4010, 6),
    ("Curlew", 2960, 2560, 5),
    ("Sallow", 4040, 3010, 3),
    ("Tern", 4730, 3920, 7),
)


@dataclass(frozen=True)
class Place:
    """A study area on square cells, with its groups and one layer.

    Attributes:
        area: the outline [m].
        west_m: west edge of the cells [m].
        south_m: south edge of the cells [m].
        share: (ny, nx) share of each cell inside the area, 0..1.
        names: name of each group.
        setts_m: (groups, 2) home centres [m].
        adults: (groups,) adults that mark.
        layer: (ny + 2, nx + 2) mean of the raw layer over each cell and over a ring of one cell around them.
        pixels: the raw layer, (rows, columns) of PIXEL_M, MARGIN_M beyond the cells on each side.
    """

    area: shapely.Polygon
    west_m: float
    south_m: float
    share: np.ndarray
    names: tuple[str, ...]
    setts_m: np.ndarray
    adults: np.ndarray
    layer: np.ndarray
    pixels: np.ndarray

    @property
    def a0_km2(self) -> float:
        """Area per adult [km²], the unit of scent."""
        return self.area.area / 1e6 / self.adults.sum()

    @property
    def layer_mean_sd(self) -> tuple[float, float]:
        """Mean and standard deviation of the layer over the cells of the area, each cell counted once."""
        values = self.layer[1:-1, 1:-1][self.share > 0]
        return float(values.mean()), float(values.std())

    @property
    def standard_layer(self) -> np.ndarray:
        """(ny + 2, nx + 2) the layer with mean 0 and sd 1 over the cells of the area; 0 where it is constant."""
        mean, sd = self.layer_mean_sd
        return (self.layer - mean) / (sd if sd > 0 else 1.0)


def make_place(
    area: shapely.Polygon, names: tuple[str, ...], setts_m: np.ndarray, adults: np.ndarray, earthworms: bool = True
) -> Place:
    """Lay the cells over an area and draw its layer.

    Args:
        area: outline [m].
        names: name of each group.
        setts_m: (groups, 2) home centres [m].
        adults: (groups,) adults that mark.
        earthworms: False gives a layer that is zero everywhere.
    """
    west, south, east, north = area.bounds
    west, south = np.floor(west / CELL_M) * CELL_M, np.floor(south / CELL_M) * CELL_M
    nx, ny = (int(np.ceil((far - near) / CELL_M)) for near, far in ((west, east), (south, north)))
    sub_x = west + (np.arange(nx * SUB_CELLS) + 0.5) * CELL_M / SUB_CELLS
    sub_y = south + (np.arange(ny * SUB_CELLS) + 0.5) * CELL_M / SUB_CELLS
    shapely.prepare(area)
    sub_inside = shapely.contains_xy(area, *np.meshgrid(sub_x, sub_y))
    share = sub_inside.reshape(ny, SUB_CELLS, nx, SUB_CELLS).mean(axis=(1, 3))

    per_cell, beyond = int(CELL_M / PIXEL_M), int(MARGIN_M / CELL_M)
    shape = ((ny + 2 * beyond) * per_cell, (nx + 2 * beyond) * per_cell)
    pixels = earthworm_pixels(shape) if earthworms else np.zeros(shape)
    cells = pixels.reshape(ny + 2 * beyond, per_cell, nx + 2 * beyond, per_cell).mean(axis=(1, 3))
    ring = beyond - 1
    layer = cells[ring : ring + ny + 2, ring : ring + nx + 2]
    return Place(area, west, south, share, names, np.asarray(setts_m, float), np.asarray(adults), layer, pixels)


def earthworm_pixels(shape: tuple[int, int]) -> np.ndarray:
    """Draw a smooth field between 50 and 900 kg/ha, in whole kg/ha.

    White noise under a Gaussian of sd 0.4 km has the correlation exp(−d²/4·0.4²): 1/e at 0.8 km. The logistic
    function keeps it inside the two bounds without cutting anything off.
    """
    noise = np.random.default_rng(EARTHWORM_SEED).standard_normal(shape)
    smooth = gaussian_filter(noise, 400.0 / PIXEL_M, mode="wrap")
    return np.round(50.0 + 850.0 * expit(1.3 * smooth / smooth.std() - 0.5))


def marram_heath() -> Place:
    """Return the heath of this case study."""
    area = shapely.Polygon(np.array(OUTLINE_M, float) + ORIGIN_M)
    setts = np.array([[x, y] for _, x, y, _ in GROUPS], float) + ORIGIN_M
    return make_place(area, tuple(g[0] for g in GROUPS), setts, np.array([g[3] for g in GROUPS]))
