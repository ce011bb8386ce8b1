"""Height of the sun over the horizon.

Source: the solar calculator of NOAA's Global Monitoring Laboratory, which follows Meeus, Astronomical Algorithms
(1998), chapter 25: good to about 0.02° between 1900 and 2100, here without refraction.
"""

import numpy as np
import pandas as pd
from jaxtyping import Float
from numpy.typing import NDArray

HORIZON = -0.833
"""Height of the sun's centre [degrees] at sunrise and sunset: half its disc and the refraction at the horizon."""


def solar_elevation(
    time: pd.Series, longitude: Float[NDArray, " n"], latitude: Float[NDArray, " n"]
) -> Float[NDArray, " n"]:
    """Height of the sun's centre over the horizon [degrees].

    Args:
        time: moments in UTC.
        longitude: east of Greenwich [degrees].
        latitude: north of the equator [degrees].
    """
    minutes_utc = (time - time.dt.normalize()).dt.total_seconds().to_numpy(dtype=float) / 60
    days = (time - pd.Timestamp("2000-01-01T12:00Z")).dt.total_seconds().to_numpy(dtype=float) / 86400
    declination, equation_min = _sun(days / 36525)
    hour_angle = np.radians((minutes_utc + equation_min + 4 * longitude) / 4 - 180)
    up = np.radians(latitude)
    sine = np.sin(up) * np.sin(declination) + np.cos(up) * np.cos(declination) * np.cos(hour_angle)
    return np.degrees(np.arcsin(np.clip(sine, -1.0, 1.0)))


def equation_of_time(time: pd.Series) -> Float[NDArray, " n"]:
    """Apparent minus mean solar time [min].

    Args:
        time: moments in UTC.
    """
    days = (time - pd.Timestamp("2000-01-01T12:00Z")).dt.total_seconds().to_numpy(dtype=float) / 86400
    return _sun(days / 36525)[1]


def _sun(t: Float[NDArray, " n"]) -> tuple[Float[NDArray, " n"], Float[NDArray, " n"]]:
    """Declination [rad] and equation of time [min], t in Julian centuries since 2000-01-01 12:00."""
    mean_longitude = np.radians((280.46646 + t * (36000.76983 + 0.0003032 * t)) % 360)
    anomaly = np.radians(357.52911 + t * (35999.05029 - 0.0001537 * t))
    eccentricity = 0.016708634 - t * (0.000042037 + 0.0000001267 * t)
    centre = (
        np.sin(anomaly) * (1.914602 - t * (0.004817 + 0.000014 * t))
        + np.sin(2 * anomaly) * (0.019993 - 0.000101 * t)
        + np.sin(3 * anomaly) * 0.000289
    )
    node = np.radians(125.04 - 1934.136 * t)
    apparent = mean_longitude + np.radians(centre - 0.00569 - 0.00478 * np.sin(node))
    seconds = 21.448 - t * (46.815 + t * (0.00059 - t * 0.001813))
    obliquity = np.radians(23 + (26 + seconds / 60) / 60 + 0.00256 * np.cos(node))
    y = np.tan(obliquity / 2) ** 2
    equation = (
        y * np.sin(2 * mean_longitude)
        - 2 * eccentricity * np.sin(anomaly)
        + 4 * eccentricity * y * np.sin(anomaly) * np.cos(2 * mean_longitude)
        - 0.5 * y**2 * np.sin(4 * mean_longitude)
        - 1.25 * eccentricity**2 * np.sin(2 * anomaly)
    )
    return np.arcsin(np.sin(obliquity) * np.sin(apparent)), 4 * np.degrees(equation)
