"""Error ellipses: semi-axes as standard deviations [m] and the azimuth of the long one [degrees from grid north]."""

import numpy as np
import pandas as pd
import pyproj
from jaxtyping import Float
from numpy.typing import NDArray

from bayesrange.study._north import turned

COLUMNS = ["error_major_m", "error_minor_m", "error_bearing_deg"]


def axes_of(covariance: Float[NDArray, "n 2 2"]) -> Float[NDArray, "n 3"]:
    """Long and short semi-axis and the azimuth of the long one, from 0 to below 180, of covariances [m²]."""
    values, vectors = np.linalg.eigh(covariance)
    azimuth = np.degrees(np.arctan2(vectors[:, 0, 1], vectors[:, 1, 1])) % 180
    return np.column_stack([np.sqrt(values[:, 1]), np.sqrt(values[:, 0]), azimuth])


def circular_sd(major: Float[NDArray, " n"], minor: Float[NDArray, " n"]) -> Float[NDArray, " n"]:
    """The standard deviation per axis of a circular error with the same mean variance [m]."""
    return np.sqrt((major**2 + minor**2) / 2)


def place_ellipses(
    table: pd.DataFrame, x: Float[NDArray, " n"], y: Float[NDArray, " n"], source: pyproj.CRS, target: pyproj.CRS
) -> pd.DataFrame:
    """The table with its ellipses turned to the north of the target; a fix without one has its error as a circle.

    Args:
        table: fixes with x and y in the source; without the columns of ellipses nothing is done.
        x: easting in the target [m].
        y: northing in the target [m].
        source: the reference system of the table.
        target: that of the study.
    """
    if COLUMNS[0] not in table:
        return table
    own = table["error_major_m"].notna().to_numpy()
    major, minor, azimuth = (table[column].to_numpy(dtype=float).copy() for column in COLUMNS)
    place = table["x"].to_numpy(dtype=float)[own], table["y"].to_numpy(dtype=float)[own]
    azimuth[own] = turned(azimuth[own], place, source, (x[own], y[own]), target) % 180
    circle = table["error_m"].to_numpy(dtype=float)
    given = [np.where(own, major, circle), np.where(own, minor, circle), np.where(own, azimuth, 0.0)]
    return table.assign(**dict(zip(COLUMNS, given, strict=True)))
