"""Fixes that the study file says to drop by flag. What is dropped is counted and said."""

from dataclasses import replace

import numpy as np
import pandas as pd
import shapely

from bayesrange._errors import StudyError
from bayesrange.study._fixes import RawFixes
from bayesrange.study._flags import find_flags
from bayesrange.study._settings import FixesSection


def without_dropped(
    fixes: pd.DataFrame, raw: RawFixes, section: FixesSection, area: shapely.Polygon | shapely.MultiPolygon
) -> tuple[pd.DataFrame, RawFixes]:
    """The fixes without those that `[fixes.drop]` names, and the raw ones to them.

    Flags are found among all fixes, before periods and `[fixes.keep]`, as `screen` finds them. A fix with two flags is
    counted by the first, in the order of `FLAGS`.

    Args:
        fixes: in the study's reference system.
        raw: the same as read.
        section: `[fixes]`.
        area: the study area.

    Raises:
        StudyError: nothing is left.
    """
    if section.drop is None or not section.drop.flags:
        return fixes, raw
    flags = find_flags(fixes, section.max_speed_kmh, area)
    flags = flags[flags["flag"].isin(section.drop.flags)].drop_duplicates("fix")
    left = np.ones(len(fixes), dtype=bool)
    left[flags["fix"]] = False
    if not left.any():
        raise StudyError(f"[fixes.drop] flags: all {len(fixes):,} fixes are dropped; take a flag out of the list.")
    counts, said = {}, []
    for name in dict.fromkeys(section.drop.flags):
        counts[f"dropped_{name}"] = int((flags["flag"] == name).sum())
        said.append(f"[fixes.drop] {name}: {counts[f'dropped_{name}']:,} of {len(fixes):,} fixes were dropped.")
    table, fixes = (one[left].reset_index(drop=True) for one in (raw.table, fixes))
    return fixes, replace(raw, table=table, counts=raw.counts | counts, warnings=raw.warnings + said)
