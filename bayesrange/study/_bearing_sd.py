"""How far bearings are off: one standard deviation an observer, pooled over the sets that can tell.

A set of n bearings has n − 2 to spare once the place is fitted: with a concentration of its own, its 95 % ellipse would
hold the true place in about 42 of 100 cases for three bearings and 75 for six. Pooled: σ² = Σ r² / Σ(1 − h) over an
observer's bearings, h the leverage (the restricted likelihood's equation for several variances: Patterson & Thompson
1971). Sets with a residual above 4 sd or a place behind an observer are left out of it, so that a bearing taken the
wrong way round does not widen every ellipse; a normal law cut at 4 sd keeps 0.999 of its variance.
"""

from typing import NamedTuple

import numpy as np
from jaxtyping import Bool, Float, Int
from numpy.typing import NDArray

from bayesrange.study._triangulation import (
    Azimuths,
    Stations,
    leverages,
    locate,
    residual_cosine,
    residuals,
)

FEWEST_SPARE = 10.0
"""Spare bearings (Σ(1 − h)) below which an observer takes the standard deviation of all."""

LEAST = float(np.radians(0.1))
"""No observer's standard deviation is taken to be smaller [rad]: compasses are read to half a degree at best."""

LARGE, GROSS = 3.0, 4.0
"""Residuals in sd above which a fix is flagged, and above which its set is left out of the pooling."""

_TELLING = 0.05  # a bearing with less than this to spare shows nothing of its error
_MEDIAN = 0.6745  # of a standard normal law's absolute value
_ROUNDS = 30


class Sets(NamedTuple):
    """Bearings by set, padded: stations [m], azimuths [rad] from grid north, whether there is one, whose it is."""

    station: Stations
    azimuth: Azimuths
    taken: Bool[NDArray, "sets bearings"]
    observer: Int[NDArray, "sets bearings"]

    def of(self, rows: NDArray) -> "Sets":
        """Some of the sets."""
        return Sets(*(part[rows] for part in self))

    def weights(self, sd: Float[NDArray, " observers"]) -> Azimuths:
        """κ of each bearing, 1/σ²; 0 for padding."""
        return np.where(self.taken, 1 / sd[self.observer] ** 2, 0.0)


class PooledSd(NamedTuple):
    """Standard deviation of each observer [rad], and how many spare bearings and sets it rests on."""

    sd: Float[NDArray, " observers"]
    spare: Float[NDArray, " observers"]
    sets: int
    left_out: int


def pooled_sd(sets: Sets, observers: int) -> PooledSd:
    """The standard deviation of each observer's bearings from sets of three and more.

    Args:
        sets: three and more bearings each.
        observers: how many there are.
    """
    sd = np.full(observers, np.nan)
    spare = np.zeros(observers)
    used = np.zeros(len(sets.azimuth), dtype=bool)
    for round_ in range(_ROUNDS):
        weight = np.where(sets.taken, 1.0, 0.0) if round_ == 0 else sets.weights(sd)
        off, left, ahead = _errors(sets, weight)
        if round_ == 0:
            telling = (left > _TELLING) & ahead[:, None]
            if not telling.any():
                return PooledSd(sd, spare, 0, len(sets.azimuth))
            middle = np.median(np.abs(off[telling]) / np.sqrt(left[telling])) / _MEDIAN
            scale = np.full(observers, max(float(middle), LEAST))
        else:
            scale = sd
        used = ahead & ~large_residuals(off, left, scale[sets.observer], GROSS).any(axis=1)
        count = used[:, None] & sets.taken
        square = np.bincount(sets.observer[count], off[count] ** 2, observers)
        spare = np.bincount(sets.observer[count], left[count], observers)
        if not spare.sum() > 0:
            break
        common = square.sum() / spare.sum()
        own = np.divide(square, spare, out=np.full(observers, common), where=spare >= FEWEST_SPARE)
        new = np.maximum(np.sqrt(own), LEAST)
        still = round_ > 0 and np.allclose(new, sd, rtol=1e-6)
        sd = new
        if still:
            break
    return PooledSd(sd, spare, int(used.sum()), int((~used).sum()))


def large_residuals(
    off: Azimuths, left: Azimuths, sd: Azimuths, limit: float = LARGE
) -> Bool[NDArray, "sets bearings"]:
    """Bearings off by more than 3 sd (or another limit), for what the fitted place leaves of their error."""
    return (left > _TELLING) & (np.abs(off) > limit * sd * np.sqrt(np.maximum(left, _TELLING)))


def _errors(sets: Sets, weight: Azimuths) -> tuple[Azimuths, Azimuths, Bool[NDArray, " sets"]]:
    """Residuals [rad], 1 − leverage (0 for padding and without a place), and sets placed ahead of their observers."""
    found = locate(sets.station, sets.azimuth, weight)
    good = np.flatnonzero(found.converged)
    off, left = np.zeros_like(weight), np.zeros_like(weight)
    place, part, share = found.place[good], sets.of(good), weight[good]
    off[good] = np.where(part.taken, residuals(place, part.station, part.azimuth), 0.0)
    left[good] = np.where(part.taken, 1 - leverages(place, part.station, share), 0.0)
    ahead = np.zeros(len(weight), dtype=bool)
    ahead[good] = (residual_cosine(place, part.station, part.azimuth, share) > 0).all(axis=1)
    return off, left, ahead
