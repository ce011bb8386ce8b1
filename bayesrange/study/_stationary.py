"""Stationary tails: the last fixes at one place for longer than the animal ever rested before.

A dead animal, a dropped collar or a den look so. Units: km, h.
"""

from typing import NamedTuple

import numpy as np
from jaxtyping import Bool, Float
from numpy.typing import NDArray

_FEWEST_FIXES, _SHORTEST_H = 5, 24.0
_LONGER = 1.5  # times the longest rest before
_PARTS = 16  # parts of the tail's length in which earlier rests are measured
ERRORS_AROUND = 4.0  # standard deviations of the location error that a resting collar scatters
LEAST_AROUND_KM = 0.03  # common practice: what an open-sky GPS collar scatters when no error is given


class Tail(NamedTuple):
    """The stationary end of one animal's track."""

    first: int  # position of its first fix
    hours: float  # how long it lasts
    rest_h: float  # the longest rest before it


def stationary_tail(
    hours: Float[NDArray, " n"], place_km: Float[NDArray, "n 2"], error_km: Float[NDArray, " n"]
) -> Tail | None:
    """The stationary tail of one animal's fixes in the order of time, or None.

    At one place: within 4 standard deviations of the location error (at least 30 m) of the median of the last fixes, by
    running medians of three, so that a stray fix neither ends a rest nor hides a tail. A tail has at least 5 fixes over
    a day, and 1.5 times the longest rest before.
    """
    if len(hours) < _FEWEST_FIXES:
        return None
    radius, place_km = around_km(error_km), _without_strays(place_km)
    centre = np.median(place_km[-_FEWEST_FIXES:], axis=0)
    away = np.flatnonzero(np.hypot(*(place_km - centre).T) > radius)
    centre = np.median(place_km[away[-1] + 1 if away.size else 0 :], axis=0) if _ends_at(away, len(hours)) else centre
    away = np.flatnonzero(np.hypot(*(place_km - centre).T) > radius)
    first = int(away[-1]) + 1 if away.size else 0
    lasts = float(hours[-1] - hours[first]) if first < len(hours) else 0.0
    if len(hours) - first < _FEWEST_FIXES or lasts < _SHORTEST_H:
        return None
    rest = longest_rest_h(hours[:first], place_km[:first], radius, lasts / _PARTS)
    return Tail(first, lasts, rest) if lasts >= _LONGER * rest else None


def _without_strays(place_km: Float[NDArray, "n 2"]) -> Float[NDArray, "n 2"]:
    """Running medians of three; the first and the last fix take those of their neighbours."""
    middle = np.median(np.stack([place_km[:-2], place_km[1:-1], place_km[2:]]), axis=0)
    return np.concatenate([middle[:1], middle, middle[-1:]])


def around_km(error_km: Float[NDArray, " n"]) -> float:
    """How far from its middle a collar that lies still is fixed [km]."""
    return max(ERRORS_AROUND * float(np.median(error_km)), LEAST_AROUND_KM)


def longest_rest_h(
    hours: Float[NDArray, " n"], place_km: Float[NDArray, "n 2"], radius_km: float, part_h: float
) -> float:
    """The longest time in which all fixes lie in a square of edge 2 × radius, in whole parts [h].

    Good to two parts: a rest may begin and end within a part, which then counts as moving.
    """
    if len(hours) == 0:
        return 0.0
    part = np.floor((hours - hours[0]) / part_h).astype(np.int64)
    begins = np.flatnonzero(np.diff(part, prepend=-1))
    low, high = np.minimum.reduceat(place_km, begins), np.maximum.reduceat(place_km, begins)
    still = (high - low <= 2 * radius_km).all(axis=1)
    number, best = part[begins], 0
    for k in np.flatnonzero(still & ~_follows(still)):
        best = max(best, _longest_from(int(k), still, low, high, number, 2 * radius_km))
    return best * part_h


def _follows(still: Bool[NDArray, " parts"]) -> Bool[NDArray, " parts"]:
    return np.concatenate([[False], still[:-1]]) if len(still) else still


def _longest_from(
    k: int,
    still: Bool[NDArray, " parts"],
    low: Float[NDArray, "parts 2"],
    high: Float[NDArray, "parts 2"],
    number: NDArray,
    edge: float,
) -> int:
    """The longest stretch of parts within one square, among the unbroken run of still parts that begins at k."""
    best, first = 0, k
    lowest, highest = low[k], high[k]
    while k < len(still) and still[k]:
        lowest, highest = np.minimum(lowest, low[k]), np.maximum(highest, high[k])
        while (highest - lowest > edge).any():
            first += 1
            lowest, highest = low[first : k + 1].min(axis=0), high[first : k + 1].max(axis=0)
        best = max(best, int(number[k] - number[first]) + 1)
        k += 1
    return best


def _ends_at(away: NDArray, n: int) -> bool:
    return away.size == 0 or int(away[-1]) < n - 1
