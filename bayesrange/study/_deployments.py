"""Deployments: which animal wore a tag from when until when. A collar is not an animal."""

from pathlib import Path

import numpy as np
import pandas as pd

from bayesrange._errors import StudyError
from bayesrange.study._moments import OPEN_START, bounds
from bayesrange.study._settings import AnimalsSection
from bayesrange.study._tables import column_or_error, counted, first_few, one_name_each, read_table, shown


def read_deployments(folder: Path, section: AnimalsSection, zone: str | None, by_tag: bool) -> pd.DataFrame:
    """Deployments in the order of the file: animal, tag, from, until (UTC; open if blank), settled, then the others.

    Args:
        folder: where the study file is.
        section: `[animals]`.
        zone: in which times without an offset are.
        by_tag: whether the fixes name tags; else their animal is looked up and a tag is not needed.

    Raises:
        StudyError: names file, line and column; two deployments of one tag at the same time.
    """
    name = str(section.file)
    table = read_table(folder / name, name)
    if table.empty:
        raise StudyError(f"{name}: there is no deployment; expected one line each.")
    blank = pd.Series("", index=table.index)
    animal = column_or_error(table, "animal", name, "a table of deployments needs")
    tag = column_or_error(table, "tag", name, "[fixes] tag needs") if by_tag else table.get("tag", blank)
    for what, cells in ({"animal": animal} | ({"tag": tag} if by_tag else {})).items():
        if (cells == "").any():
            raise StudyError(f"{name}, line {table.index[cells == ''][0]}: the {what} is blank; name it.")
        one_name_each(cells, f"{what}s", name)
    start = bounds(table.get("from", blank), zone, name, end=False)
    end = bounds(table.get("until", blank), zone, name, end=True)
    back = (end <= start).to_numpy()
    if back.any():
        raise StudyError(f"{name}, line {table.index[back][0]}: until is not after from; mend one of them.")
    settle = pd.Timedelta(days=section.settle_in_days)
    if settle and (start == OPEN_START).any():
        line = table.index[start == OPEN_START][0]
        raise StudyError(
            f"{name}, line {line}: from is blank, and [animals] settle_in_days counts from it; fill it in."
        )
    found = pd.DataFrame({"animal": animal, "tag": tag, "from": start, "until": end, "settled": start + settle})
    found["wearer"] = tag if by_tag else animal
    found["line"] = table.index
    _refuse_overlaps(found, "tag" if by_tag else "animal", name)
    rest = table.drop(columns=["animal", "tag", "from", "until"], errors="ignore")
    return pd.concat([found, rest.drop(columns=found.columns, errors="ignore")], axis=1).reset_index(drop=True)


def assign_animals(
    fixes: pd.DataFrame, deployments: pd.DataFrame, name: str
) -> tuple[pd.DataFrame, dict[str, int], list[str]]:
    """The fixes of deployments with their animal, how many are set aside, and what has to be said.

    Args:
        fixes: whose column animal holds what the file names: tags or animals.
        deployments: from `read_deployments`.
        name: its file.

    Raises:
        StudyError: a tag or animal that is in no deployment; no fix is left.
    """
    strange = ~fixes["animal"].isin(set(deployments["wearer"]))
    if strange.any():
        which = first_few(f'"{shown(w)}"' for w in sorted(set(fixes["animal"][strange])))
        row = fixes[strange].iloc[0]
        raise StudyError(
            f"{row['file']}, line {row['row']}: {which} is in no deployment of {name}; add a line for it, or mend its "
            "name."
        )
    order = deployments.sort_values("from", kind="stable").reset_index(names="deployment")
    moments = fixes[["animal", "time"]].reset_index(names="fix").sort_values("time", kind="stable")
    for frame, column in ((order, "from"), (moments, "time")):
        frame[column] = frame[column].astype("datetime64[ns, UTC]")
    keys = order[["wearer", "from", "deployment"]].rename(columns={"wearer": "animal"})
    keys["animal"] = keys["animal"].astype(moments["animal"].dtype)
    worn = pd.merge_asof(moments, keys, left_on="time", right_on="from", by="animal").set_index("fix").sort_index()
    which = worn["deployment"].fillna(-1).to_numpy(dtype=int)
    own = deployments.iloc[np.maximum(which, 0)]
    time = fixes["time"].to_numpy()
    outside = (which < 0) | (time >= own["until"].to_numpy())
    settling = ~outside & (time < own["settled"].to_numpy())
    counts = {"outside_deployment": int(outside.sum()), "settling_in": int(settling.sum())}
    said = []
    if counts["outside_deployment"]:
        said.append(f"{name}: {counted(int(outside.sum()), 'fix', 'fixes')} outside any deployment set aside.")
    if counts["settling_in"]:
        said.append(f"{name}: {counted(int(settling.sum()), 'fix', 'fixes')} of the days of settling in set aside.")
    left = ~(outside | settling)
    if not left.any():
        raise StudyError(
            f"{name}: no fix is within a deployment and after settling in; check from, until and the zone."
        )
    fixes = fixes.assign(animal=own["animal"].to_numpy())
    if "group" in deployments.columns and (fixes["group"] == "").all():
        fixes["group"] = own["group"].to_numpy()
    kinds = {"animal": "str", "group": "str"}
    return fixes[left].astype(kinds).reset_index(drop=True), counts, said


def _refuse_overlaps(found: pd.DataFrame, what: str, name: str) -> None:
    ordered = found.sort_values(["wearer", "from"], kind="stable")
    before = ordered.groupby("wearer")["until"].shift()
    bad = (ordered["from"] < before).to_numpy()
    if bad.any():
        row = ordered[bad].iloc[0]
        raise StudyError(
            f'{name}, line {row["line"]}: the {what} "{shown(row["wearer"])}" is in an earlier deployment until later '
            "than this from (a day as until is meant to its end); mend one of them."
        )
