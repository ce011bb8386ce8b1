"""Location error of fixes: a number, a column, dilution of precision, classes or ellipses, as standard deviations.

`error_m` is the standard deviation per axis. HDOP × UERE is the root mean square of the whole horizontal error, √2
times that (NRC 1995, *GPS: A Shared National Asset*, app. D). The ellipse of probability p around a normal error has
√(−2 ln(1 − p)) times its standard deviations as semi-axes.
"""

from pathlib import Path
from typing import NamedTuple

import numpy as np
import pandas as pd
from jaxtyping import Bool, Float
from numpy.typing import NDArray

from bayesrange._errors import StudyError
from bayesrange.study._darwin_core import SD_PER_RADIUS, UNCERTAINTY
from bayesrange.study._ellipses import COLUMNS, circular_sd
from bayesrange.study._settings import FixesSection
from bayesrange.study._settings_file import nearest
from bayesrange.study._tables import column_or_error, counted, numbers, read_table, shown


class LocationError(NamedTuple):
    """Columns of the fixes and what has to be said."""

    columns: dict[str, Float[NDArray, " n"]]  # error_m, and the ellipses' where there are some, NaN where one is blank
    said: list[str]


def location_error(table: pd.DataFrame, section: FixesSection, name: str, folder: Path) -> LocationError:
    """Location error of each row; 0 where none is known.

    Args:
        table: text cells.
        section: `[fixes]`.
        name: what the user calls the file of the table.
        folder: where the study file is.

    Raises:
        StudyError: names file, line and column of what is wrong.
    """
    other = next((key for key in ("hdop", "error_class", "error_major") if getattr(section, key) is not None), None)
    if other is None:
        sd, blank, said = _plain(table, section, name)
        columns = {"error_m": sd}
    else:
        said = [f'{name}: the column "error_m" is not used, as [fixes] {other} says the error.'] * (
            section.error in table.columns
        )
        if other == "error_major":
            columns, blank, more = _ellipses(table, section, name)
            said += more
        else:
            sd, blank = (_dilution if other == "hdop" else _classes)(table, section, name, folder)
            columns = {"error_m": sd}
    number = int(blank.sum())
    if number:
        said.append(f"{name}: {counted(number, 'fix has', 'fixes have')} no error given, taken as exact.")
    return LocationError(columns, said)


def _plain(table: pd.DataFrame, section: FixesSection, name: str) -> tuple[NDArray, Bool[NDArray, " n"], list[str]]:
    none = np.zeros(len(table), dtype=bool)
    if isinstance(section.error, float | int):
        return np.full(len(table), float(section.error)), none, []
    if section.error not in table.columns and "error" not in section.model_fields_set:
        return np.zeros(len(table)), none, []
    texts = column_or_error(table, section.error, name, "[fixes] error names")
    error = numbers(texts, name, blank=0.0)
    _refuse(texts, error < 0, name, "error", "at least 0 m (sd per axis)")
    said = []
    if section.error == UNCERTAINTY:
        error = error * SD_PER_RADIUS
        said.append(f"{name}: {UNCERTAINTY} was read as the radius of a 95 % circle, sd per axis = radius / 2.4477.")
    return error, (texts == "").to_numpy(), said


def _dilution(
    table: pd.DataFrame, section: FixesSection, name: str, folder: Path
) -> tuple[Float[NDArray, " n"], Bool[NDArray, " n"]]:
    """HDOP × UERE / √2."""
    texts = column_or_error(table, str(section.hdop), name, "[fixes] hdop names")
    hdop, blank = numbers(texts, name, blank=0.0), (texts == "").to_numpy()
    _refuse(texts, (hdop <= 0) & ~blank, name, "HDOP", "a number above 0, or blank")
    return hdop * float(section.uere_m or 0) / np.sqrt(2), blank


def _classes(
    table: pd.DataFrame, section: FixesSection, name: str, folder: Path
) -> tuple[Float[NDArray, " n"], Bool[NDArray, " n"]]:
    """The class's error in the table of classes."""
    file = str(section.error_table)
    sds = _class_table(folder / file, file)
    texts = column_or_error(table, str(section.error_class), name, "[fixes] error_class names")
    blank = (texts == "").to_numpy()
    unknown = ~texts.isin(list(sds)).to_numpy() & ~blank
    if unknown.any():
        line, text = texts.index[unknown][0], texts[unknown].iloc[0]
        close = nearest(text, list(sds))
        hint = f'did you mean "{close}"?' if close else f"known are {shown(', '.join(sds), 120)}."
        raise StudyError(f'{name}, line {line}: the error class "{shown(text)}" is not in {file}; {hint}')
    return texts.map(sds).fillna(0.0).to_numpy(dtype=float), blank


def _class_table(path: Path, file: str) -> dict[str, float]:
    table = read_table(path, file)
    label = column_or_error(table, "class", file, "a table of error classes needs")
    texts = column_or_error(table, "error_m", file, "a table of error classes needs")
    sds = numbers(texts, file)
    _refuse(texts, sds < 0, file, "error", "at least 0 m (sd per axis)")
    wrong = ((label == "") | label.duplicated()).to_numpy()
    if wrong.any():
        what = "blank" if label[wrong].iloc[0] == "" else f'"{shown(label[wrong].iloc[0])}" once more'
        raise StudyError(f"{file}, line {table.index[wrong][0]}: the class is {what}; expected one line a class.")
    return dict(zip(label, sds.tolist(), strict=True))


def _ellipses(
    table: pd.DataFrame, section: FixesSection, name: str
) -> tuple[dict[str, Float[NDArray, " n"]], Bool[NDArray, " n"], list[str]]:
    """Semi-axes as standard deviations, and the azimuth of the long one as the file gives it."""
    keys = ("error_major", "error_minor", "error_bearing")
    texts = [column_or_error(table, str(getattr(section, key)), name, f"[fixes] {key} names") for key in keys]
    cells = np.stack([(text == "").to_numpy() for text in texts])
    blank = cells.all(axis=0)
    some = cells.any(axis=0) & ~blank
    if some.any():
        raise StudyError(
            f"{name}, line {table.index[some][0]}: the ellipse is given in part; give both semi-axes and the bearing, "
            "or leave all three blank."
        )
    major, minor, azimuth = (numbers(text, name, blank=0.0) for text in texts)
    _refuse(texts[1], minor < 0, name, "short semi-axis", "at least 0 m")
    _refuse(texts[0], major < minor, name, "long semi-axis", f'at least the short one, column "{section.error_minor}"')
    _refuse(texts[2], (azimuth < 0) | (azimuth > 360), name, "ellipse's bearing", "0 to 360 degrees, clockwise")
    level = section.error_level
    per_sd = 1.0 if level is None else float(np.sqrt(-2 * np.log1p(-level)))
    meant = "standard deviations" if level is None else f"those of {100 * level:g} % ellipses: sd = it / {per_sd:.4f}"
    said = [f"{name}: {section.error_major} and {section.error_minor} were read as semi-axes that are {meant}."]
    major, minor = major / per_sd, minor / per_sd
    columns = {"error_m": circular_sd(major, minor)}
    for column, values in zip(COLUMNS, (major, minor, azimuth), strict=True):
        columns[column] = np.where(blank, np.nan, values)
    return columns, blank, said


def _refuse(texts: pd.Series, bad: Bool[NDArray, " n"], name: str, what: str, expected: str) -> None:
    if bad.any():
        line, text = texts.index[bad][0], texts[bad].iloc[0]
        raise StudyError(f'{name}, line {line}: the {what} is "{shown(text)}"; expected {expected}.')
