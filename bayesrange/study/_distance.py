"""Distance to the nearest feature of a vector file: GeoPackage, GeoJSON or a zipped shapefile."""

import json
import warnings
import zipfile
from pathlib import Path

import geopandas
import numpy as np
import pyogrio
import pyproj
import shapely
from jaxtyping import Float
from numpy.typing import NDArray
from pyogrio.errors import DataLayerError, DataSourceError

from bayesrange._errors import StudyError
from bayesrange.study._grid import Frame
from bayesrange.study._settings_file import nearest

ENDINGS = (".gpkg", ".geojson", ".json", ".zip")
_MOST_FEATURES = 2_000_000
_MOST_UNZIPPED = 2_000_000_000  # bytes
_PARTS = 4  # a cell's distance is the mean over 4 × 4 places in it
_BEND_M = 1000.0  # edges are cut this often before they are reprojected, so that they bend as they should


def distance_to_features(
    path: Path, file: str, table: str | None, frame: Frame, crs: pyproj.CRS, cap_m: float | None
) -> tuple[Float[NDArray, "ny nx"], list[str]]:
    """Mean distance [m] over each cell to the nearest point, line or polygon (0 within polygons), and remarks.

    Args:
        path: where the vector file is.
        file: what the user calls it.
        table: which of its tables; None if it has but one.
        frame: the grid's cells.
        crs: the study's reference system.
        cap_m: distances above this count as this [m].

    Raises:
        StudyError: unreadable, too large, no features, no reference system, several tables and none named.
    """
    shapes, said = read_features(path, file, table, crs)
    edge = frame.cell_m / _PARTS
    x = frame.west_m + edge * (np.arange(frame.nx * _PARTS) + 0.5)
    y = frame.south_m + edge * (np.arange(frame.ny * _PARTS) + 0.5)
    distance = _nearest_m(shapes, *(a.ravel() for a in np.meshgrid(x, y)))
    if cap_m is not None:
        distance = np.minimum(distance, cap_m)
    return distance.reshape(frame.ny, _PARTS, frame.nx, _PARTS).mean(axis=(1, 3)), said


def read_features(path: Path, file: str, table: str | None, crs: pyproj.CRS) -> tuple[NDArray[np.object_], list[str]]:
    """The shapes of a vector file in the study's reference system, blank ones left out; and what the reader remarks."""
    source = _source(path, file)
    with warnings.catch_warnings(record=True) as remarks:
        warnings.simplefilter("always")
        try:
            found = _features(source, file, table)
        except StudyError:
            raise
        except (DataSourceError, DataLayerError, ValueError, shapely.errors.ShapelyError) as error:
            raise StudyError(f"{file}: this cannot be read as a vector file: {error}.") from None
    said = [f"{file}: on reading: {text}" for text in dict.fromkeys(str(remark.message) for remark in remarks)]
    return _carried(found, path, file, crs), said


def _features(source: str, file: str, table: str | None) -> object:
    names = [str(name) for name in pyogrio.list_layers(source)[:, 0]]
    table = _table(names, file, table)
    number = pyogrio.read_info(source, layer=table, force_feature_count=True)["features"]
    if number > _MOST_FEATURES:
        raise StudyError(
            f"{file}: there are {number:,} features, more than the {_MOST_FEATURES:,} that are read; "
            "keep those near the study area."
        )
    return geopandas.read_file(source, layer=table, columns=[])


def _source(path: Path, file: str) -> str:
    """What to open, once the file is known to be what its ending says."""
    ending = path.suffix.lower()
    if ending not in ENDINGS:
        raise StudyError(f"{file}: this is none of {', '.join(ENDINGS)}; save it as a GeoPackage.")
    if path.is_dir():
        raise StudyError(f"{file}: this is a folder; expected a {ending} file.")
    if not path.is_file():
        raise StudyError(f"{file}: there is no such file beside the study file.")
    with path.open("rb") as opened:
        start = opened.read(64).lstrip(b"\xef\xbb\xbf \t\r\n")
    expected = {".gpkg": (b"SQLite format 3", "a GeoPackage"), ".zip": (b"PK", "a zipped shapefile")}
    sign, kind = expected.get(ending, (b"{", "GeoJSON"))
    if not start.startswith(sign):
        raise StudyError(f"{file}: this is not {kind}, whatever its name says; save it again.")
    return _zipped_shapefile(path, file) if ending == ".zip" else str(path)


def _zipped_shapefile(path: Path, file: str) -> str:
    try:
        with zipfile.ZipFile(path) as archive:
            members = archive.infolist()
    except (zipfile.BadZipFile, OSError) as error:
        raise StudyError(f"{file}: this cannot be read as a zip file: {error}.") from None
    size = sum(member.file_size for member in members)
    if size > _MOST_UNZIPPED:
        raise StudyError(
            f"{file}: this unzips to {size / 1e9:.1f} GB, more than the {_MOST_UNZIPPED / 1e9:.0f} GB that are read; "
            "keep the features near the study area."
        )
    shapes = [m.filename for m in members if m.filename.lower().endswith(".shp") and "__MACOSX" not in m.filename]
    if len(shapes) != 1:
        raise StudyError(f"{file}: expected one shapefile (.shp with .shx, .dbf and .prj) in it, got {len(shapes)}.")
    return f"/vsizip/{{{path.resolve()}}}/{shapes[0]}"


def _table(names: list[str], file: str, wanted: str | None) -> str:
    if not names:
        raise StudyError(f"{file}: there is no table of features in it.")
    if wanted is None and len(names) > 1:
        raise StudyError(
            f"{file}: there are {len(names)} tables in it, so say which is meant by table = "
            f"{' or '.join(f'"{name}"' for name in names[:6])}{' …' if len(names) > 6 else ''}."
        )
    if wanted is not None and wanted not in names:
        close = nearest(wanted, names)
        hint = f'did you mean "{close}"?' if close else f"it has {', '.join(names[:6])}."
        raise StudyError(f'{file}: there is no table "{wanted}" in it; {hint}')
    return wanted or names[0]


def _should_be_degrees(path: Path) -> bool:
    """Whether it is GeoJSON without the older "crs" member."""
    if path.suffix.lower() not in (".geojson", ".json"):
        return False
    try:
        return "crs" not in json.loads(path.read_text(encoding="utf-8-sig"))
    except (UnicodeDecodeError, json.JSONDecodeError):
        return True


def _carried(found: object, path: Path, file: str, crs: pyproj.CRS) -> NDArray[np.object_]:
    if not isinstance(found, geopandas.GeoDataFrame):
        raise StudyError(f"{file}: the features have no places; expected points, lines or polygons.")
    shapes = found.geometry[~(found.geometry.isna() | found.geometry.is_empty)].force_2d()
    if shapes.empty:
        raise StudyError(f"{file}: there is no feature in it; expected points, lines or polygons.")
    if shapes.crs is None:
        raise StudyError(f"{file}: the file does not say its reference system; save it with one.")
    if np.abs(shapes.total_bounds).max() > 180 and _should_be_degrees(path):
        raise StudyError(
            f"{file}: the coordinates look metric, but GeoJSON is in longitude and latitude unless it has a "
            '"crs" member; save it in EPSG:4326, or as a GeoPackage.'
        )
    if not np.isfinite(shapes.total_bounds).all():
        raise StudyError(f"{file}: a feature has a coordinate that is no number; mend or take out the feature.")
    if shapes.crs != crs:
        shapes = shapes.segmentize(_BEND_M / 111_320 if shapes.crs.is_geographic else _BEND_M).to_crs(crs)
    near = shapes[np.isfinite(shapes.bounds).all(axis=1)]
    if near.empty:
        raise StudyError(f"{file}: the features lie where [study] crs does not reach; check both reference systems.")
    return near.to_numpy()


def _nearest_m(shapes: NDArray, x: Float[NDArray, " n"], y: Float[NDArray, " n"]) -> Float[NDArray, " n"]:
    """Distance [m] from each place to the nearest shape; quick for long lines, which are searched edge by edge."""
    singles = shapely.get_parts(shapely.get_parts(shapes))  # twice: a collection may hold collections of one kind
    dims = shapely.get_dimensions(singles)
    rings = shapely.get_rings(singles[dims == 2])
    corners, of = shapely.get_coordinates(np.concatenate([singles[dims == 1], rings]), return_index=True)
    along = np.flatnonzero(of[1:] == of[:-1])
    edges = shapely.linestrings(np.stack([corners[along], corners[along + 1]], axis=1))
    places = shapely.points(x, y)
    targets = np.concatenate([np.atleast_1d(edges), singles[dims == 0]])
    which, distance = shapely.STRtree(targets).query_nearest(places, all_matches=False, return_distance=True)
    found = np.full(len(places), np.inf)
    found[which[0]] = distance
    polygons = singles[dims == 2]
    place, polygon = shapely.STRtree(polygons).query(places)  # whose boxes overlap
    shapely.prepare(polygons)
    found[place[shapely.intersects(polygons[polygon], places[place])]] = 0.0
    return found
