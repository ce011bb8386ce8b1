"""Simulated tracks: an animal about a centre (Ornstein–Uhlenbeck), moved about as a test wants it."""

import numpy as np
import pandas as pd
from scipy.signal import lfilter

START = pd.Timestamp("2031-03-01T00:00Z")


def wandering(n=1200, hours=2.0, tau_h=12.0, spread_m=600.0, seed=1):
    """Places [m] about the origin."""
    rng = np.random.default_rng(seed)
    phi = np.exp(-hours / tau_h)
    noise = spread_m * rng.normal(size=(n, 2))
    noise[1:] *= np.sqrt(1 - phi**2)
    return lfilter([1], [1, -phi], noise, axis=0)


def times(n, hours=2.0):
    return pd.Series(START + pd.to_timedelta(np.arange(n) * hours, unit="h"))


def table(place, hours=2.0, animal="A1", group="north", error_m=10.0):
    n = len(place)
    made = pd.DataFrame({"animal": animal, "time": times(n, hours), "x": place[:, 0] + 5e5, "y": place[:, 1] + 5.6e6})
    return made.assign(group=group, error_m=error_m)


def as_file(fixes):
    """The table as a user's CSV would have it."""
    time = fixes["time"].dt.strftime("%Y-%m-%dT%H:%M:%SZ")
    return fixes.assign(time=time).round({"x": 1, "y": 1})
