"""Which fixes are used: by sun, hours or a column. What is set aside is counted and said."""

import re
from typing import Any

import numpy as np
import pandas as pd
import pyproj
from jaxtyping import Bool, Int
from numpy.typing import NDArray

from bayesrange._errors import StudyError
from bayesrange.study._crs import carry
from bayesrange.study._settings import KeepSection
from bayesrange.study._sun import HORIZON, solar_elevation
from bayesrange.study._tables import column_or_error, first_few, shown

_HOURS = re.compile(r"([01]\d|2[0-3]):([0-5]\d)-([01]\d|2[0-4]):([0-5]\d)")


def by_column(table: pd.DataFrame, keep: KeepSection | None, name: str) -> Bool[NDArray, " rows"]:
    """Rows whose cells are one of the values wanted, in every column given.

    Raises:
        StudyError: there is no such column.
    """
    kept = np.ones(len(table), dtype=bool)
    for column, wanted in ((keep.column if keep else None) or {}).items():
        cells = column_or_error(table, column, name, "[fixes.keep] column names")
        kept &= cells.isin([_cell(value) for value in (wanted if isinstance(wanted, list) else [wanted])]).to_numpy()
    return kept


def by_hours(minutes: Int[NDArray, " n"], hours: str) -> Bool[NDArray, " n"]:
    """Clock times from the first to before the second; "18:00-06:00" goes over midnight."""
    start, end = hour_limits(hours)
    return (minutes >= start) & (minutes < end) if start < end else (minutes >= start) | (minutes < end)


def hour_limits(hours: str) -> tuple[int, int]:
    """Minutes since midnight of both ends.

    Raises:
        StudyError: no two clock times, or twice the same.
    """
    found = _HOURS.fullmatch(hours.replace(" ", ""))
    limits = [60 * int(found[k]) + int(found[k + 1]) for k in (1, 3)] if found else [0, 0]
    if limits[0] == limits[1] or limits[1] > 1440:
        raise StudyError(f'[fixes.keep] hours: expected two clock times such as "18:00-06:00", got "{shown(hours)}".')
    return limits[0], limits[1]


def by_sun(fixes: pd.DataFrame, crs: pyproj.CRS, sun: str) -> Bool[NDArray, " n"]:
    """Fixes of the day (the sun's rim over the horizon) or of the night."""
    x, y = fixes["x"].to_numpy(dtype=float), fixes["y"].to_numpy(dtype=float)
    longitude, latitude = carry(x, y, crs, pyproj.CRS("EPSG:4326"))
    day = solar_elevation(fixes["time"], longitude, latitude) > HORIZON
    return day if sun == "day" else ~day


def keep_fixes(
    fixes: pd.DataFrame, keep: KeepSection | None, crs: pyproj.CRS
) -> tuple[Bool[NDArray, " n"], dict[str, int], list[str]]:
    """Which fixes `[fixes.keep]` leaves, how many each key sets aside, and what has to be said.

    Takes the columns x, y [m], time, minutes (clock) and kept_by_column. A fix that two keys set aside is counted by
    the first of column, hours, sun.

    Raises:
        StudyError: nothing is left.
    """
    counts: dict[str, int] = {}
    left = np.ones(len(fixes), dtype=bool)
    if keep is None:
        return left, counts, []
    rules = {}
    if keep.column is not None:
        rules["column"] = (fixes["kept_by_column"].to_numpy(dtype=bool), f"column = {_cells(keep.column)}")
    if keep.hours is not None:
        rules["hours"] = (by_hours(fixes["minutes"].to_numpy(), keep.hours), f'hours = "{keep.hours}"')
    if keep.sun is not None:
        rules["sun"] = (by_sun(fixes, crs, keep.sun), f'sun = "{keep.sun}"')
    said = []
    for key, (kept, words) in rules.items():
        counts[f"not_kept_by_{key}"] = int((left & ~kept).sum())
        left &= kept
        said.append(f"[fixes.keep] {words}: {counts[f'not_kept_by_{key}']:,} of {len(fixes):,} fixes were set aside.")
        if not left.any():
            raise StudyError(f"[fixes.keep] {words}: no fix is left; mend it, or take it out.")
    return left, counts, said


def _cell(value: Any) -> str:
    return ("true" if value else "false") if isinstance(value, bool) else str(value)


def _cells(column: dict[str, Any]) -> str:
    return first_few(f'{shown(key)} = "{shown(_cell(value))}"' for key, value in column.items())
