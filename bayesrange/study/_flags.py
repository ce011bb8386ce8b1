"""Flags: fixes that a look at the data would question, each by a stated rule.

`screen` reports them; `[fixes.drop]` takes some of them out when the study is read. Both use `find_flags`, so that what
is seen is what is dropped. Nothing is changed here. Values are in the unit of the flag (`FLAGS`).
"""

from typing import NamedTuple

import numpy as np
import pandas as pd
import shapely
from jaxtyping import Float
from numpy.typing import NDArray

from bayesrange.study._stationary import stationary_tail
from bayesrange.study._tracks import Steps, Tracks, tracks_of, usual_most

_SHORT_RUN = 5  # a stretch of so many fixes off the track is a mistake, of more a journey
_GAP_TIMES, _GAP_H = 10.0, 24.0
_SDS = 3.0  # a fix may lie outside the area by so many standard deviations of its error


class Flag(NamedTuple):
    """What a flag says of a fix."""

    unit: str
    droppable: bool
    meaning: str


FLAGS = {
    "duplicate": Flag("m", True, "same animal and time as an earlier row; value: distance from that row's place"),
    "order": Flag("h", False, "earlier than the animal's row before it in the file; value: by how much"),
    "speed": Flag("km/h", True, "the animal could hardly get here from its last sound fix; value: the speed it needs"),
    "spike": Flag("km", True, "far out and straight back; value: the shorter of both steps, less the location error"),
    "stationary": Flag("h", True, "end of the track at one place, longer than any rest before; value: its duration"),
    "outside": Flag("m", True, "outside the study area; value: how far, limit: 3 sd of the location error"),
    "gap": Flag("h", False, "long time without a fix before this one; value: how long"),
    "bearing": Flag("", False, "doubtful place from bearings"),
}
DROPPABLE = tuple(name for name, flag in FLAGS.items() if flag.droppable)


def find_flags(
    fixes: pd.DataFrame,
    max_speed_kmh: float | None = None,
    area: shapely.Polygon | shapely.MultiPolygon | None = None,
) -> pd.DataFrame:
    """Every flag of every fix.

    Speed, spikes, tails and gaps are looked for among the fixes that are no duplicates; tails and gaps leave out fixes
    with a flag of speed or spike too.

    Args:
        fixes: sorted by animal and time, those of one time as in the file; animal, time, x, y and error_m [m], file,
            row.
        max_speed_kmh: the fastest that the animals can be [km/h]; None: what is usual for each animal and interval.
        area: in the fixes' reference system; without it no fix is outside.

    Returns:
        One row a flag: fix (position in `fixes`), flag, value, limit; in the order of `FLAGS`, then of the fixes.
    """
    found = [duplicates(fixes), _out_of_order(fixes)]
    single = np.ones(len(fixes), dtype=bool)
    single[found[0]["fix"]] = False
    tracks = tracks_of(fixes[single])
    speed, spike = _too_fast(tracks, max_speed_kmh), _spikes(tracks)
    sound = np.ones(len(tracks.animal), dtype=bool)
    sound[np.concatenate([speed["fix"], spike["fix"]]).astype(int)] = False
    calm = tracks.part(sound)
    back = {"all": np.flatnonzero(single), "sound": np.flatnonzero(single)[sound]}
    for table, which in ((speed, "all"), (spike, "all"), (_tails(calm), "sound"), (_gaps(calm), "sound")):
        found.append(table.assign(fix=back[which][table["fix"]]))
    if area is not None:
        found.append(outside(fixes, area))
    if "flag" in fixes.columns:  # places from bearings say themselves what is doubtful about them
        found.append(_table("bearing", np.flatnonzero(fixes["flag"].fillna("") != ""), np.nan, np.nan))
    flags = pd.concat(found, ignore_index=True)
    order = flags["flag"].map({name: k for k, name in enumerate(FLAGS)})
    return flags.iloc[np.lexsort((flags["fix"], order))].reset_index(drop=True)


def duplicates(fixes: pd.DataFrame) -> pd.DataFrame:
    """Fixes whose animal and time stand in an earlier row."""
    again = fixes.duplicated(["animal", "time"]).to_numpy()
    if not again.any():
        return _table("duplicate", [], [], [])
    kept = np.maximum.accumulate(np.where(again, 0, np.arange(len(fixes))))  # sorted: its earlier row is right before
    place = fixes[["x", "y"]].to_numpy(dtype=float)
    which = np.flatnonzero(again)
    return _table("duplicate", which, np.hypot(*(place[which] - place[kept[which]]).T), 0.0)


def outside(fixes: pd.DataFrame, area: shapely.Polygon | shapely.MultiPolygon) -> pd.DataFrame:
    """Fixes outside the area by more than 3 standard deviations of the location error (an ellipse's long axis) [m]."""
    widest = "error_major_m" if "error_major_m" in fixes.columns else "error_m"
    x, y, error = (fixes[c].to_numpy(dtype=float) for c in ("x", "y", widest))
    shapely.prepare(area)
    out = np.flatnonzero(~shapely.covers(area, shapely.points(x, y)))
    distance = np.asarray(shapely.distance(area, shapely.points(x[out], y[out])))
    far = distance > _SDS * error[out]
    return _table("outside", out[far], distance[far], _SDS * error[out[far]])


def _out_of_order(fixes: pd.DataFrame) -> pd.DataFrame:
    """Rows that are earlier than their animal's row before them in the same file."""
    if not len(fixes):
        return _table("order", [], [], [])
    listed = fixes[["animal", "time", "file", "row"]].reset_index(drop=True).sort_values(["file", "row"], kind="stable")
    before = listed.groupby(["file", "animal"], sort=False)["time"].diff() / pd.Timedelta(hours=1)
    back = before[before < 0].sort_index()
    return _table("order", back.index.to_numpy(), -back.to_numpy(dtype=float), 0.0)


def _too_fast(tracks: Tracks, max_speed_kmh: float | None) -> pd.DataFrame:
    """Fixes that are off the track: too far to come from the last sound fix."""
    steps = tracks.steps()
    usual = steps.length_km / steps.interval_h
    limit = (
        usual_most(usual, steps, spreads=4, times=5) if max_speed_kmh is None else np.full(len(usual), max_speed_kmh)
    )
    fast = np.flatnonzero(steps.sure_km / steps.interval_h > limit)
    bounds = tracks.bounds
    rows: dict[int, tuple[float, float]] = {}
    done = -1
    for k in fast:
        if steps.start[k] <= done:
            continue
        animal = int(steps.animal[k])
        run = _off_the_track(tracks, int(steps.start[k]), int(bounds[animal]), int(bounds[animal + 1]), float(limit[k]))
        rows |= {fix: (speed, float(limit[k])) for fix, speed in run.items()}
        done = max(run, default=done)
    fixes = sorted(rows)
    return _table("speed", fixes, [rows[f][0] for f in fixes], [rows[f][1] for f in fixes])


def _off_the_track(tracks: Tracks, last: int, first: int, end: int, limit: float) -> dict[int, float]:
    """Fixes after a sound one that need more than the limit from it, by position, with the speed [km/h].

    If even the sixth needs it, the animal has gone elsewhere: then only the arrival is flagged, or what was before if
    that is a short stretch at the track's beginning.
    """
    run: dict[int, float] = {}
    for fix in range(last + 1, min(last + 2 + _SHORT_RUN, end)):
        speed = _speed(tracks, last, fix)
        if speed <= limit:
            return run
        run[fix] = speed
    if last + 1 + len(run) == end and len(run) <= _SHORT_RUN:
        return run  # the track ends off its course
    if last - first < _SHORT_RUN and last - first + 1 < end - last - 1:
        return {fix: _speed(tracks, fix, last + 1) for fix in range(first, last + 1)}
    return {last + 1: run[last + 1]}


def _speed(tracks: Tracks, start: int, end: int) -> float:
    step = Steps.between(tracks, np.array([start]), np.array([end]))
    return float(step.sure_km[0] / step.interval_h[0])


def _spikes(tracks: Tracks) -> pd.DataFrame:
    """Fixes far from both neighbours, which are near each other."""
    steps = tracks.steps()
    if not len(steps.start):
        return _table("spike", [], [], [])
    limit = usual_most(steps.length_km, steps, spreads=3, times=3)
    pair = np.flatnonzero(steps.end[:-1] == steps.start[1:])
    out = np.minimum(steps.sure_km[pair], steps.sure_km[pair + 1])
    most = np.maximum(limit[pair], limit[pair + 1])
    home = Steps.between(tracks, steps.start[pair], steps.end[pair + 1]).sure_km
    spike = (out > most) & (home < out / 2)
    return _table("spike", steps.end[pair][spike], out[spike], most[spike])


def _tails(tracks: Tracks) -> pd.DataFrame:
    """All fixes of stationary tails."""
    bounds, parts = tracks.bounds, []
    for first, end in zip(bounds[:-1], bounds[1:], strict=True):
        own = slice(first, end)
        tail = stationary_tail(tracks.hours[own], tracks.place_km[own], tracks.error_km[own])
        if tail is not None:
            fixes = np.arange(first + tail.first, end)
            parts.append(_table("stationary", fixes, tail.hours, tail.rest_h))
    return pd.concat(parts, ignore_index=True) if parts else _table("stationary", [], [], [])


def _gaps(tracks: Tracks) -> pd.DataFrame:
    """Fixes after more than a day and ten times the animal's median interval."""
    steps = tracks.steps()
    if not len(steps.start):
        return _table("gap", [], [], [])
    usual = pd.Series(steps.interval_h).groupby(steps.animal).transform("median").to_numpy(dtype=float)
    limit = np.maximum(_GAP_TIMES * usual, _GAP_H)
    long = steps.interval_h > limit
    return _table("gap", steps.end[long], steps.interval_h[long], limit[long])


def _table(flag: str, fix: object, value: object, limit: object) -> pd.DataFrame:
    at = np.asarray(fix, dtype=np.int64)
    columns: dict[str, Float[NDArray, " n"]] = {
        "value": np.broadcast_to(np.asarray(value, dtype=float), at.shape),
        "limit": np.broadcast_to(np.asarray(limit, dtype=float), at.shape),
    }
    return pd.DataFrame({"fix": at, "flag": pd.Series([flag] * len(at), dtype="str"), **columns})
