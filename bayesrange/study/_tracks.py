"""Fixes as tracks: the steps of every animal in one set of arrays, and what is usual among steps of one interval.

Units: km, h, km/h. A step belongs to the class of intervals whose length doubles from one to the next (½ h, 1 h, 2 h,
…), because speed over a day is less than speed over a minute.
"""

from dataclasses import dataclass

import numpy as np
import pandas as pd
from jaxtyping import Bool, Float, Int
from numpy.typing import NDArray

_FEWEST_STEPS = 30  # in a class, to tell what is usual in it
_ERRORS = 3.0  # standard deviations of the location error by which a step may be too long


@dataclass(frozen=True)
class Tracks:
    """Fixes sorted by animal and time, no animal twice at one time.

    Attributes:
        animal: number of each fix's animal, ascending from 0.
        hours: time of each fix since the first of all [h].
        place_km: easting and northing [km].
        error_km: standard deviation of the location error per axis [km].
    """

    animal: Int[NDArray, " n"]
    hours: Float[NDArray, " n"]
    place_km: Float[NDArray, "n 2"]
    error_km: Float[NDArray, " n"]

    @property
    def bounds(self) -> Int[NDArray, " animals_and_one"]:
        """Where each animal's fixes begin, and where the last one's end."""
        return np.flatnonzero(np.diff(self.animal, prepend=-1, append=-1))

    def steps(self) -> "Steps":
        """All steps from one fix to the next of the same animal."""
        start = np.flatnonzero(np.diff(self.animal) == 0)
        return Steps.between(self, start, start + 1)

    def part(self, kept: Bool[NDArray, " n"]) -> "Tracks":
        """The tracks that some of the fixes make."""
        return Tracks(self.animal[kept], self.hours[kept], self.place_km[kept], self.error_km[kept])


@dataclass(frozen=True)
class Steps:
    """Steps by the positions of the fixes that they join."""

    start: Int[NDArray, " steps"]
    end: Int[NDArray, " steps"]
    animal: Int[NDArray, " steps"]
    interval_h: Float[NDArray, " steps"]
    length_km: Float[NDArray, " steps"]
    sure_km: Float[NDArray, " steps"]  # what is left of the length if the location error made it longer

    @staticmethod
    def between(tracks: Tracks, start: Int[NDArray, " steps"], end: Int[NDArray, " steps"]) -> "Steps":
        """The steps from some fixes to others."""
        length = np.hypot(*(tracks.place_km[end] - tracks.place_km[start]).T)
        slack = _ERRORS * np.hypot(tracks.error_km[start], tracks.error_km[end])
        interval = tracks.hours[end] - tracks.hours[start]
        return Steps(start, end, tracks.animal[start], interval, length, np.maximum(length - slack, 0.0))

    @property
    def interval_class(self) -> Int[NDArray, " steps"]:
        """Which doubling of the interval each step belongs to."""
        return np.rint(np.log2(self.interval_h)).astype(np.int64)


def tracks_of(fixes: pd.DataFrame) -> Tracks:
    """Tracks of a table that is sorted by animal and time.

    Args:
        fixes: columns animal, time, x, y [m] and error_m [m].
    """
    codes, _ = pd.factorize(fixes["animal"])
    time = fixes["time"].astype("datetime64[ns, UTC]").to_numpy(dtype="datetime64[ns]")
    hours = (time - time.min()) / np.timedelta64(1, "h") if len(time) else np.zeros(0)
    place = fixes[["x", "y"]].to_numpy(dtype=float) / 1000
    return Tracks(codes.astype(np.int64), hours, place, fixes["error_m"].to_numpy(dtype=float) / 1000)


def usual_most(
    values: Float[NDArray, " steps"], steps: Steps, spreads: float, times: float
) -> Float[NDArray, " steps"]:
    """For each step, the most that is usual for its animal and class of intervals; infinite where none can be told.

    The larger of exp(m + `spreads` s) and `times` the 95 % quantile of the values above 0, m the median of their logs
    and s their upper spread (median distance above m, over 0.6745: the sd if the logs are normal). Long rests make the
    lower half of the logs wide, hence the upper spread; a heavy upper tail makes s wide, short trips from a place of
    rest the quantile. A class with fewer than 30 steps takes the largest limit of its animal's other classes, an animal
    without any the largest of all.
    """
    table = pd.DataFrame({"animal": steps.animal, "kind": steps.interval_class, "value": values})
    moved = table[table["value"] > 0].assign(log=lambda t: np.log(t["value"]))
    by = [moved["animal"], moved["kind"]]
    median = moved["log"].groupby(by).transform("median")
    above = (moved["log"] - median).where(moved["log"] > median)
    grouped = moved["log"].groupby(by)
    limits = pd.DataFrame({"n": grouped.size(), "median": grouped.median(), "high": grouped.quantile(0.95)})
    limits["spread"] = above.groupby(by).median().fillna(0.0) / 0.6745
    limits = limits[limits["n"] >= _FEWEST_STEPS]
    most = np.maximum(np.exp(limits["median"] + spreads * limits["spread"]), times * np.exp(limits["high"])).rename(
        "most"
    )
    own = table.join(most, on=["animal", "kind"])["most"]
    own = own.fillna(table["animal"].map(most.groupby("animal").max()))
    return own.fillna(most.max() if len(most) else np.inf).to_numpy(dtype=float)
