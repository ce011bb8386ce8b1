"""What the columns of a file of fixes seem to be, for a study file that the user then checks.

Only a guess from names and contents: whatever cannot be told is left open, so that the reader asks for it.
"""

import os
from collections.abc import Iterable
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
import pandas as pd

from bayesrange._errors import StudyError
from bayesrange.study._crs import crs_text, look_like_degrees, parse_crs, utm_for
from bayesrange.study._darwin_core import with_darwin_core
from bayesrange.study._settings import FixesSection
from bayesrange.study._sources import ENDINGS, read_source
from bayesrange.study._tables import numbers, shown
from bayesrange.study._times import ISO

# Words for the columns, the likeliest first; a column fits if its name, without signs, is one of them.
_NAMES = {
    "animal": ("animal", "animalid", "individual", "individualid", "organismid", "id", "name", "collar", "tag"),
    "time": ("time", "timestamp", "datetime", "dateandtime", "fixtime", "eventdate", "utc", "timeutc", "datetimeutc"),
    "x": ("x", "easting", "xm", "utmx", "utme", "east", "longitude", "lon", "long", "lng", "decimallongitude"),
    "y": ("y", "northing", "ym", "utmy", "utmn", "north", "latitude", "lat", "decimallatitude"),
    "group": ("group", "groupid", "pack", "clan", "herd", "pride", "band", "colony", "territory", "socialgroup"),
    "error": ("errorm", "error", "locationerror", "accuracy", "accuracym", "coordinateuncertaintyinmeters"),
}
_DAY, _CLOCK = ("date", "day", "fixdate"), ("clock", "hour", "timeofday", "time", "fixtime")
_NEEDED = {"animal": "the animal", "time": "the time", "x": "the easting or longitude", "y": "the northing or latitude"}


@dataclass(frozen=True)
class Guess:
    """What was found in files of fixes.

    Attributes:
        files: as the study file should name them.
        columns: key of [fixes] → column; time may be two.
        crs: of x and y, if the file says so or they look like degrees.
        study_crs: a UTM zone that fits, if that can be told.
        offset: whether the times have an offset; None where they cannot be read.
        time_example: a time as written.
        animals: every animal, with its group ("" if none or several).
        groups: every group.
        remarks: what the user should know.
    """

    files: list[str]
    columns: dict[str, str | list[str]]
    crs: str | None
    study_crs: str | None
    offset: bool | None
    time_example: str
    animals: pd.DataFrame
    groups: list[str]
    remarks: list[str] = field(default_factory=list)


def guess_fixes(files: Iterable[Path], folder: Path) -> Guess:
    """Look into files of fixes that a study in `folder` is to use.

    Raises:
        StudyError: a file that cannot be read, or that has no column for the animal, time or place.
    """
    paths, parts = list(files), []
    systems: set[str | None] = set()
    columns: dict[str, str | list[str]] = {}
    for path in paths:
        if path.suffix.lower() not in ENDINGS:
            raise StudyError(f"{path}: expected a file of fixes that ends in {', '.join(ENDINGS)}.")
        table, crs = read_source(path, path.name, FixesSection())
        if table.empty:
            raise StudyError(f"{path.name}: there is no row in it; expected a header line and one line a fix.")
        columns = columns or _columns(table, path.name)
        lacking = sorted({name for value in columns.values() for name in _listed(value)} - set(table.columns))
        if lacking:
            raise StudyError(
                f'{path.name}: there is no column "{shown(lacking[0])}", which {paths[0].name} has; start with '
                "files of the same columns."
            )
        systems.add(crs or with_darwin_core(FixesSection(), table, path.name).crs)
        parts.append(table)
    table = pd.concat(parts, ignore_index=True)
    remarks: list[str] = []
    x, y = _coordinates(table, columns)
    system = systems.pop() if len(systems) == 1 else None
    if system is None and look_like_degrees(x, y):
        system = "EPSG:4326"
    if system is None and look_like_degrees(y, x):
        remarks.append("x and y look exchanged: as longitude and latitude they would be the other way round")
    geographic = system is not None and parse_crs(system, "crs").is_geographic
    zone = crs_text(utm_for(x, y, parse_crs(str(system), "crs"))) if geographic and look_like_degrees(x, y) else None
    texts = _time(table, columns)
    readable = bool(texts.str.fullmatch(ISO).all())
    offset = bool(texts.str.contains(r"[T ].*(?:Z|[+-]\d{2}(?::?\d{2})?)$").all()) if readable else None
    names = sorted(set(table[str(columns["group"])]) - {""}) if "group" in columns else []
    return Guess(
        [_relative(path, folder) for path in paths], columns, system, zone if geographic else system,
        offset, str(texts.iloc[0]), _animals(table, columns), names, remarks,
    )  # fmt: skip


def _columns(table: pd.DataFrame, name: str) -> dict[str, str | list[str]]:
    """Key of [fixes] → column, from the columns' names."""
    plain = {_plain(str(column)): str(column) for column in reversed(list(table.columns))}
    found: dict[str, str | list[str]] = {}
    for key, words in _NAMES.items():
        fitting = [plain[word] for word in words if word in plain]
        if fitting:
            found[key] = fitting[0]
    day = next((plain[word] for word in _DAY if word in plain), None)
    clock = next((plain[word] for word in _CLOCK if word in plain), None)
    if day is not None and clock is not None and _only_clock(table[clock]):
        found["time"] = [day, clock]
    elif "time" not in found and day is not None:
        found["time"] = day
    for key, what in _NEEDED.items():
        if key not in found:
            raise StudyError(
                f"{name}: no column looks like {what}; there are {shown(', '.join(map(str, table.columns)), 200)}: "
                f'rename one to "{key}", or start without --fixes and name it by [fixes] {key}.'
            )
    return found


def _plain(name: str) -> str:
    return "".join(c for c in name.casefold() if c.isalnum())


def _only_clock(texts: pd.Series) -> bool:
    return bool(texts[texts != ""].head(50).str.fullmatch(r"\d{1,2}:\d{2}(?::\d{2}(?:[.,]\d+)?)?").all())


def _listed(value: str | list[str]) -> list[str]:
    return [value] if isinstance(value, str) else value


def _coordinates(table: pd.DataFrame, columns: dict[str, str | list[str]]) -> tuple[np.ndarray, np.ndarray]:
    """Coordinates of the rows that have both.

    Raises:
        StudyError: text that is no number.
    """
    x, y = (table[str(columns[axis])] for axis in ("x", "y"))
    filled = ((x != "") & (y != "")).to_numpy()
    if not filled.any():
        raise StudyError(f'no row has both "{x.name}" and "{y.name}"; expected fixes with coordinates.')
    return numbers(x[filled], "the file of fixes"), numbers(y[filled], "the file of fixes")


def _time(table: pd.DataFrame, columns: dict[str, str | list[str]]) -> pd.Series:
    names = _listed(columns["time"])
    texts = table[names[0]] if len(names) == 1 else table[names[0]].str.cat(table[names[1]], sep="T")
    return texts[table[names[0]] != ""]


def _animals(table: pd.DataFrame, columns: dict[str, str | list[str]]) -> pd.DataFrame:
    """One row an animal: animal, group (if it is in one only)."""
    animal = table[str(columns["animal"])]
    group = table[str(columns["group"])] if "group" in columns else pd.Series("", index=table.index)
    pairs = pd.DataFrame({"animal": animal.to_numpy(), "group": group.to_numpy()}).drop_duplicates()
    pairs = pairs[pairs["animal"] != ""]
    own = pairs.groupby("animal")["group"].agg(lambda g: g.iloc[0] if len(g) == 1 else "")
    return own.rename_axis("animal").reset_index()


def _relative(path: Path, folder: Path) -> str:
    """The file as a study in the folder names it."""
    try:
        return Path(os.path.relpath(path.resolve(), folder.resolve())).as_posix()
    except ValueError:  # on another drive
        return path.resolve().as_posix()
