"""Which way north is: azimuths from magnetic, true or a map's north to the north of the study's grid.

Angles are degrees clockwise. Convergence is the azimuth of grid north from true north, positive in a UTM zone's
north-east: true = magnetic + declination (east positive), grid = true − convergence.
"""

import numpy as np
import pyproj
from jaxtyping import Float
from numpy.typing import NDArray


def convergence(x: Float[NDArray, " n"], y: Float[NDArray, " n"], crs: pyproj.CRS) -> Float[NDArray, " n"]:
    """Azimuth of grid north from true north [degrees] at places of a reference system; 0 in longitude and latitude."""
    if crs.is_geographic or len(x) == 0:
        return np.zeros(len(x))
    to_degrees = pyproj.Transformer.from_crs(crs, crs.geodetic_crs, always_xy=True)
    longitude, latitude = to_degrees.transform(x, y)
    return np.asarray(pyproj.Proj(crs).get_factors(longitude, latitude).meridian_convergence, dtype=float)


def turned(
    azimuth: Float[NDArray, " n"],
    place: tuple[Float[NDArray, " n"], Float[NDArray, " n"]],
    source: pyproj.CRS,
    placed: tuple[Float[NDArray, " n"], Float[NDArray, " n"]],
    target: pyproj.CRS,
) -> Float[NDArray, " n"]:
    """Azimuths from the north of one reference system to that of another, from 0 to below 360; NaN where one ends.

    Args:
        azimuth: from the north of `source`.
        place: x and y in `source`.
        source: a system; longitude and latitude mean true north.
        placed: the same places in `target`.
        target: another system.
    """
    if source == target:
        return azimuth % 360
    with np.errstate(invalid="ignore"):
        return (azimuth + convergence(*place, source) - convergence(*placed, target)) % 360
