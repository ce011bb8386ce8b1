"""A new study: a commented study file and empty tables, or filled in from a file of fixes as far as it can be told."""

import json
import re
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING

from bayesrange._errors import StudyError

if TYPE_CHECKING:
    from bayesrange.study import Guess

STUDY = """\
# A study for bayesrange. Lines that start with # are notes; take the # away to use a key.

[study]
name   = "My study"
crs    = "EPSG:32633"          # a metric reference system; all computing happens in it
cell_m = 100                   # edge of a cell in metres, at least 10, better 20 across a group's range; or "auto"
area   = "area.geojson"        # polygon of the study area; animals are taken never to leave it

[fixes]
file   = "fixes.csv"           # or a pattern such as "collars/*.csv"
animal = "animal"              # the names of the columns
time   = "time"                # ISO 8601 with offset; or local time, with the next line
# zone = "Europe/Oslo"
x      = "x"                   # in study.crs; or with the next line. Blank coordinates are failed fixes: counted
y      = "y"
# crs  = "EPSG:4326"           # if x is longitude and y is latitude
group  = "group"               # not needed for tracks
# error = 15                   # location error, standard deviation per axis in metres: a number or a column
# max_speed_kmh = 15           # faster the animals cannot be; left out: judged by what is usual for each
# Directions taken from stations (VHF) go into a section [bearings] instead, or beside this one: docs/bearings.md

# [fixes.drop]                 # `bayesrange screen` shows the flags; nothing is dropped unless said here
# flags = ["duplicate", "speed", "spike", "stationary", "outside"]

[groups]                       # not needed for tracks
file = "groups.csv"            # group,x,y,animals: home centre (empty: estimated), adults that mark (empty: 1; or 3-5)

# [animals]
# file = "animals.csv"         # animal, and what is known of it: from, until, sex, release_batch, memory_start

# [layers.forage]
# file = "forage.tif"          # a GeoTIFF that covers the area
# unit = "kg/ha"

# [layers.water]
# file  = "water.tif"
# no_go = true                 # cells above 0 are outside the area

[model]
card = "avoidance"             # `bayesrange cards` lists them
# layers = ["forage"]          # for cards with a resource term
# perception_m = 200           # distance over which scent is perceived; default two cells

# For tracks (the cards steps-resources, steps-home, memory, memory-resources):
# pooling = "hierarchical"     # or "individual": each animal alone
# covariates = ["sex"]         # columns of animals.csv by which animals may differ
# interval_h = 1.0             # hours from fix to fix that make a step; default the commonest interval
# memory_start = "learned"     # residents, who know their range; default "naive": released, know nothing
# learning_days = 30           # with "learned": the first days of a record, which only build memory
# encoding_range_m = 150       # how far around a place a stay is remembered; default the median step
# vary = ["step_length"]       # step length by the hour of the day; "selection": by day and night

[sampling]
chains = 4
warmup = 500
draws  = 500
seed   = 20
"""

TABLES = {"fixes.csv": "animal,time,x,y,group\n", "groups.csv": "group,x,y,animals\n"}


_CHECK = "# please check"
_DEFAULTS = {"animal": "animal", "time": "time", "x": "x", "y": "y", "group": "group"}


def write_start(folder: Path, fixes: Sequence[Path] = ()) -> list[str]:
    """Write the files.

    Args:
        folder: new or empty.
        fixes: files of fixes, which stay where they are; the study file refers to them.

    Returns:
        Lines for the screen: what was written and what to do next.

    Raises:
        StudyError: the folder holds something already, or the fixes cannot be made out.
    """
    if folder.exists() and (not folder.is_dir() or any(folder.iterdir())):
        raise StudyError(f"{folder}: expected a new or empty folder; nothing was written.")
    if fixes:
        return _write_filled_in(folder, fixes)
    folder.mkdir(parents=True, exist_ok=True)
    (folder / "study.toml").write_text(STUDY, encoding="utf-8")
    for name, header in TABLES.items():
        (folder / name).write_text(header, encoding="utf-8")
    return [
        f"Written: {folder / 'study.toml'}, {', '.join(TABLES)}.",
        "Fill in the tables, put area.geojson (and layers) beside them, go through study.toml, then:",
        f"  bayesrange screen {folder}     a look at the data",
        f"  bayesrange fit {folder}",
    ]


def _write_filled_in(folder: Path, fixes: Sequence[Path]) -> list[str]:
    """Write a study file for these fixes, and tables with the animals and groups found in them."""
    import pandas as pd

    from bayesrange.study import guess_fixes

    found = guess_fixes(fixes, folder)
    folder.mkdir(parents=True, exist_ok=True)
    (folder / "study.toml").write_text(_filled_in(found), encoding="utf-8")
    animals = found.animals.reindex(columns=["animal", "tag", "from", "until", "group", "sex", "age_class", "fate"])
    animals.to_csv(folder / "animals.csv", index=False)
    groups = pd.DataFrame({"group": found.groups}).reindex(columns=["group", "x", "y", "animals"])
    groups.to_csv(folder / "groups.csv", index=False)
    return [
        f"Written: {folder / 'study.toml'}, animals.csv ({len(found.animals)} animals), groups.csv "
        f"({len(found.groups)} groups). The fixes stay where they are: {', '.join(found.files)}.",
        f"Go through study.toml; every line that was filled in by guess says “{_CHECK[2:]}”. Then:",
        f"  bayesrange screen {folder}",
    ]


def _filled_in(found: "Guess") -> str:
    """The study file with what was found, each line that was guessed marked."""
    lines = []
    section = ""
    for line in STUDY.splitlines():
        opened = re.match(r"(?:# )?\[([a-z.]+)\]", line)
        section = opened[1] if opened else section
        key = line.lstrip("# ").split("=")[0].strip() if "=" in line else ""
        if section == "study" and key == "crs":
            lines.append(_study_crs(found))
        elif section == "study" and key == "cell_m":
            lines.append('cell_m = "auto"               # or the edge of a cell in metres')
        elif section == "fixes" and key in ("file", "animal", "time", "x", "y", "group", "zone", "crs", "error"):
            lines += _fixes_line(found, key, line)
        elif section == "groups" and not found.groups and line:
            lines.append(f"# {line}")
        else:
            lines.append(line)
    return "\n".join(lines) + "\n"


def _study_crs(found: "Guess") -> str:
    if found.study_crs is None:
        return '# crs  = "EPSG:…"              # please fill in: the metric reference system of x and y'
    return f"{f'crs    = {_quoted(found.study_crs)}':<31}{_CHECK}: the system in which everything is computed"


def _fixes_line(found: "Guess", key: str, line: str) -> list[str]:
    """The line of one key of [fixes]; as it was where nothing was found."""
    if key == "file":
        value = _quoted(found.files[0]) if len(found.files) == 1 else f"[{', '.join(map(_quoted, found.files))}]"
        return [f"file   = {value}"]
    if key == "zone":
        if found.offset is None:
            return [
                f"# please check the times: expected 2031-03-01T04:00:00+01:00, found {found.time_example!a:.40}",
                line,
            ]
        return [line] if found.offset else ['# zone = "Europe/Oslo"        # please fill in: the times have no offset']
    if key == "crs":
        if found.crs is None:
            return [line, *[f"# please check: {remark}" for remark in found.remarks]]
        return [f"{f'crs    = {_quoted(found.crs)}':<31}{_CHECK}: the reference system of x and y"]
    column = found.columns.get(key)
    if column is None:
        return [line if key == "error" else f"# {line}"]
    value = _quoted(column) if isinstance(column, str) else f"[{', '.join(map(_quoted, column))}]"
    note = ": a standard deviation per axis in metres?" if key == "error" else ""
    if column == "coordinateUncertaintyInMeters":
        note = ": read as the radius of a 95 % circle"
    return [f"{f'{key:<6} = {value}':<31}{_CHECK}{note}"]


def _quoted(text: str) -> str:
    """Text as a TOML string."""
    return json.dumps(text, ensure_ascii=False)
