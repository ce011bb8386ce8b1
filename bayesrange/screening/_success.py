"""Which fixes fail: by hour of the day, and by the class of ground where the animal must have been."""

from zoneinfo import ZoneInfo

import numpy as np
import pandas as pd

from bayesrange.study import BareStudy

_ACROSS = 15  # squares


def success_by_hour(fixes: pd.DataFrame, failed: pd.DataFrame, zone: str | None) -> pd.DataFrame:
    """Fixes and failed fixes by hour of the study's clock (UTC without a zone): hour, fixes, failed, success."""
    clock = ZoneInfo(zone) if zone else "UTC"
    counts = {
        name: np.bincount(table["time"].dt.tz_convert(clock).dt.hour.to_numpy(dtype=int), minlength=24)
        for name, table in (("fixes", fixes), ("failed", failed))
    }
    return _with_success(pd.DataFrame({"hour": np.arange(24), **counts}))


def success_by_class(study: BareStudy, fixes: pd.DataFrame, failed_at: np.ndarray) -> pd.DataFrame:
    """Fixes and failed fixes by class of every layer of classes: layer, class, fixes, failed, success."""
    grid = study.grid
    if grid is None or not study.classes or study.failed.empty:
        return pd.DataFrame(columns=["layer", "class", "fixes", "failed", "success"])
    rows = []
    for name, layer in study.classes.items():
        counts = []
        for x, y in (fixes[["x", "y"]].to_numpy(dtype=float).T, failed_at.T):
            row, column = grid.cell_of(x, y)
            at = np.where(row >= 0, layer.cells[row, column], np.nan)
            counts.append(np.bincount(at[~np.isnan(at)].astype(int), minlength=len(layer.names)))
        rows += [(name, kind, int(got), int(lost)) for kind, got, lost in zip(layer.names, *counts, strict=True)]
    return _with_success(pd.DataFrame(rows, columns=["layer", "class", "fixes", "failed"]))


def places_of_failed(fixes: pd.DataFrame, failed: pd.DataFrame) -> np.ndarray:
    """Where animals must have been when fixes failed: x, y [m]; not before its first or after its last fix.

    On the straight line between the fixes before and after, at the share of the time between them: right on the whole
    where few fail in a row.
    """
    own = dict(list(fixes.groupby("animal")))
    parts = [np.zeros((0, 2))]
    for animal, lost in failed.groupby("animal"):
        got = own.get(animal)
        if got is None or len(got) < 2:
            continue
        known, at = (t["time"].astype("datetime64[ns, UTC]").astype("int64").to_numpy(dtype=float) for t in (got, lost))
        at = at[(at > known[0]) & (at < known[-1])]
        parts.append(np.column_stack([np.interp(at, known, got[axis].to_numpy(dtype=float)) for axis in ("x", "y")]))
    return np.concatenate(parts)


def success_by_square(fixes: pd.DataFrame, failed_at: np.ndarray) -> pd.DataFrame:
    """Fixes and failed fixes by squares of a readable size, at most fifteen across.

    Columns x, y [m, middle], side_m, fixes, failed, success.
    """
    places = fixes[["x", "y"]].to_numpy(dtype=float)
    wide = max(float(np.ptp(places, axis=0).max()), 1.0) / _ACROSS
    power = 10.0 ** np.floor(np.log10(wide))
    side = float(power * next(step for step in (1, 2, 5, 10) if step * power >= wide))
    got, lost = (pd.DataFrame(np.floor(p / side), columns=["x", "y"]).value_counts() for p in (places, failed_at))
    table = pd.DataFrame({"fixes": got, "failed": lost}).fillna(0).astype(int).reset_index()
    table[["x", "y"]] = (table[["x", "y"]] + 0.5) * side
    return _with_success(table.assign(side_m=side))


def _with_success(table: pd.DataFrame) -> pd.DataFrame:
    tried = table["fixes"] + table["failed"]
    return table.assign(success=(table["fixes"] / tried.where(tried > 0)).astype(float))
