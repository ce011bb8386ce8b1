"""Times of fixes: ISO 8601 text to moments in UTC."""

from zoneinfo import ZoneInfo, available_timezones

import numpy as np
import pandas as pd

from bayesrange._errors import StudyError
from bayesrange.study._settings_file import nearest
from bayesrange.study._tables import counted, first_few, shown

_CLOCK, _OFFSET = r"[T ][0-9]{2}:[0-9]{2}(?::[0-9]{2}(?:[.,][0-9]+)?)?", r" ?(?:Z|[+-][0-9]{2}(?::?[0-9]{2})?)"
ISO = rf"[0-9]{{4}}-[0-9]{{2}}-[0-9]{{2}}(?:{_CLOCK}(?:{_OFFSET})?)?"
YEARS = (1700, 2260)
"""Years that moments in nanoseconds can hold, with some room."""

_EXAMPLE = "expected ISO 8601 such as 2031-03-01T04:00:00+01:00"


def read_times(texts: pd.Series, zone: str | None, name: str) -> tuple[pd.Series, list[str]]:
    """Moments in UTC, and what has to be said about them.

    Args:
        texts: one time a cell, blanks cut off; the index holds line numbers.
        zone: IANA name of the zone in which times without an offset are, or None.
        name: what the user calls the file.

    Raises:
        StudyError: not ISO 8601, no such day, no offset and no zone, or a clock time that the zone skips or repeats.
    """
    _refuse(texts, ~texts.str.fullmatch(ISO).to_numpy(dtype=bool), name, _EXAMPLE)
    naive = ~texts.str.contains(f"[T ].*{_OFFSET}$").to_numpy(dtype=bool)
    if naive.any() and zone is None:
        raise StudyError(
            f"{name}, line {texts.index[naive][0]}: the time {texts[naive].iloc[0]} has no offset from UTC; write it "
            'as in 2031-03-01T04:00:00+01:00, or say the zone by [fixes] zone = "Europe/Oslo".'
        )
    times = pd.Series(pd.NaT, index=texts.index, dtype="datetime64[ns, UTC]")
    plain = texts.str.replace(",", ".", regex=False)
    times[~naive] = _parsed(plain[~naive], texts, name)
    if naive.any():
        local = _parsed(plain[naive], texts, name).dt.tz_localize(None)
        times[naive] = _in_zone(local, texts, str(zone), name)
    days = int((texts.str.len() == len("2031-03-01")).sum())
    what = counted(days, "time is a day", "times are days")
    return times, [f"{name}: {what} without a clock time, read as 00:00."] if days else []


def known_zone(zone: str) -> str:
    """The zone's name, if there is such a zone.

    Raises:
        StudyError: suggests the nearest known one.
    """
    if zone not in available_timezones():
        close = nearest(zone, sorted(available_timezones()))
        hint = f'did you mean "{close}"?' if close else 'expected a name such as "Europe/Oslo".'
        raise StudyError(f'[fixes] zone: there is no time zone "{shown(zone)}"; {hint}')
    return zone


def clock_minutes(texts: pd.Series, times: pd.Series, zone: str | None) -> np.ndarray:
    """Minutes since midnight on the clock of the study's zone, or without one on the clock as it is written."""
    if zone is not None:
        local = times.dt.tz_convert(ZoneInfo(known_zone(zone)))
        return (local.dt.hour * 60 + local.dt.minute).to_numpy(dtype=int)
    clock = texts.str.extract(r"[T ](\d\d):(\d\d)").fillna("0").astype(int)
    return (clock[0] * 60 + clock[1]).to_numpy(dtype=int)


def _parsed(texts: pd.Series, original: pd.Series, name: str) -> pd.Series:
    """Moments read as if in UTC where no offset is given."""
    times = pd.to_datetime(texts, format="ISO8601", utc=True, errors="coerce")
    lost = original.loc[texts.index]
    _refuse(lost, times.isna().to_numpy(), name, "there is no such day or time of day")
    first, last = YEARS
    _refuse(lost, ~times.dt.year.between(first, last).to_numpy(), name, f"expected a year from {first} to {last}")
    return times.astype("datetime64[ns, UTC]")


def _in_zone(local: pd.Series, texts: pd.Series, zone: str, name: str) -> pd.Series:
    placed = local.dt.tz_localize(ZoneInfo(known_zone(zone)), ambiguous="NaT", nonexistent="NaT")
    lost = placed.isna().to_numpy()
    _refuse(texts.loc[local.index], lost, name, f"summer time in {zone} skips or repeats it; write it with its offset")
    return placed.dt.tz_convert("UTC")


def _refuse(texts: pd.Series, bad: np.ndarray, name: str, why: str) -> None:
    if bad.any():
        lines = first_few(texts.index[bad])
        word = "lines" if bad.sum() > 1 else "line"
        raise StudyError(f'{name}, {word} {lines}: the time "{shown(texts[bad].iloc[0])}" cannot be read: {why}.')
