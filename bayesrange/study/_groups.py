"""The groups table: home centres, numbers of marking adults, when they are there, covariates."""

from pathlib import Path
from typing import NamedTuple

import numpy as np
import pandas as pd

from bayesrange._errors import StudyError
from bayesrange.study._marking_animals import count_animals
from bayesrange.study._moments import bounds
from bayesrange.study._periods import Span
from bayesrange.study._tables import column_or_error, counted, first_few, numbers, one_name_each, read_table
from bayesrange.study._texts import shown

_OWN = ("group", "x", "y", "animals", "from", "until")


class GroupsTable(NamedTuple):
    """Groups that are there at some time of the fit, when every group of the file is there, and remarks."""

    groups: pd.DataFrame
    stays: pd.DataFrame
    said: list[str]


def read_groups(path: Path, name: str, covariates: list[str], span: Span, zone: str | None) -> GroupsTable:
    """Groups in the order of the file, coordinates as written there, and what has to be said.

    Args:
        path: where the file is.
        name: what the user calls it.
        covariates: columns that the model uses.
        span: time that is fitted; a group that is never there in it is left out.
        zone: of the study's clock.

    Returns:
        `groups` with columns group, x, y [as written; NaN = to be estimated], animals (and where a number is uncertain
        also animals_low and animals_high, see `count_animals`), then every further column: numbers where all its cells
        are numbers, else text; `stays` with group, from and until (UTC).

    Raises:
        StudyError: names file, line and column of what is wrong.
    """
    table = read_table(path, name)
    if table.empty:
        raise StudyError(f"{name}: there is no group; expected one line a group.")
    group = column_or_error(table, "group", name, "a groups table needs")
    if (group == "").any():
        raise StudyError(f"{name}, line {table.index[group == ''][0]}: the group's name is blank; give it one.")
    again = group.duplicated()
    if again.any():
        raise StudyError(f'{name}, line {table.index[again][0]}: the group "{group[again].iloc[0]}" stands twice.')
    one_name_each(group, "groups", name)
    if "where" in table.columns and (table["where"] != "").any():
        raise StudyError(
            f"{name}, line {table.index[table['where'] != ''][0]}: a polygon in the column where, for a home centre "
            "that is not known better, is not built yet; give x and y, or take the column out."
        )
    stays = _stays(table, name, zone)
    there = ((stays["from"] < span.end) & (stays["until"] > span.start)).to_numpy()
    absent = group[~there]
    table, group = table[there], group[there]
    if table.empty:
        raise StudyError(f"{name}: no group is there in the time that is fitted; check from and until.")
    x, y = (numbers(column_or_error(table, c, name, "a groups table needs"), name, blank=np.nan) for c in ("x", "y"))
    half = np.isnan(x) != np.isnan(y)
    if half.any():
        raise StudyError(
            f"{name}, line {table.index[half][0]}: one coordinate of the home centre is blank; "
            "give both, or blank both to have it estimated."
        )
    counts, said = count_animals(table, name)
    groups = pd.DataFrame({"group": group.to_numpy(), "x": x, "y": y, **counts}).astype({"group": "str"})
    for column in table.columns.difference([*_OWN, *counts], sort=False):
        groups[column] = _covariate(table[column], name, wanted=column in covariates)
    for column in covariates:
        if column not in groups.columns or column in _OWN:
            column_or_error(table.drop(columns=[*_OWN], errors="ignore"), column, name, "[model] covariates names")
    if len(absent):
        said.append(f"{name}: not there in the time that is fitted, and left out: {first_few(absent)}.")
    return GroupsTable(groups, stays, said)


def _stays(table: pd.DataFrame, name: str, zone: str | None) -> pd.DataFrame:
    """When each group is there, by its columns from and until; blanks are open."""
    blank = pd.Series("", index=table.index)
    start = bounds(table.get("from", blank), zone, name, end=False)
    end = bounds(table.get("until", blank), zone, name, end=True)
    back = (end <= start).to_numpy()
    if back.any():
        raise StudyError(f"{name}, line {table.index[back][0]}: until is not after from; mend one of them.")
    return pd.DataFrame({"group": table["group"].astype("str"), "from": start, "until": end}).reset_index(drop=True)


def groups_of_fixes(fixes: pd.DataFrame) -> tuple[pd.DataFrame, list[str]]:
    """Groups as they stand in the fixes, homes to be estimated, one marking animal each."""
    names = sorted(set(fixes["group"]) - {""})
    groups = pd.DataFrame({"group": names, "x": np.nan, "y": np.nan, "animals": 1}).astype(
        {"group": "str", "x": float, "y": float, "animals": np.int64}
    )
    said = "no [groups] table: groups were taken from the fixes, home centres are estimated, each counts 1 animal."
    return groups, [said] if names else []


def match_groups(fixes: pd.DataFrame, groups: pd.DataFrame, name: str) -> list[str]:
    """Check that fixes and groups belong together; what has to be said of animals and their groups.

    Raises:
        StudyError: a fix in no known group, a group with neither fixes nor a home centre.
    """
    fixes = fixes.sort_values(["file", "row"])
    known, places = set(groups["group"]), fixes["file"] + " line " + fixes["row"].astype(str)
    blank = (fixes["group"] == "") & bool(known)
    if blank.any():
        number = counted(int(blank.sum()), "fix has", "fixes have")
        raise StudyError(
            f"{number} no group ({first_few(places[blank])}); fill in the group column "
            "([fixes] group names it), or take [groups] out of the study file."
        )
    strange = ~fixes["group"].isin(known) & bool(known)
    if strange.any():
        which = first_few(f'"{shown(g)}"' for g in sorted(set(fixes["group"][strange])))
        number = counted(int(strange.sum()), "fix is", "fixes are")
        raise StudyError(
            f"{number} of a group that is not in {name}: {which} ({first_few(places[strange])}); "
            "add the group or mend its name."
        )
    lost = groups[groups["x"].isna() & ~groups["group"].isin(set(fixes["group"]))]
    if len(lost):
        raise StudyError(
            f'{name}: the group "{lost["group"].iloc[0]}" has neither fixes nor a home centre; '
            "a group without fixes still marks, so give its x and y."
        )
    return _remarks(fixes, groups)


def _remarks(fixes: pd.DataFrame, groups: pd.DataFrame) -> list[str]:
    said = []
    per_animal = fixes.groupby("animal")["group"].nunique()
    for animal in per_animal.index[per_animal > 1]:
        said.append(f'The animal "{animal}" has fixes in more than one group.')
    tracked = fixes.groupby("group")["animal"].nunique()
    for group, animals in zip(groups["group"], groups.get("animals_high", groups["animals"]), strict=True):
        if tracked.get(group, 0) > animals:
            most = "at most " if "animals_high" in groups else ""
            said.append(f'The group "{group}" counts {most}{animals:g} animals, but {tracked[group]} have fixes.')
    return said


def _covariate(texts: pd.Series, name: str, wanted: bool) -> pd.Series:
    if wanted and (texts == "").any():
        raise StudyError(f'{name}, line {texts.index[texts == ""][0]}, column "{texts.name}": the covariate is blank.')
    values = pd.to_numeric(texts, errors="coerce")
    return (texts if values.isna().any() else values).reset_index(drop=True)
