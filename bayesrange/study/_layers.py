"""Map layers from GeoTIFF, averaged onto the grid, and no-go ground on its sub-cells.

Only the part of a raster around the grid is read. No-data pixels count neither in an average nor as no-go.
"""

import warnings
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pyproj
import rasterio
from affine import Affine
from jaxtyping import Bool, Float
from numpy.typing import NDArray
from rasterio.errors import NotGeoreferencedWarning, RasterioError
from rasterio.warp import Resampling, reproject, transform_bounds
from rasterio.windows import Window

from bayesrange._errors import StudyError
from bayesrange.study._grid import SUB, Frame, Grid

_MARGIN_CELLS = 2
_SAME = 1e-6  # share by which a pixel may be smaller than a cell and still be of its size


@dataclass(frozen=True)
class Layer:
    """A map layer on the grid.

    Attributes:
        name: as in the study file.
        values: mean over the cell in raw units; NaN where the cell is not inside.
        unit: as in the study file.
        file: as in the study file.
    """

    name: str
    values: Float[NDArray, "ny nx"]
    unit: str
    file: str


@dataclass(frozen=True)
class _Raster:
    """The part of a source raster that is needed; NaN where it has no data."""

    values: Float[NDArray, "rows columns"]
    transform: Affine
    crs: pyproj.CRS
    name: str


def read_layer(path: Path, file: str, name: str, unit: str, grid: Grid, wanted: bool) -> tuple[Layer, list[str]]:
    """One layer on the grid, and what has to be said.

    Pixels smaller than a cell are averaged over the cell, others are read bilinearly at its centre: a raster on
    exactly the grid's cells passes unchanged.

    Args:
        path: where the GeoTIFF is.
        file: what the user calls it.
        name: the layer's name.
        unit: the unit of its values.
        grid: the study's grid.
        wanted: whether the model uses it; then missing cells and a constant layer are errors, else remarks.

    Raises:
        StudyError: unreadable, no reference system, no overlap, and what `wanted` adds.
    """
    frame = Frame(grid.west_m, grid.south_m, grid.cell_m, *grid.shape)
    raster = _read_raster(path, file, frame, grid.crs)
    values = np.where(grid.inside, _onto_cells(raster, frame, grid.crs), np.nan)
    problems = list(_problems(values, grid.inside, name, file))
    if problems and wanted:
        raise StudyError(problems[0])
    return Layer(name, values, unit, file), problems


def no_go_sub_cells(path: Path, file: str, frame: Frame, crs: pyproj.CRS) -> Bool[NDArray, "rows columns"]:
    """Sub-cells (row 0 south) whose nearest pixel is above 0; ground off the raster is not no-go.

    Raises:
        StudyError: unreadable, no reference system, no overlap.
    """
    raster = _read_raster(path, file, frame, crs)
    values = _warp(raster, frame, crs, SUB, Resampling.nearest)
    return np.nan_to_num(values, nan=0.0) > 0


def _problems(values: np.ndarray, inside: np.ndarray, name: str, file: str) -> list[str]:
    found = values[inside]
    missing = int(np.isnan(found).sum())
    if missing:
        return [
            f"[layers.{name}] {file}: {missing} of {found.size} cells inside the area have no value; "
            "give a raster that covers the whole area, or draw the area within it."
        ]
    if np.ptp(found) <= 1e-9 * np.abs(found).max():
        return [
            f"[layers.{name}] {file}: every cell inside the area has the value {found[0]:g}, so nothing can be "
            "learnt from it; take it out of [model] layers."
        ]
    return []


def _read_raster(path: Path, file: str, frame: Frame, crs: pyproj.CRS) -> _Raster:
    if not path.is_file():
        raise StudyError(f"{file}: there is no such file beside the study file.")
    try:
        with _opened(path) as source:
            if source.crs is None:
                raise StudyError(f"{file}: the raster does not say its reference system; save it with one.")
            if source.count != 1:
                raise StudyError(f"{file}: the raster has {source.count} bands; expected one, so save the wanted band.")
            system = pyproj.CRS.from_user_input(source.crs)
            window = _window(source, frame, crs)
            if window is None:
                raise StudyError(f"{file}: the raster does not overlap the study area; check its reference system.")
            read = source.read(1, window=window, masked=True)
            values = read.astype(float).filled(np.nan) * source.scales[0] + source.offsets[0]
            transform = source.window_transform(window)
    except RasterioError as error:
        raise StudyError(f"{file}: this cannot be read as a raster: {error}.") from None
    if np.isinf(values).any():
        raise StudyError(f"{file}: the raster has infinite values in the study area; mark them as no data.")
    return _Raster(values, transform, system, file)


def _opened(path: Path) -> rasterio.DatasetReader:
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", NotGeoreferencedWarning)  # answered by a StudyError of our own
        return rasterio.open(path)


def _window(source: rasterio.DatasetReader, frame: Frame, crs: pyproj.CRS) -> Window | None:
    """The pixels around the grid, or None if there are none."""
    whole = Window(0, 0, source.width, source.height)
    edge = _MARGIN_CELLS * frame.cell_m
    west, south = frame.west_m - edge, frame.south_m - edge
    east, north = frame.west_m + frame.nx * frame.cell_m + edge, frame.south_m + frame.ny * frame.cell_m + edge
    box = transform_bounds(crs.to_wkt(), source.crs, west, south, east, north)
    tilted = source.transform.b != 0 or source.transform.d != 0
    if tilted:
        return whole
    corners = [_applied(~source.transform, x, y) for x, y in ((box[0], box[1]), (box[2], box[3]))]
    (left, right), (top, bottom) = (sorted(c[k] for c in corners) for k in (0, 1))
    left, top = max(int(np.floor(left)) - 1, 0), max(int(np.floor(top)) - 1, 0)
    right, bottom = min(int(np.ceil(right)) + 1, source.width), min(int(np.ceil(bottom)) + 1, source.height)
    return Window(left, top, right - left, bottom - top) if right > left and bottom > top else None


def _onto_cells(raster: _Raster, frame: Frame, crs: pyproj.CRS) -> Float[NDArray, "ny nx"]:
    finer = _pixel_m(raster, frame, crs) < frame.cell_m * (1 - _SAME)
    return _warp(raster, frame, crs, 1, Resampling.average if finer else Resampling.bilinear)


def _pixel_m(raster: _Raster, frame: Frame, crs: pyproj.CRS) -> float:
    """Edge of a pixel amid the raster [m]: root of its area in the study's reference system."""
    rows, columns = raster.values.shape
    corners = [_applied(raster.transform, columns / 2 + i, rows / 2 + j) for i, j in ((0, 0), (1, 0), (0, 1))]
    x, y = pyproj.Transformer.from_crs(raster.crs, crs, always_xy=True).transform(*np.transpose(corners))
    return float(np.sqrt(abs((x[1] - x[0]) * (y[2] - y[0]) - (x[2] - x[0]) * (y[1] - y[0]))))


def _warp(
    raster: _Raster, frame: Frame, crs: pyproj.CRS, parts: int, how: Resampling
) -> Float[NDArray, "rows columns"]:
    """The raster on the frame's cells, each edge cut into `parts`; row 0 south, NaN where it has no data."""
    onto = np.full((frame.ny * parts, frame.nx * parts), np.nan)
    reproject(
        raster.values,
        onto,
        src_transform=raster.transform,
        src_crs=raster.crs.to_wkt(),
        src_nodata=np.nan,
        dst_transform=frame.transform(parts),
        dst_crs=crs.to_wkt(),
        dst_nodata=np.nan,
        resampling=how,
        tolerance=0.0,
    )
    return onto[::-1].copy()


def _applied(t: Affine, x: float, y: float) -> tuple[float, float]:
    return t.a * x + t.b * y + t.c, t.d * x + t.e * y + t.f
