"""The sun's clock and the rounding of coordinates."""

import numpy as np
import pandas as pd
import pyproj
import pytest

from bayesrange.study import solar_clock
from bayesrange.study._rounding import METRES_PER_DEGREE, rounding
from bayesrange.study._sun import equation_of_time


@pytest.mark.parametrize(
    ("day", "minutes"), [("2031-02-11", -14.2), ("2031-05-14", 3.7), ("2031-07-26", -6.5), ("2031-11-03", 16.4)]
)
def test_equation_of_time_has_its_known_extremes(day, minutes):
    # Turning points of the equation of time as almanacs give them (from memory), to a tenth of a minute.
    assert equation_of_time(pd.Series([pd.Timestamp(day, tz="UTC")]))[0] == pytest.approx(minutes, abs=0.15)


def test_solar_noon_is_later_in_the_west():
    fixes = pd.DataFrame({"time": pd.to_datetime(["2031-04-15T12:00Z"] * 2), "x": [0.0, -15.0], "y": [50.0, 50.0]})
    hour, day = solar_clock(fixes, pyproj.CRS("EPSG:4326"))
    assert hour[0] == pytest.approx(12.0, abs=0.02)  # the equation of time is near 0 in mid April
    assert hour[0] - hour[1] == pytest.approx(1.0)
    assert day.all()


@pytest.mark.parametrize(("decimals", "step"), [(0, 1.0), (2, 0.01), (-2, 100.0)])
def test_rounding_is_read_off_the_coordinates(decimals, step):
    x, y = np.random.default_rng(3).uniform(1e5, 9e5, (2, 200)).round(decimals)
    assert rounding(x, y, degrees=False) == pytest.approx(step)


def test_rounding_of_degrees_is_in_metres():
    x, y = np.random.default_rng(3).uniform(0, 50, (2, 200)).round(5)
    assert rounding(x, y, degrees=True) == pytest.approx(1e-5 * METRES_PER_DEGREE)
