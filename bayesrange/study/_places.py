"""Are fixes and home centres where the model can have them."""

import numpy as np
import pandas as pd
import shapely
from jaxtyping import Bool, Float
from numpy.typing import NDArray
from scipy import ndimage
from scipy.spatial import cKDTree

from bayesrange._errors import StudyError
from bayesrange.study._grid import SUB, Grid
from bayesrange.study._tables import counted, first_few

_SDS = 3.0  # a fix may lie outside by this many standard deviations of its error, of an ellipse along its long axis


class Ground:
    """The habitable ground as fixes and homes see it: the exact polygon, less the no-go sub-cells."""

    def __init__(
        self,
        area: shapely.Polygon | shapely.MultiPolygon,
        grid: Grid,
        habitable: Bool[NDArray, "rows columns"],
        no_go: Bool[NDArray, "rows columns"],
        reading: str,
    ):
        self._area, self._grid, self._habitable, self._no_go, self._reading = area, grid, habitable, no_go, reading
        shapely.prepare(area)

    def in_area(self, x: Float[NDArray, " n"], y: Float[NDArray, " n"]) -> Bool[NDArray, " n"]:
        """Whether each place [m] is in the polygon or on its edge."""
        return np.asarray(shapely.covers(self._area, shapely.points(x, y)))

    def on_no_go(self, x: Float[NDArray, " n"], y: Float[NDArray, " n"]) -> Bool[NDArray, " n"]:
        """Whether each place [m] is on a no-go sub-cell; never so off the grid."""
        rows, columns = self._no_go.shape
        size = self._grid.cell_m / SUB
        column = np.floor((x - self._grid.west_m) / size)
        row = np.floor((y - self._grid.south_m) / size)
        on_grid = (column >= 0) & (column < columns) & (row >= 0) & (row < rows)
        return on_grid & self._no_go[np.where(on_grid, row, 0).astype(int), np.where(on_grid, column, 0).astype(int)]

    def habitable(self, x: Float[NDArray, " n"], y: Float[NDArray, " n"]) -> Bool[NDArray, " n"]:
        """Whether an animal can be at each place [m]: in the polygon, not on no-go ground, where the grid is read."""
        if self._reading == "cell":
            row, column = self._grid.cell_of(x, y)
            readable = (row >= 0) & self._grid.inside[row, column]
        else:
            readable = self._grid.bilinear(x, y)[2].any(axis=1)
        return self.in_area(x, y) & ~self.on_no_go(x, y) & readable

    def distance_m(self, x: Float[NDArray, " n"], y: Float[NDArray, " n"]) -> Float[NDArray, " n"]:
        """Distance to the nearest habitable sub-cell [m], good to half a sub-cell."""
        edge = self._habitable & ~ndimage.binary_erosion(self._habitable)
        rows, columns = np.nonzero(edge)
        size = self._grid.cell_m / SUB
        centres = np.stack([columns, rows], axis=1) * size + size / 2 + (self._grid.west_m, self._grid.south_m)
        nearest, _ = cKDTree(centres).query(np.stack([x, y], axis=1))
        return np.maximum(nearest - size / 2, 0.0)


def check_fixes(fixes: pd.DataFrame, ground: Ground, swapped: tuple[NDArray, NDArray]) -> int:
    """Refuse fixes where no animal can be; the number that are outside within their error is returned.

    Args:
        fixes: in the study's reference system.
        ground: where animals can be.
        swapped: easting and northing [m] that the fixes would have if the file's x and y were exchanged.
    """
    widest = "error_major_m" if "error_major_m" in fixes else "error_m"
    x, y, error = (fixes[c].to_numpy(dtype=float) for c in ("x", "y", widest))
    out = np.flatnonzero(~ground.habitable(x, y))
    if out.size == 0:
        return 0
    far = out[ground.distance_m(x[out], y[out]) > _SDS * error[out]]
    if far.size == 0:
        return int(out.size)
    turned = ground.in_area(*swapped)
    if turned.mean() > 0.5 > ground.in_area(x, y).mean():
        raise StudyError(
            f"{counted(far.size, 'fix', 'fixes')} outside the study area, but inside it with x and y exchanged: "
            "exchange [fixes] x and y in the study file."
        )
    raise StudyError(_where(fixes, far, ground, x, y))


def _where(fixes: pd.DataFrame, far: NDArray, ground: Ground, x: NDArray, y: NDArray) -> str:
    beyond = ~ground.in_area(x[far], y[far])
    no_go = ~beyond & ground.on_no_go(x[far], y[far])
    parts = {"outside the study area": beyond, "on no-go ground": no_go, "in no cell of the grid": ~beyond & ~no_go}
    told = []
    for what, which in parts.items():
        if which.any():
            lines = fixes.iloc[far[which]].sort_values(["file", "row"])
            rows = first_few(f"{f} line {r}" for f, r in zip(lines["file"], lines["row"], strict=True))
            told.append(f"{counted(int(which.sum()), 'fix', 'fixes')} {what} ({rows})")
    if fixes["error_m"].iloc[far].any():
        told[-1] += f", by more than {_SDS:.0f} standard deviations of their error"
    return (
        f"{'; '.join(told)}; mend or take out these rows, widen the area, give the location error by [fixes] error, "
        'or leave out those outside the area by flags = ["outside"] in [fixes.drop].'
    )


def check_homes(groups: pd.DataFrame, ground: Ground, name: str) -> None:
    """Refuse a given home centre outside the area or on no-go ground."""
    given = groups[groups["x"].notna()]
    x, y = given["x"].to_numpy(dtype=float), given["y"].to_numpy(dtype=float)
    beyond, wrong = ~ground.in_area(x, y), ~ground.habitable(x, y)
    for group, outside in zip(given["group"][wrong], beyond[wrong], strict=True):
        what = "outside the study area" if outside else "on no-go ground"
        raise StudyError(
            f'{name}: the home centre of "{group}" is {what}; mend its x and y ([study] crs), '
            "or leave them blank to have it estimated."
        )
