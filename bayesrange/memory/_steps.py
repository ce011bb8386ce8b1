"""One animal's fixes as stays, which memory is made of, and as steps, which the likelihood counts.

A stay is the time from a fix to the next, spent (as far as memory goes) where it began. A step is the move between two
fixes one nominal interval apart. Units: km, h, rad; NumPy double precision, once per data set.
"""

from typing import NamedTuple

import numpy as np
from jaxtyping import Bool, Float, Int


class Track(NamedTuple):
    """Fixes of one animal.

    Attributes:
        time: ascending, none twice [h].
        x: eastings [km].
        y: northings [km].
    """

    time: Float[np.ndarray, " fixes"]
    x: Float[np.ndarray, " fixes"]
    y: Float[np.ndarray, " fixes"]


class Stays(NamedTuple):
    """Where time was spent; the last fix starts no stay.

    Attributes:
        time: start [h], ascending.
        duration: length of the stay [h].
        x: easting [km].
        y: northing [km].
        observed: starts at a fix; False: inside a gap, on the straight line between two fixes.
    """

    time: Float[np.ndarray, " stays"]
    duration: Float[np.ndarray, " stays"]
    x: Float[np.ndarray, " stays"]
    y: Float[np.ndarray, " stays"]
    observed: Bool[np.ndarray, " stays"]


class Steps(NamedTuple):
    """The steps that count.

    Attributes:
        fix: index of the fix a step starts at.
        time: its time [h].
        x: start, easting [km].
        y: start, northing [km].
        end_x: end, easting [km].
        end_y: end, northing [km].
        length: [km].
        heading: direction of the step before, anticlockwise from east [rad]; 0 where unknown.
        turn: from `heading` to this step's direction, in (−π, π] [rad]; 0 where unknown or the step is short.
        turn_known: the interval before is nominal too, and its step not short.
        short: shorter than the shortest length told apart from rest; its own turn is not used.
    """

    fix: Int[np.ndarray, " steps"]
    time: Float[np.ndarray, " steps"]
    x: Float[np.ndarray, " steps"]
    y: Float[np.ndarray, " steps"]
    end_x: Float[np.ndarray, " steps"]
    end_y: Float[np.ndarray, " steps"]
    length: Float[np.ndarray, " steps"]
    heading: Float[np.ndarray, " steps"]
    turn: Float[np.ndarray, " steps"]
    turn_known: Bool[np.ndarray, " steps"]
    short: Bool[np.ndarray, " steps"]


def make_stays(track: Track, interval: float) -> Stays:
    """Stays of a track; a gap's time is spent in nominal pieces along the straight line across it.

    An interval is cut into max(1, round(interval / nominal)) equal pieces, the first at its fix.

    Args:
        track: the fixes.
        interval: nominal sampling interval [h].
    """
    _check_times(track, interval)
    between = np.diff(track.time)
    pieces = np.maximum(1, np.rint(between / interval)).astype(int)
    start = np.repeat(np.arange(len(between)), pieces)
    piece = np.arange(len(start)) - np.repeat(np.cumsum(pieces) - pieces, pieces)
    share = piece / pieces[start]
    return Stays(
        time=track.time[start] + share * between[start],
        duration=(between / pieces)[start],
        x=track.x[start] + share * np.diff(track.x)[start],
        y=track.y[start] + share * np.diff(track.y)[start],
        observed=piece == 0,
    )


def make_steps(
    track: Track,
    interval: float,
    tolerance: float,
    shortest: float,
    on_ground: Bool[np.ndarray, " fixes"],
    learning: float = 0.0,
) -> tuple[Steps, dict[str, int]]:
    """The steps that count, and how many do not and why.

    A step counts if its interval is nominal, both its ends lie on habitable ground, and the animal has had its time
    to learn. A step that misses more than one of these is counted under the first.

    Args:
        track: the fixes.
        interval: nominal sampling interval [h].
        tolerance: largest departure from it, as a share of it.
        shortest: a shorter step enters the likelihood as "shorter than this" [km], > 0.
        on_ground: whether each fix lies on habitable ground.
        learning: time after the first fix during which an animal only learns [h].

    Returns:
        The steps, and the counts `intervals`, `steps`, `not_nominal`, `off_ground`, `learning` (these three and
        `steps` add up to `intervals`), and among the steps `short` and `turn_unknown`.
    """
    _check_times(track, interval)
    if not shortest > 0:
        raise ValueError(
            f"`shortest` is the length [km] below which a step counts as rest and must be positive, got {shortest}: "
            "pass at least the rounding of the coordinates."
        )
    dx, dy = np.diff(track.x), np.diff(track.y)
    length, direction = np.hypot(dx, dy), np.arctan2(dy, dx)
    # A hair of slack: times as decimals of an hour carry rounding of their own.
    nominal = np.abs(np.diff(track.time) - interval) <= tolerance * interval * (1 + 1e-9) + 1e-9
    on_land = on_ground[:-1] & on_ground[1:]
    learnt = track.time[:-1] - track.time[0] >= learning
    fix = np.flatnonzero(nominal & on_land & learnt)

    long_before = np.concatenate([[False], nominal[:-1] & (length[:-1] >= shortest)])
    before = np.concatenate([[0.0], direction[:-1]])
    short = length < shortest
    heading = np.where(long_before, before, 0.0)
    turn = np.where(long_before & ~short, _wrap(direction - heading), 0.0)
    steps = Steps(
        fix=fix,
        time=track.time[fix],
        x=track.x[fix],
        y=track.y[fix],
        end_x=track.x[fix + 1],
        end_y=track.y[fix + 1],
        length=length[fix],
        heading=heading[fix],
        turn=turn[fix],
        turn_known=long_before[fix],
        short=short[fix],
    )
    counts = {
        "intervals": len(nominal),
        "steps": len(fix),
        "not_nominal": int((~nominal).sum()),
        "off_ground": int((nominal & ~on_land).sum()),
        "learning": int((nominal & on_land & ~learnt).sum()),
        "short": int(steps.short.sum()),
        "turn_unknown": int((~steps.turn_known).sum()),
    }
    return steps, counts


def _wrap(angle: Float[np.ndarray, " n"]) -> Float[np.ndarray, " n"]:
    """The same angle in (−π, π]."""
    return np.pi - np.mod(np.pi - angle, 2 * np.pi)


def _check_times(track: Track, interval: float) -> None:
    if not interval > 0:
        raise ValueError(f"`interval` is the nominal time between fixes [h] and must be positive, got {interval}.")
    backward = np.flatnonzero(~(np.diff(track.time) > 0))
    if len(backward):
        raise ValueError(
            f"`track.time` must ascend, but fix {backward[0] + 1} is not later than the fix before it: "
            "sort the fixes and keep one for each time."
        )
