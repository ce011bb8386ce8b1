"""Reference systems: which one the study computes in, and points carried into it.

x is the easting or longitude and y the northing or latitude everywhere, whatever axis order a system declares.
"""

import geopandas
import numpy as np
import pyproj
from jaxtyping import Float
from numpy.typing import NDArray
from pyproj.exceptions import CRSError, ProjError

from bayesrange._errors import StudyError
from bayesrange.study._texts import shown

_WARN_AT, _REFUSE_AT = 0.01, 0.05


def parse_crs(text: str, key: str) -> pyproj.CRS:
    """A reference system from the user's text; `key` names where it stands."""
    try:
        return pyproj.CRS.from_user_input(text)
    except CRSError:
        raise StudyError(
            f'{key}: "{shown(text)}" is no reference system that is known; expected a code such as "EPSG:32631".'
        ) from None


def metric_crs(text: str, key: str) -> pyproj.CRS:
    """A projected reference system in metres.

    Raises:
        StudyError: unknown, in degrees, or in another unit.
    """
    crs = parse_crs(text, key)
    units = {axis.unit_name for axis in crs.axis_info[:2]}
    if not crs.is_projected or units != {"metre"}:
        unit = "degrees" if crs.is_geographic else " and ".join(sorted(units)) or "another unit"
        raise StudyError(
            f'{key}: "{text}" is in {unit}; expected a projected system in metres, such as the UTM zone of the area.'
        )
    return crs


def utm_for(longitude: Float[NDArray, " n"], latitude: Float[NDArray, " n"], crs: pyproj.CRS) -> pyproj.CRS:
    """The UTM zone in which most of these points lie [degrees]."""
    points = geopandas.GeoSeries(geopandas.points_from_xy(longitude, latitude), crs=crs)
    try:
        return points.estimate_utm_crs()
    except (RuntimeError, ProjError):
        raise StudyError(
            '[study] crs: no UTM zone fits these fixes; give a metric system such as crs = "EPSG:32631".'
        ) from None


def look_like_degrees(x: Float[NDArray, " n"], y: Float[NDArray, " n"]) -> bool:
    """Whether all points could be longitudes and latitudes; never so for no points at all."""
    return len(x) > 0 and bool(np.all(np.abs(x) <= 180) and np.all(np.abs(y) <= 90))


def carry(
    x: Float[NDArray, " n"], y: Float[NDArray, " n"], source: pyproj.CRS, target: pyproj.CRS
) -> tuple[Float[NDArray, " n"], Float[NDArray, " n"]]:
    """Points from one reference system to another; infinite where the target does not reach."""
    if source == target or len(x) == 0:
        return x, y
    along, up = pyproj.Transformer.from_crs(source, target, always_xy=True).transform(x, y)
    return np.asarray(along, dtype=float), np.asarray(up, dtype=float)


def crs_text(crs: pyproj.CRS) -> str:
    """The code of a reference system if it has one ("EPSG:32631"), else its name."""
    authority = crs.to_authority()
    return ":".join(authority) if authority else crs.name


def scale_warnings(crs: pyproj.CRS, x: float, y: float) -> list[str]:
    """What to say about a projection that stretches distances around a point [m].

    Raises:
        StudyError: by more than 5 % (Web Mercator away from the equator, a UTM zone far off).
    """
    longitude, latitude = pyproj.Transformer.from_crs(crs, crs.geodetic_crs, always_xy=True).transform(x, y)
    factors = pyproj.Proj(crs).get_factors(longitude, latitude)
    worst = max(abs(factors.meridional_scale - 1), abs(factors.parallel_scale - 1))
    if not worst > _WARN_AT:
        return []
    told = f"[study] crs: {crs_text(crs)} stretches distances by {100 * worst:.0f} % at this area"
    if worst > _REFUSE_AT:
        raise StudyError(f"{told}; choose one made for it, such as its UTM zone.")
    return [f"{told}; lengths and areas are off by as much."]
