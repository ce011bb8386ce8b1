"""GeoTIFF rasters: the window around the grid, carried onto its cells.

Only that window is read, and only if it is of a size that fits in memory. No-data pixels are NaN. Tilted rasters are
read like others.
"""

import warnings
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pyproj
import rasterio
from affine import Affine
from jaxtyping import Float
from numpy.typing import NDArray
from pyproj.exceptions import CRSError
from rasterio.errors import CRSError as RasterCRSError
from rasterio.errors import NotGeoreferencedWarning, RasterioError
from rasterio.warp import Resampling, reproject, transform_bounds
from rasterio.windows import Window

from bayesrange._errors import StudyError
from bayesrange.study._grid import Frame

MOST_PIXELS = 64_000_000  # read at once: 0.5 GB as numbers, and as much again while they are carried onto the grid
_MOST_BLOCK_BYTES = 512_000_000  # a file is unpacked block by block, however small the window
_MARGIN_CELLS = 2
_SAME = 1e-6  # share by which a pixel may be smaller than a cell and still be of its size


@dataclass(frozen=True)
class Raster:
    """The part of a source raster that is needed; NaN where it has no data."""

    values: Float[NDArray, "rows columns"]
    transform: Affine
    crs: pyproj.CRS
    file: str


def read_raster(path: Path, file: str, frame: Frame, crs: pyproj.CRS, band: int | None = None) -> Raster:
    """One band of a GeoTIFF around the grid, scale and offset of the file applied.

    Args:
        path: where it is.
        file: what the user calls it.
        frame: the grid's cells.
        crs: the study's reference system.
        band: which band, from 1; None if the file has but one.

    Raises:
        StudyError: unreadable, too large, no reference system, no overlap, several bands and none named.
    """
    if path.is_dir():
        raise StudyError(f"{file}: this is a folder; expected a GeoTIFF file.")
    if not path.is_file():
        raise StudyError(f"{file}: there is no such file beside the study file.")
    try:
        with _opened(path) as source:
            system = _system(source, file)
            band = _band(source, file, band)
            window = _window(source, frame, crs)
            if window is None:
                raise StudyError(f"{file}: the raster does not overlap the study area; check its reference system.")
            _refuse_too_large(source, window, band, file)
            values = source.read(band, window=window, out_dtype="float64")
            values[source.read_masks(band, window=window) == 0] = np.nan
            values *= source.scales[band - 1]
            values += source.offsets[band - 1]
            transform = source.window_transform(window)
    except (RasterioError, RasterCRSError, CRSError) as error:
        raise StudyError(f"{file}: this cannot be read as a raster (expected GeoTIFF): {error}.") from None
    if np.isinf(values).any():
        raise StudyError(f"{file}: the raster has infinite values in the study area; mark them as no data.")
    return Raster(values, transform, system, file)


def onto_cells(raster: Raster, frame: Frame, crs: pyproj.CRS) -> Float[NDArray, "ny nx"]:
    """The mean over each cell; pixels at least as large as a cell are read bilinearly at its centre."""
    return warp(raster, frame, crs, 1, Resampling.average if finer(raster, frame, crs) else Resampling.bilinear)


def commonest_in_cells(raster: Raster, frame: Frame, crs: pyproj.CRS) -> Float[NDArray, "ny nx"]:
    """The value that takes most of each cell; of pixels at least as large as a cell the one at its centre."""
    return warp(raster, frame, crs, 1, Resampling.mode if finer(raster, frame, crs) else Resampling.nearest)


def finer(raster: Raster, frame: Frame, crs: pyproj.CRS) -> bool:
    """Whether its pixels are smaller than the cells."""
    return _pixel_m(raster, crs) < frame.cell_m * (1 - _SAME)


def warp(raster: Raster, frame: Frame, crs: pyproj.CRS, parts: int, how: Resampling) -> Float[NDArray, "rows columns"]:
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


def _opened(path: Path) -> rasterio.DatasetReader:
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", NotGeoreferencedWarning)  # answered by a StudyError of our own
        return rasterio.open(path, driver="GTiff")


def _system(source: rasterio.DatasetReader, file: str) -> pyproj.CRS:
    if source.crs is None:
        raise StudyError(f"{file}: the raster does not say its reference system; save it with one.")
    if not abs(source.transform.determinant) > 0:
        raise StudyError(f"{file}: the raster's pixels have no size; save it anew with its place on the ground.")
    return pyproj.CRS.from_user_input(source.crs)


def _band(source: rasterio.DatasetReader, file: str, band: int | None) -> int:
    if band is None and source.count > 1:
        names = [f"{i + 1} ({name})" if name else str(i + 1) for i, name in enumerate(source.descriptions)]
        raise StudyError(
            f"{file}: the raster has {source.count} bands; say which is meant by band = …: "
            f"{', '.join(names[:12])}{' …' if len(names) > 12 else ''}."
        )
    if band is not None and band > source.count:
        raise StudyError(f"{file}: there is no band {band}; the raster has {source.count}.")
    band = band or 1
    if source.dtypes[band - 1].startswith("complex"):
        raise StudyError(f"{file}: band {band} holds complex numbers; expected plain ones.")
    return band


def _refuse_too_large(source: rasterio.DatasetReader, window: Window, band: int, file: str) -> None:
    if window.width * window.height > MOST_PIXELS:
        raise StudyError(
            f"{file}: the part around the study area has {window.width:.0f} × {window.height:.0f} pixels, more than "
            f"the {MOST_PIXELS // 1_000_000} million that are read at once; save it with larger pixels "
            "(an eighth of a cell is fine enough)."
        )
    rows, columns = source.block_shapes[band - 1]
    size = rows * columns * np.dtype(source.dtypes[band - 1]).itemsize
    size *= source.count if source.interleaving is not None and source.interleaving.name == "pixel" else 1
    if size > _MOST_BLOCK_BYTES:
        raise StudyError(
            f"{file}: the file is packed in pieces of {columns} × {rows} pixels ({size / 1e9:.1f} GB), of which even "
            "a small part needs the whole; save it in tiles."
        )


def _window(source: rasterio.DatasetReader, frame: Frame, crs: pyproj.CRS) -> Window | None:
    """The pixels around the grid, or None if there are none."""
    edge = _MARGIN_CELLS * frame.cell_m
    west, south = frame.west_m - edge, frame.south_m - edge
    east, north = frame.west_m + frame.nx * frame.cell_m + edge, frame.south_m + frame.ny * frame.cell_m + edge
    box = transform_bounds(crs.to_wkt(), source.crs, west, south, east, north)
    corners = [_applied(~source.transform, x, y) for x in box[::2] for y in box[1::2]]
    if not np.isfinite(corners).all():
        return None
    (left, right), (top, bottom) = ((min(c[k] for c in corners), max(c[k] for c in corners)) for k in (0, 1))
    left, top = max(int(np.floor(left)) - 1, 0), max(int(np.floor(top)) - 1, 0)
    right, bottom = min(int(np.ceil(right)) + 1, source.width), min(int(np.ceil(bottom)) + 1, source.height)
    return Window(left, top, right - left, bottom - top) if right > left and bottom > top else None


def _pixel_m(raster: Raster, crs: pyproj.CRS) -> float:
    """Edge of a pixel amid the raster [m]: root of its area in the study's reference system."""
    rows, columns = raster.values.shape
    corners = [_applied(raster.transform, columns / 2 + i, rows / 2 + j) for i, j in ((0, 0), (1, 0), (0, 1))]
    x, y = pyproj.Transformer.from_crs(raster.crs, crs, always_xy=True).transform(*np.transpose(corners))
    return float(np.sqrt(abs((x[1] - x[0]) * (y[2] - y[0]) - (x[2] - x[0]) * (y[1] - y[0]))))


def _applied(t: Affine, x: float, y: float) -> tuple[float, float]:
    return t.a * x + t.b * y + t.c, t.d * x + t.e * y + t.f
