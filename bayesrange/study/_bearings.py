"""Bearings from tables: one row a direction taken from a station; and which of them make one fix.

Rows with a blank bearing are failed ones: counted and set aside. Anything else that is not well-formed is an error.
"""

from pathlib import Path
from typing import NamedTuple

import numpy as np
import pandas as pd
from jaxtyping import Float
from numpy.typing import NDArray

from bayesrange._errors import StudyError
from bayesrange.study._settings import BearingsSection
from bayesrange.study._settings_file import nearest
from bayesrange.study._tables import column_or_error, counted, first_few, numbers, one_name_each, read_table, shown
from bayesrange.study._times import clock_minutes, read_times

LONGEST_SET = pd.Timedelta(days=1)
"""Bearings of one set are not further apart than this: numbers of sets that begin anew each day would run together."""


class Bearings(NamedTuple):
    """Rows of all files, in the order of time within their sets.

    The table's columns are animal, time, minutes (clock), station, x, y [units of the file], bearing and declination
    [degrees], observer, group, set (a number), file and row (line).
    """

    table: pd.DataFrame
    failed: int
    warnings: list[str]


def read_bearings(folder: Path, section: BearingsSection, files: dict[str, Path], zone: str | None) -> Bearings:
    """All bearings, with the set of each.

    Args:
        folder: where the study file is.
        section: `[bearings]`.
        files: of bearings, by the name the user knows them by.
        zone: in which times without an offset are.

    Raises:
        StudyError: names file, line and column of what is wrong.
    """
    stations = None if section.stations is None else _stations(folder / section.stations, section.stations)
    parts, rows, warnings = [], 0, []
    for name, path in files.items():
        part, said, number = _bearings_of(read_table(path, name), section, stations, name, zone)
        parts.append(part)
        rows += number
        warnings += said
    table = pd.concat(parts, ignore_index=True)
    if table.empty:
        raise StudyError(f"{first_few(files)}: there is no bearing in it ({counted(rows, 'row', 'rows')}).")
    one_name_each(table["animal"], "tags" if section.tag else "animals", first_few(files))
    one_name_each(table["observer"], "observers", first_few(files))
    _refuse_repeats(table)
    table = _in_sets(table, section)
    return Bearings(table, rows - len(table), warnings)


def _stations(path: Path, name: str) -> pd.DataFrame:
    """Places by station."""
    table = read_table(path, name)
    station = column_or_error(table, "station", name, "a table of stations needs")
    wrong = ((station == "") | station.duplicated()).to_numpy()
    if wrong.any():
        what = "blank" if station[wrong].iloc[0] == "" else f'"{shown(station[wrong].iloc[0])}" once more'
        raise StudyError(f"{name}, line {table.index[wrong][0]}: the station is {what}; expected one line a station.")
    one_name_each(station, "stations", name)
    place = {c: numbers(column_or_error(table, c, name, "a table of stations needs"), name) for c in ("x", "y")}
    return pd.DataFrame(place, index=station.to_numpy())


def _bearings_of(
    table: pd.DataFrame, section: BearingsSection, stations: pd.DataFrame | None, name: str, zone: str | None
) -> tuple[pd.DataFrame, list[str], int]:
    """The rows of one file that have a bearing, what has to be said, and how many rows there are."""
    rows = len(table)
    table = table[(column_or_error(table, section.bearing, name, "[bearings] bearing names") != "").to_numpy()]
    key = "animal" if section.tag is None else "tag"
    animal = column_or_error(table, section.tag or section.animal, name, f"[bearings] {key} names")
    if (animal == "").any():
        raise StudyError(f"{name}, line {table.index[animal == ''][0]}: the {key} is blank; name it.")
    texts = column_or_error(table, section.time, name, "[bearings] time names")
    times, said = read_times(texts, zone, name)
    station, x, y = _places(table, section, stations, name)
    part = pd.DataFrame(
        {
            "animal": animal.to_numpy(),
            "time": times.array,
            "minutes": clock_minutes(texts, times, zone),
            "station": station,
            "x": x,
            "y": y,
            "bearing": _degrees(table[section.bearing], name, "bearing", 0, 360),
            "declination": _declination(table, section, name),
            "observer": _optional(table, section, "observer", name),
            "group": _optional(table, section, "group", name),
            "label": _optional(table, section, "set", name),
            "has_label": section.set in table.columns,
            "file": name,
            "row": table.index.to_numpy(dtype=np.int64),
        }
    )
    texts_of = ["animal", "station", "observer", "group", "label", "file"]
    return part.astype(dict.fromkeys(texts_of, "str")), said, rows


def _optional(table: pd.DataFrame, section: BearingsSection, key: str, name: str) -> NDArray:
    """A column that may be absent, unless the user named it."""
    column = getattr(section, key)
    if column not in table.columns and key not in section.model_fields_set:
        return np.full(len(table), "")
    return column_or_error(table, column, name, f"[bearings] {key} names").to_numpy()


def _places(
    table: pd.DataFrame, section: BearingsSection, stations: pd.DataFrame | None, name: str
) -> tuple[NDArray, Float[NDArray, " n"], Float[NDArray, " n"]]:
    """Name and place of each row's station."""
    if stations is None:
        if section.station_x not in table.columns and "station_x" not in section.model_fields_set:
            raise StudyError(
                f"{name}: nothing says where the stations are; name their table by [bearings] stations = "
                f'"stations.csv", or add columns {section.station_x} and {section.station_y}.'
            )
        keys = ("station_x", "station_y")
        x, y = (
            numbers(column_or_error(table, getattr(section, key), name, f"[bearings] {key} names"), name)
            for key in keys
        )
        own = table.get(section.station, pd.Series("", index=table.index))
        return own.where(own != "", table[section.station_x] + " " + table[section.station_y]).to_numpy(), x, y
    station = column_or_error(table, section.station, name, "[bearings] station names")
    unknown = ~station.isin(list(stations.index)).to_numpy()
    if unknown.any():
        line, text = table.index[unknown][0], station[unknown].iloc[0]
        close = nearest(text, list(stations.index))
        hint = f'did you mean "{close}"?' if close else "add a line for it, or mend its name."
        what = f'the station "{shown(text)}" is not in' if text else "the station is blank; expected one of"
        raise StudyError(f"{name}, line {line}: {what} {section.stations}; {hint}")
    found = stations.loc[station]
    return station.to_numpy(), found["x"].to_numpy(), found["y"].to_numpy()


def _declination(table: pd.DataFrame, section: BearingsSection, name: str) -> Float[NDArray, " n"]:
    """Declination of each row [degrees, east positive]; 0 for bearings that are not magnetic."""
    if not isinstance(section.declination, str):
        return np.full(len(table), float(section.declination or 0))
    texts = column_or_error(table, section.declination, name, "[bearings] declination names")
    return _degrees(texts, name, "declination", -180, 180)


def _degrees(texts: pd.Series, name: str, what: str, lowest: float, highest: float) -> Float[NDArray, " n"]:
    values = numbers(texts, name)
    bad = (values < lowest) | (values > highest)
    if bad.any():
        line, text = texts.index[bad][0], texts[bad].iloc[0]
        raise StudyError(
            f'{name}, line {line}: the {what} is "{shown(text)}"; expected degrees from {lowest:g} to {highest:g}.'
        )
    return values


def _refuse_repeats(table: pd.DataFrame) -> None:
    again = table.duplicated(["animal", "time", "station", "observer"])
    if again.any():
        rows = first_few(f"{f} line {r}" for f, r in zip(table["file"][again], table["row"][again], strict=True))
        number = counted(int(again.sum()), "bearing repeats", "bearings repeat")
        raise StudyError(
            f"{number} an animal, time, station and observer that stand before ({rows}); keep one row for each."
        )


def _in_sets(table: pd.DataFrame, section: BearingsSection) -> pd.DataFrame:
    """The table sorted by animal and time, with a number for each set in place of the label."""
    unlabelled = (table["label"] == "").to_numpy()
    if unlabelled.any() and section.window_min is None:
        row = table[unlabelled].iloc[0]
        which = "the set is blank" if row["has_label"] else f'there is no column "{section.set}"'
        raise StudyError(
            f"{row['file']}, line {row['row']}: {which}, and nothing else says which bearings make one fix; fill it "
            "in, or say within how many minutes an animal's bearings belong together, as in [bearings] window_min = 20."
        )
    table = table.sort_values(["animal", "time"], kind="stable", ignore_index=True)
    unlabelled = (table["label"] == "").to_numpy()
    window = pd.Timedelta(minutes=section.window_min or 0)
    by_window = np.full(len(table), -1)
    by_window[unlabelled] = _windows(table[unlabelled], window)
    table["set"] = table.groupby(["animal", "label", by_window], sort=False).ngroup()
    table = table.sort_values("set", kind="stable", ignore_index=True)
    sets = table.groupby("set")
    apart = (sets["time"].transform("max") - sets["time"].transform("min") > LONGEST_SET).to_numpy()
    if apart.any():
        row = table[apart].iloc[0]
        raise StudyError(
            f'{row["file"]}, line {row["row"]}: the bearings of the set "{shown(row["label"])}" of '
            f"{shown(row['animal'])} are more than a day apart; give each fix a set of its own, by numbers that do not "
            "begin anew each day."
        )
    mixed = (sets["group"].transform("first") != table["group"]).to_numpy()
    if mixed.any():
        row = table[mixed].iloc[0]
        raise StudyError(
            f"{row['file']}, line {row['row']}: the group is not that of the set's other bearings; an animal is in one "
            "group at a time."
        )
    return table.drop(columns=["label", "has_label"])


def _windows(table: pd.DataFrame, window: pd.Timedelta) -> NDArray:
    """Number of each row's set, in the order of animal and time: all bearings from its first to a window later."""
    number, first, animal = -1, None, None
    numbers_of = []
    for name, time in zip(table["animal"], table["time"], strict=True):
        if first is None or name != animal or time - first > window:
            number, first, animal = number + 1, time, name
        numbers_of.append(number)
    return np.array(numbers_of, dtype=int)
