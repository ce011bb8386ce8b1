import numpy as np
import pandas as pd
import pytest

from bayesrange.study._sun import HORIZON, solar_elevation


def elevation(time, longitude, latitude):
    return solar_elevation(pd.Series(pd.to_datetime([time], utc=True)), np.array([longitude]), np.array([latitude]))[0]


def test_the_worked_example_of_reda_and_andreas():
    # Reda & Andreas (2004), Solar position algorithm, NREL/TP-560-34302, table A5.1: zenith 50.11162° with refraction
    # at 820 mbar (0.016°, from memory as the rest) on 2003-10-17 12:30:30, UTC-7.
    found = elevation("2003-10-17T19:30:30Z", -105.1786, 39.742476)
    assert found == pytest.approx(90 - 50.11162 - 0.016, abs=0.02)  # the formula's own accuracy


def test_the_sun_at_noon_on_the_tropics_and_the_poles():
    # The obliquity of the ecliptic is 23.4367° in 2023; solstice 2023-06-21 14:58 UTC (almanac; from memory).
    time = pd.Series(pd.date_range("2023-06-21T12:00", "2023-06-21T18:00", freq="1min", tz="UTC"))
    at = np.full(len(time), -44.5)  # solar noon near 14:58 UTC
    assert solar_elevation(time, at, np.full(len(time), 23.4367)).max() == pytest.approx(90, abs=0.06)
    assert solar_elevation(time, at, np.full(len(time), 90.0)) == pytest.approx(23.4367, abs=0.02)


def test_sunrise_and_sunset_are_twelve_hours_apart_at_the_equator_at_an_equinox():
    # Day is longer than 12 h by the sun's disc and refraction: 4 min per degree, 2 × 0.833° (closed form).
    time = pd.Series(pd.date_range("2023-03-20", periods=1440, freq="1min", tz="UTC"))
    day = solar_elevation(time, np.zeros(1440), np.zeros(1440)) > HORIZON
    assert day.sum() == pytest.approx(720 + 2 * 4 * 0.833, abs=1.5)
