"""How often and how regularly animals were fixed, and the rhythm of their steps over the day."""

from dataclasses import dataclass

import numpy as np
import pandas as pd
from jaxtyping import Float, Int
from numpy.typing import NDArray

LONGEST_LAG_H = 48.0
_MOST_LAGS = 96
_LONGEST_INTERVAL_H = 6.0  # to see a rhythm of 24 hours
_CLEAR = 3.0  # standard errors of an autocorrelation by which the peak must stand out
_EDGES_H = np.array([0, 1 / 120, 1 / 30, 1 / 9, 0.35, 0.7, 1.5, 3, 6, 12, 18, 30, 72, 240, np.inf])


@dataclass(frozen=True)
class Rhythm:
    """Autocorrelation of one animal's log step lengths.

    Attributes:
        lag_h: lags [h].
        correlation: at these lags; NaN where there are too few pairs.
        verdict: "24-hour rhythm", "no 24-hour rhythm" or "cannot be told".
    """

    lag_h: Float[NDArray, " lags"]
    correlation: Float[NDArray, " lags"]
    verdict: str


def commonest_interval_h(interval_h: Float[NDArray, " n"], tolerance: float) -> float:
    """The interval that most intervals equal within the tolerance [h], to the minute; NaN without any.

    Args:
        interval_h: times between neighbouring fixes of an animal [h].
        tolerance: share of the interval by which another may differ (half a minute always).
    """
    if not len(interval_h):
        return float("nan")
    minutes = np.sort(np.round(60 * interval_h).clip(min=1))
    candidates = np.unique(minutes)
    wide = tolerance * candidates + 0.5
    counts = np.searchsorted(minutes, candidates + wide, "right") - np.searchsorted(minutes, candidates - wide, "left")
    best = candidates[np.argmax(counts)]
    near = minutes[np.abs(minutes - best) <= tolerance * best + 0.5]
    return float(np.round(np.median(near)).clip(min=1)) / 60


def usable(interval_h: Float[NDArray, " n"], nominal_h: float, tolerance: float) -> NDArray[np.bool_]:
    """Which intervals are the nominal one within the tolerance (a share of it)."""
    return np.asarray(np.abs(interval_h - nominal_h) <= tolerance * nominal_h)


def histogram(interval_h: Float[NDArray, " n"]) -> pd.DataFrame:
    """Intervals by classes that hold the usual schedules: from_h, to_h, intervals; classes at both ends that are empty
    are left out.
    """  # noqa: D205
    counts = np.histogram(interval_h, _EDGES_H)[0]
    held = np.flatnonzero(counts)
    table = pd.DataFrame({"from_h": _EDGES_H[:-1], "to_h": _EDGES_H[1:], "intervals": counts})
    return table.iloc[held[0] : held[-1] + 1].reset_index(drop=True) if held.size else table.iloc[:0]


def rhythm(hours: Float[NDArray, " n"], place_km: Float[NDArray, "n 2"], nominal_h: float, tolerance: float) -> Rhythm:
    """The 24-hour peak in the autocorrelation of log step lengths, from steps of the nominal interval.

    There is a rhythm if the correlation at 24 hours is above 0 and above that at 12 hours, each by 3 standard errors
    (1/√pairs). Rests make it: an animal that rests by day has short steps a day apart.
    """
    step = np.hypot(*np.diff(place_km, axis=0).T)
    regular = usable(np.diff(hours), nominal_h, tolerance)
    cannot = Rhythm(np.zeros(0), np.zeros(0), "cannot be told")
    if not nominal_h <= _LONGEST_INTERVAL_H or regular.sum() < 4 * 24 / nominal_h:
        return cannot
    slot = np.round(hours[:-1] / nominal_h).astype(np.int64)
    slot, value = slot[regular] - slot[regular][0], np.log(np.maximum(step[regular], 1e-3))  # 1 m
    series = np.full(slot[-1] + 1, np.nan)
    series[slot] = value - value.mean()
    lags = _lags(nominal_h)
    correlation, pairs = _correlations(series, lags, float(value.var()))
    day, half = (int(np.argmin(np.abs(lags * nominal_h - h))) for h in (24, 12))
    if not pairs[[day, half]].min() > 2 * 24 / nominal_h or not value.var() > 0:
        return cannot
    error = _CLEAR / np.sqrt(pairs[day])
    found = correlation[day] > error and correlation[day] - correlation[half] > error
    return Rhythm(lags * nominal_h, correlation, "24-hour rhythm" if found else "no 24-hour rhythm")


def _lags(nominal_h: float) -> Int[NDArray, " lags"]:
    """Lags in intervals up to 48 hours, at most 96, with those nearest to 12 and 24 hours among them."""
    last = int(LONGEST_LAG_H / nominal_h)
    every = max(1, -(-last // _MOST_LAGS))
    wanted = np.round(np.array([12.0, 24.0]) / nominal_h).astype(int)
    return np.unique(np.concatenate([np.arange(every, last + 1, every), wanted]))


def _correlations(
    series: Float[NDArray, " slots"], lags: Int[NDArray, " lags"], variance: float
) -> tuple[Float[NDArray, " lags"], Int[NDArray, " lags"]]:
    values, pairs = np.full(len(lags), np.nan), np.zeros(len(lags), dtype=np.int64)
    known = ~np.isnan(series)
    filled = np.where(known, series, 0.0)
    for k, lag in enumerate(lags):
        if lag < len(series):
            pairs[k] = int((known[lag:] & known[:-lag]).sum())
            if pairs[k] and variance > 0:
                values[k] = float(filled[lag:] @ filled[:-lag]) / pairs[k] / variance
    return values, pairs
