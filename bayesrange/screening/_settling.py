"""Has an animal settled: net squared displacement from its first place, against the shapes it takes.

A settled animal's rises to a plateau, at once or after a move; a migrant's rises to one late, or rises and falls; a
wanderer's goes on rising. The shapes are those of Bunnefeld et al. (2011, J. Anim. Ecol. 80: 466–476), each with a
level before it, fitted by least squares over a grid of their times and widths. Time runs from 0 to 1 over the record.
"""

from dataclasses import dataclass

import numpy as np
import pandas as pd
from jaxtyping import Float
from numpy.typing import NDArray

MOST_BINS, _FIXES_A_BIN, FEWEST_BINS = 100, 3, 20
_CLEAR = 0.7  # share of the variance that a shape must explain before it is believed
_FAINT, _NOISE = 0.35, 3.0  # enough if the rise is three times the spread about it: a short move before a long stay
_RETURN = 0.12  # more of it that a return must explain beyond a move
_BACK = 0.5  # share of the way out that a return goes back
_LATE = 0.8  # share of the record after which a plateau is too late to be called settled
_LONG = 0.2  # share of the record spent elsewhere first that makes a move a migration
_FAST = 0.25  # share of the record in which a migration is made; slower is drift
_AT_ONCE = 0.04
_LOGISTIC_95, _EXPONENTIAL_95 = np.log(19.0), np.log(20.0)
_WIDTHS = (0.004, 0.01, 0.02, 0.04, 0.08)


@dataclass(frozen=True)
class Settling:
    """What the net squared displacement of one animal says.

    Attributes:
        verdict: "settled", "not settled", "migrating", or "too few fixes".
        settled: from when on, if it settled after a move; None if at the start, or not.
        days: middle of each bin since the first fix [d].
        nsd_km2: its mean net squared displacement [km²].
        shape_km2: the shape that was taken for it, at the same times [km²].
    """

    verdict: str
    settled: pd.Timestamp | None
    days: Float[NDArray, " bins"]
    nsd_km2: Float[NDArray, " bins"]
    shape_km2: Float[NDArray, " bins"]


@dataclass(frozen=True)
class _Fit:
    error: float  # sum of squares
    values: Float[NDArray, " bins"]
    rise: float  # height of the first step
    fall: float  # height of the way back
    left: float  # when the move begins (5 % of it)
    arrived: float  # when the plateau is reached (95 %)


def settling(time: pd.Series, place_km: Float[NDArray, "n 2"]) -> Settling:
    """Verdict on one animal's fixes in the order of time."""
    days = (time - time.iloc[0]).dt.total_seconds().to_numpy(dtype=float) / 86_400
    start = place_km[days <= min(1.0, 0.02 * days[-1])].mean(axis=0) if len(days) else np.zeros(2)
    nsd = ((place_km - start) ** 2).sum(axis=1)
    bins = min(MOST_BINS, len(days) // _FIXES_A_BIN)
    if bins < FEWEST_BINS:
        return Settling("too few fixes", None, days, nsd, np.full(len(days), np.nan))
    which = np.minimum((days / days[-1] * bins).astype(int), bins - 1)
    held = np.bincount(which, minlength=bins)
    mean = np.bincount(which, weights=nsd, minlength=bins)[held > 0] / held[held > 0]
    at = (np.flatnonzero(held > 0) + 0.5) / bins
    verdict, arrived, fit = _judged(at, mean)
    settled = time.iloc[0] + pd.Timedelta(days=float(arrived * days[-1])) if arrived is not None else None
    return Settling(verdict, settled, at * days[-1], mean, fit)


def _judged(
    at: Float[NDArray, " bins"], nsd: Float[NDArray, " bins"]
) -> tuple[str, float | None, Float[NDArray, " bins"]]:
    """Verdict, when the plateau is reached (None: at once or not at all), and the shape."""
    level = np.full(len(nsd), nsd.mean())
    spread = float(((nsd - nsd.mean()) ** 2).sum())
    if spread == 0:
        return "settled", None, level
    rise, line, back = _best_rise(at, nsd), _line(at, nsd), _best_return(at, nsd)
    explained = {name: 1 - fit.error / spread for name, fit in (("rise", rise), ("line", line), ("back", back))}
    returns = back.fall >= _BACK * back.rise > 0 and explained["back"] >= _CLEAR
    if returns and explained["back"] > max(explained["rise"], explained["line"]) + _RETURN:
        return "migrating", None, back.values
    if line.rise > 0 and explained["line"] >= _CLEAR and explained["line"] > explained["rise"] - 0.05:
        return "not settled", None, line.values
    over_noise = rise.rise > _NOISE * np.sqrt(rise.error / len(nsd))
    if rise.rise <= 0 or explained["rise"] < (_FAINT if over_noise else _CLEAR):
        return "settled", None, level
    if rise.arrived > _LATE:
        return "not settled", None, rise.values
    if rise.left > _LONG and rise.arrived - rise.left < _FAST:
        return "migrating", rise.arrived, rise.values
    return "settled", rise.arrived if rise.arrived > _AT_ONCE else None, rise.values


def _line(at: Float[NDArray, " bins"], nsd: Float[NDArray, " bins"]) -> _Fit:
    fit, slope = _with_level(at[None], nsd)
    return _Fit(float(fit[1][0]), fit[0][0], float(slope[0]), 0.0, 0.0, 1.0)


def _best_rise(at: Float[NDArray, " bins"], nsd: Float[NDArray, " bins"]) -> _Fit:
    """The best of all rises to a plateau: logistic, or exponential from the start."""
    middle = np.linspace(0.01, 0.92, 62)
    widths = np.array(_WIDTHS)
    theta, phi = (grid.ravel() for grid in np.meshgrid(middle, widths))
    speed = np.geomspace(0.005, 0.4, 24)
    shapes = np.concatenate([_logistic(at, theta, phi), -np.expm1(-at[None] / speed[:, None])])
    left = np.concatenate([theta - _LOGISTIC_95 * phi, np.zeros(len(speed))])
    arrived = np.concatenate([theta + _LOGISTIC_95 * phi, _EXPONENTIAL_95 * speed])
    (values, error), rise = _with_level(shapes, nsd)
    best = int(np.argmin(np.where(rise > 0, error, np.inf)))
    return _Fit(
        float(error[best]), values[best], float(rise[best]), 0.0, max(float(left[best]), 0.0), float(arrived[best])
    )


def _best_return(at: Float[NDArray, " bins"], nsd: Float[NDArray, " bins"]) -> _Fit:
    """The best way out and back: two logistic steps of one width, each with its own height."""
    times = np.linspace(0.03, 0.97, 32)
    i, j = np.triu_indices(len(times), 5)  # away for a seventh of the record: no single bin is a journey
    best: _Fit | None = None
    for phi in _WIDTHS[1::2]:
        steps = _logistic(at, times, np.full(len(times), phi))
        centred = steps - steps.mean(axis=1, keepdims=True)
        target = nsd - nsd.mean()
        gram, against = centred @ centred.T, centred @ target
        a, b, c = gram[i, i], gram[i, j], gram[j, j]
        det = np.maximum(a * c - b * b, 1e-12)
        out, back = (c * against[i] - b * against[j]) / det, (a * against[j] - b * against[i]) / det
        error = target @ target - out * against[i] - back * against[j]
        k = int(np.argmin(np.where((out > 0) & (back < 0), error, np.inf)))
        if best is None or error[k] < best.error:
            values = nsd.mean() + out[k] * centred[i[k]] + back[k] * centred[j[k]]
            best = _Fit(float(error[k]), values, float(out[k]), float(-back[k]), float(times[i[k]]), float(times[j[k]]))
    assert best is not None
    return best


def _logistic(
    at: Float[NDArray, " bins"], theta: Float[NDArray, " shapes"], phi: Float[NDArray, " shapes"]
) -> Float[NDArray, "shapes bins"]:
    return 1 / (1 + np.exp(np.clip((theta[:, None] - at[None]) / phi[:, None], -500, 500)))


def _with_level(
    shapes: Float[NDArray, "shapes bins"], nsd: Float[NDArray, " bins"]
) -> tuple[tuple[Float[NDArray, "shapes bins"], Float[NDArray, " shapes"]], Float[NDArray, " shapes"]]:
    """Least squares of level + height × shape: values and sum of squares, and the height."""
    centred = shapes - shapes.mean(axis=1, keepdims=True)
    square = np.maximum((centred**2).sum(axis=1), 1e-12)
    height = centred @ (nsd - nsd.mean()) / square
    values = nsd.mean() + height[:, None] * centred
    return (values, ((values - nsd) ** 2).sum(axis=1)), height
