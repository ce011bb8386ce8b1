"""Relocations from tables: one row a fix, in the coordinates of the file.

Rows with blank coordinates are failed fixes: counted and set aside. Anything else that is not well-formed is an
error, so that no fix is lost by a typing mistake.
"""

import glob
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
import pandas as pd

from bayesrange._errors import StudyError
from bayesrange.study._bearing_fixes import BearingRows, bearing_fixes
from bayesrange.study._crs import parse_crs
from bayesrange.study._darwin_core import with_darwin_core
from bayesrange.study._deployments import assign_animals, read_deployments
from bayesrange.study._keep import by_column
from bayesrange.study._location_error import location_error
from bayesrange.study._settings import AnimalsSection, BearingsSection, FixesSection
from bayesrange.study._sources import ENDINGS, read_source
from bayesrange.study._tables import (
    column_or_error,
    counted,
    first_few,
    has_decimal_commas,
    numbers,
    one_name_each,
)  # fmt: skip
from bayesrange.study._times import clock_minutes, read_times

_PATTERN = set("*?[")


@dataclass(frozen=True)
class RawFixes:
    """Fixes before they are placed in the study's reference system."""

    table: pd.DataFrame  # as in Study, x, y [units of the file]; minutes (clock), kept_by_column
    counts: dict[str, int]
    warnings: list[str]
    files: dict[str, Path]
    crs: str | None  # reference system of x and y, where one is given
    deployments: pd.DataFrame | None = None
    failed: pd.DataFrame = field(default_factory=pd.DataFrame)  # animal, when (as written), file, row of failed fixes
    bearings: BearingRows | None = None


def read_fixes(
    folder: Path,
    section: FixesSection,
    animals: AnimalsSection | None = None,
    study_crs: str | None = None,
    bearings: BearingsSection | None = None,
) -> RawFixes:
    """All fixes of the study, sorted by animal and time; those outside any deployment are set aside.

    Args:
        folder: where the study file is.
        section: `[fixes]`.
        animals: `[animals]`.
        study_crs: reference system of files that name none.
        bearings: `[bearings]`, whose places are put to the fixes.

    Raises:
        StudyError: names file, line and column of what is wrong.
    """
    files = _files(folder, section.file, "[fixes] file")
    parts, failed, counts, warnings, systems = [], [], {"rows": 0, "failed": 0}, [], set()
    for name, path in files.items():
        table, crs = read_source(path, name, section)
        own = with_darwin_core(_own_system(section, crs, name), table, name)
        part, said = _fixes_of(table, own, name, folder)
        systems.add(own.crs)
        counts["rows"] += len(table)
        counts["failed"] += len(table) - len(part)
        warnings += said
        parts.append(part)
        failed.append(_failed_of(table, own, name))
    if section.error_table is not None:
        files[section.error_table] = folder / section.error_table
    if len(systems) > 1 and systems <= {None, study_crs}:
        systems = {None}
    if len(systems) > 1:
        raise StudyError("[fixes] file: the files are in more than one reference system; read them as one study each.")
    bearing_rows = None
    if bearings is not None:
        sources = _files(folder, bearings.file, "[bearings] file")
        found = bearing_fixes(folder, bearings, sources, section.zone, study_crs)
        parts.append(found.in_system(next(iter(systems))) if systems else found.table)
        systems = systems or {found.crs}
        bearing_rows = found.rows
        counts |= found.counts
        warnings += found.warnings
        files |= found.files
    fixes = pd.concat(parts, ignore_index=True)
    if "flag" in fixes:
        fixes["flag"] = fixes["flag"].fillna("").astype("str")
    if fixes.empty:
        raise StudyError(f"{first_few(files)}: there is no fix with coordinates ({counts['rows']} rows).")
    by_tag = (section.tag or (bearings.tag if bearings else None)) is not None
    one_name_each(fixes["animal"].unique(), "tags" if by_tag else "animals", first_few(files))
    deployments = None
    if animals is not None and animals.file is not None:
        deployments = read_deployments(folder, animals, section.zone, by_tag)
        fixes, set_aside, said = assign_animals(fixes, deployments, animals.file)
        counts |= set_aside
        warnings += said
        files[animals.file] = folder / animals.file
    if section.drop is None or "duplicate" not in section.drop.flags:
        _refuse_repeats(fixes)
    earlier = fixes.groupby("animal")["time"].diff() < pd.Timedelta(0)
    counts["unsorted"] = int(earlier.sum())
    fixes = fixes.sort_values(["animal", "time"], kind="stable", ignore_index=True)
    left_out = pd.concat(failed, ignore_index=True) if failed else pd.DataFrame()
    return RawFixes(fixes, counts, warnings, files, systems.pop(), deployments, left_out, bearing_rows)


def _files(folder: Path, given: str | list[str] | None, key: str) -> dict[str, Path]:
    found: dict[str, Path] = {}
    for entry in [given] if isinstance(given, str) else given or []:
        path = folder / entry
        if path.is_dir():
            names = sorted(str(Path(entry) / p.name) for p in path.iterdir() if p.suffix.lower() in ENDINGS)
        elif _PATTERN & set(entry) and not path.is_file():
            names = sorted(glob.glob(entry, root_dir=folder, recursive=True))
        else:
            names = [entry]
        if not names:
            raise StudyError(f'{key}: no file matches "{entry}" beside the study file.')
        found |= {Path(name).as_posix(): folder / name for name in names}
    return found


def _fixes_of(table: pd.DataFrame, section: FixesSection, name: str, folder: Path) -> tuple[pd.DataFrame, list[str]]:
    x = column_or_error(table, section.x, name, "[fixes] x names")
    y = column_or_error(table, section.y, name, "[fixes] y names")
    half = ((x == "") != (y == "")).to_numpy()
    if half.any():
        raise StudyError(
            f"{name}, line {table.index[half][0]}: one coordinate is blank; give both, or blank both for a failed fix."
        )
    table = table[(x != "").to_numpy()]
    key = "animal" if section.tag is None else "tag"
    animal = column_or_error(table, section.tag or section.animal, name, f"[fixes] {key} names")
    if (animal == "").any():
        raise StudyError(f"{name}, line {table.index[animal == ''][0]}: the {key} is blank; name it.")
    texts = _time_texts(table, section, name)
    times, said = read_times(texts, section.zone, name)
    error = location_error(table, section, name, folder)
    if has_decimal_commas(table[section.x]) or has_decimal_commas(table[section.y]):
        said.append(f"{name}: {section.x} and {section.y} are written with decimal commas and were read so.")
    part = pd.DataFrame(
        {
            "animal": animal.to_numpy(),
            "time": times.array,
            "x": numbers(table[section.x], name),
            "y": numbers(table[section.y], name),
            "group": _groups(table, section, name),
            **error.columns,
            "file": name,
            "row": table.index.to_numpy(dtype=np.int64),
            "minutes": clock_minutes(texts, times, section.zone) if section.keep and section.keep.hours else 0,
            "kept_by_column": by_column(table, section.keep, name),
        }
    ).astype({"animal": "str", "group": "str", "file": "str"})
    return part, said + error.said


def _failed_of(table: pd.DataFrame, section: FixesSection, name: str) -> pd.DataFrame:
    """Rows without coordinates, as written."""
    rows = table[(table[section.x] == "").to_numpy()]
    animal = column_or_error(rows, section.tag or section.animal, name, "[fixes] names").to_numpy()
    when = _time_texts(rows, section, name).to_numpy()
    return pd.DataFrame({"animal": animal, "when": when, "file": name, "row": rows.index.to_numpy(dtype=np.int64)})


def _time_texts(table: pd.DataFrame, section: FixesSection, name: str) -> pd.Series:
    """Times as written; a day and a clock in two columns are put together."""
    if isinstance(section.time, str):
        return column_or_error(table, section.time, name, "[fixes] time names")
    day, clock = (column_or_error(table, column, name, "[fixes] time names") for column in section.time)
    return day.str.cat(clock, sep="T")


def _own_system(section: FixesSection, crs: str | None, name: str) -> FixesSection:
    """The section with the system that the file itself declares.

    Raises:
        StudyError: the study file says another.
    """
    if crs is None:
        return section
    if section.crs is not None and parse_crs(section.crs, "[fixes] crs") != parse_crs(crs, name):
        raise StudyError(f"[fixes] crs: it is {section.crs}, but {name} says of itself {crs}; take crs out.")
    return section.model_copy(update={"crs": section.crs or crs})


def _groups(table: pd.DataFrame, section: FixesSection, name: str) -> np.ndarray:
    """The group column; the default one may be absent, one that the user named may not."""
    if section.group not in table.columns and "group" not in section.model_fields_set:
        return np.full(len(table), "")
    return column_or_error(table, section.group, name, "[fixes] group names").to_numpy()


def _refuse_repeats(fixes: pd.DataFrame) -> None:
    again = fixes.duplicated(["animal", "time"])
    if again.any():
        rows = first_few(f"{f} line {r}" for f, r in zip(fixes["file"][again], fixes["row"][again], strict=True))
        number = counted(int(again.sum()), "fix repeats", "fixes repeat")
        raise StudyError(
            f"{number} an animal and time that stand before ({rows}); keep one row for each, or "
            'drop the later ones by flags = ["duplicate"] in [fixes.drop].'
        )
