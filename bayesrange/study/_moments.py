"""Bounds of periods, deployments and groups as moments in UTC.

A day counts whole: as `from` it begins at its midnight, as `until` it ends at the next one. A moment as `until` is the
first that is no longer meant. Clock times without an offset are in the study's zone; days without a zone are UTC's.
"""

from datetime import date, datetime
from zoneinfo import ZoneInfo

import pandas as pd

from bayesrange._errors import StudyError
from bayesrange.study._times import known_zone, read_times

OPEN_START, OPEN_END = pd.Timestamp("1700-01-01T00:00Z"), pd.Timestamp("2250-01-01T00:00Z")


def bound(given: date | datetime, zone: str | None, where: str, end: bool) -> pd.Timestamp:
    """A date or time of the study file as a moment in UTC.

    Args:
        given: as TOML gave it.
        zone: of the study, if it has one.
        where: file and key, for messages.
        end: whether it stands for an end, so that a day is meant to its end.

    Raises:
        StudyError: a clock time without offset and no zone, or one that summer time skips or repeats.
    """
    if not isinstance(given, datetime):
        return _midnight(given, zone, where, end)
    texts = pd.Series([given.isoformat()], index=[0])
    try:
        return read_times(texts, zone, where)[0].iloc[0]
    except StudyError as error:
        raise StudyError(str(error).replace(", line 0", "")) from None


def bounds(texts: pd.Series, zone: str | None, name: str, end: bool) -> pd.Series:
    """Cells of a column `from` or `until` as moments in UTC; blanks are open.

    Raises:
        StudyError: names file and line of what is no date or time.
    """
    found = pd.Series(OPEN_END if end else OPEN_START, index=texts.index, dtype="datetime64[ns, UTC]")
    filled = texts[texts != ""]
    days = filled[filled.str.fullmatch(r"\d{4}-\d\d-\d\d")]
    clocks = filled[~filled.index.isin(days.index)]
    if len(days):
        read_times(days, "UTC", name)  # refuses days that are in no calendar
        ends = [_midnight(date.fromisoformat(day), zone, f"{name}, line {line}", end) for line, day in days.items()]
        found.loc[days.index] = pd.Series(ends, index=days.index, dtype="datetime64[ns, UTC]")
    if len(clocks):
        found.loc[clocks.index] = read_times(clocks, zone, name)[0]
    return found


def _midnight(day: date, zone: str | None, where: str, end: bool) -> pd.Timestamp:
    own = ZoneInfo(known_zone(zone)) if zone else ZoneInfo("UTC")
    if not OPEN_START.year < day.year < OPEN_END.year:
        raise StudyError(f"{where}: {day} is too far off; expected a day between 1701 and 2249.")
    start = pd.Timestamp(day) + pd.Timedelta(days=1 if end else 0)
    return start.tz_localize(own, ambiguous=True, nonexistent="shift_forward").tz_convert("UTC")
