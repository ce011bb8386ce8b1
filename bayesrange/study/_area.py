"""The study area: one polygon from GeoJSON (or a GeoPackage), in the study's reference system."""

import json
from pathlib import Path
from typing import Any

import geopandas
import numpy as np
import pyproj
import shapely
from pyogrio.errors import DataSourceError

from bayesrange._errors import StudyError
from bayesrange.study._texts import shown

_ENDINGS = (".geojson", ".json", ".gpkg")
_PIECES_PER_SIDE = 50  # an edge is cut this often before it is reprojected, so that it bends as it should


def read_area(path: Path, name: str, crs: pyproj.CRS) -> shapely.Polygon | shapely.MultiPolygon:
    """The union of the file's polygons, in `crs` [m].

    GeoJSON is in longitude and latitude unless it has the older "crs" member.

    Raises:
        StudyError: no such file, no polygon, one that crosses itself, metric coordinates without a "crs" member.
    """
    if path.suffix.lower() not in _ENDINGS:
        raise StudyError(f"[study] area: {name} is none of {', '.join(_ENDINGS)}; save the area as GeoJSON.")
    if not path.is_file():
        raise StudyError(f"[study] area: there is no file {name} beside the study file.")
    geojson = _geojson(path, name) if path.suffix.lower() != ".gpkg" else None
    try:
        table = geopandas.read_file(path)
    except (DataSourceError, ValueError, shapely.errors.ShapelyError) as error:
        raise StudyError(f"{name}: this cannot be read as an area: {error}.") from None
    area = _polygon(table, name)
    if table.crs is None:
        raise StudyError(f"{name}: the file does not say its reference system; save it with one.")
    if geojson is not None and "crs" not in geojson and np.abs(area.bounds).max() > 180:
        raise StudyError(
            f"{name}: the coordinates look metric, but GeoJSON is in longitude and latitude unless it has a "
            '"crs" member; save it in EPSG:4326, or add "crs": '
            '{"type": "name", "properties": {"name": "urn:ogc:def:crs:EPSG::32631"}} with your system\'s number.'
        )
    if table.crs != crs:
        west, south, east, north = area.bounds
        fine = shapely.segmentize(area, max(east - west, north - south) / _PIECES_PER_SIDE)
        area = geopandas.GeoSeries([fine], crs=table.crs).to_crs(crs).iloc[0]
    if not np.isfinite(area.bounds).all():
        raise StudyError(f"{name}: the area lies where [study] crs does not reach; check both reference systems.")
    return area


def _geojson(path: Path, name: str) -> dict[str, Any]:
    try:
        content = json.loads(path.read_text(encoding="utf-8-sig"), parse_constant=_no_constant)
    except ValueError as error:  # wrong bytes, wrong JSON
        raise StudyError(f"{name}: this is not valid GeoJSON: {error}.") from None
    except RecursionError:
        raise StudyError(f"{name}: brackets are nested too deep for GeoJSON; save it again.") from None
    if not isinstance(content, dict) or "type" not in content:
        raise StudyError(f'{name}: this is not GeoJSON; expected an object with a "type".')
    _check_crs_member(content, name)
    return content


def _no_constant(text: str) -> float:
    raise ValueError(f"{text} is no number")


def _check_crs_member(content: dict[str, Any], name: str) -> None:
    """A "crs" member that is not understood would be passed over, and the coordinates taken for degrees.

    Raises:
        StudyError: it names no known reference system.
    """
    if content.get("crs") is None:
        return
    member = content["crs"]
    properties = member.get("properties") if isinstance(member, dict) else None
    given = str(properties.get("name") if isinstance(properties, dict) else member)
    try:
        pyproj.CRS.from_user_input(given)
    except pyproj.exceptions.CRSError:
        raise StudyError(
            f'{name}: its "crs" member says "{shown(given)}", which is no reference system that is known; expected a '
            'name such as "urn:ogc:def:crs:EPSG::32631".'
        ) from None


def _polygon(table: geopandas.GeoDataFrame, name: str) -> shapely.Polygon | shapely.MultiPolygon:
    shapes = [shapely.force_2d(shape) for shape in table.geometry if shape is not None and not shape.is_empty]
    if not shapes:
        raise StudyError(f"{name}: there is no polygon in it; expected the outline of the study area.")
    for shape in shapes:
        if not isinstance(shape, shapely.Polygon | shapely.MultiPolygon):
            raise StudyError(f"{name}: expected polygons, got a {shape.geom_type}; close the outline to a polygon.")
        if not shape.is_valid:
            raise StudyError(
                f"{name}: the polygon is not valid ({shapely.is_valid_reason(shape)}); "
                "mend the outline where it crosses or touches itself."
            )
    union = shapely.union_all(shapes)
    if not isinstance(union, shapely.Polygon | shapely.MultiPolygon):
        raise StudyError(f"{name}: the polygons do not join to an area; draw one outline.")
    return union
