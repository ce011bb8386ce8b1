"""The sun's clock at fixes: solar hour, and whether it is day."""

import numpy as np
import pandas as pd
import pyproj
from jaxtyping import Bool, Float
from numpy.typing import NDArray

from bayesrange.study._crs import carry
from bayesrange.study._sun import HORIZON, equation_of_time, solar_elevation


def solar_clock(fixes: pd.DataFrame, crs: pyproj.CRS) -> tuple[Float[NDArray, " n"], Bool[NDArray, " n"]]:
    """Apparent solar hour (0 to 24, noon at 12) and whether the sun is up, at each fix.

    Args:
        fixes: with time (UTC), x and y [m].
        crs: of x and y.
    """
    x, y = fixes["x"].to_numpy(dtype=float), fixes["y"].to_numpy(dtype=float)
    longitude, latitude = carry(x, y, crs, pyproj.CRS("EPSG:4326"))
    time: pd.Series = fixes["time"]
    utc = (time - time.dt.normalize()).dt.total_seconds().to_numpy(dtype=float) / 3600
    hour = (utc + equation_of_time(time) / 60 + longitude / 15) % 24
    return np.asarray(hour), solar_elevation(time, longitude, latitude) > HORIZON
