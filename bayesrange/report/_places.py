"""Rows of the areas and overlaps tables of the page."""

from typing import Any

import pandas as pd

from bayesrange.report._format import bar, interval, number
from bayesrange.report._maps import density_files
from bayesrange.report._read import Contents

PAIRS_SHOWN = 15
LEAST_OVERLAP_WIDTH = 0.01  # three decimals are enough for a coefficient between 0 and 1


def area_rows(run: Contents, ranges: pd.DataFrame, hues: list[str]) -> dict[str, Any]:
    """One row a group: its area at each isopleth, an interval bar of the widest, and its GeoTIFF."""
    files = density_files(run)
    widest = ranges[ranges["isopleth"] == run.isopleths[-1]]
    axis = (0.0, float(widest["area_km2_upper"].max()))
    width = (ranges["area_km2_upper"] - ranges["area_km2_lower"]).groupby(ranges["isopleth"]).median()
    rows = []
    for at, group in enumerate(run.groups):
        mine = ranges[ranges["group"] == group].set_index("isopleth")
        cells = [_area(mine.loc[isopleth], float(width[isopleth])) for isopleth in run.isopleths]
        last = mine.loc[run.isopleths[-1]]
        drawn = bar(last["area_km2_lower"], last["area_km2_median"], last["area_km2_upper"], None, axis)
        fixes = int((run.constant["group_of_fix"].values.astype(str) == group).sum())
        rows.append(
            {
                "number": at + 1,
                "group": group,
                "hue": hues[at],
                "animals": _animals(run, at),
                "fixes": f"{fixes:,}",
                "cells": cells,
                "bar": drawn,
                "file": files[group],
            }
        )
    return {"isopleths": run.isopleths, "rows": rows, "axis": number(axis[1], axis[1] / 10)}


def _animals(run: Contents, at: int) -> str | None:
    """The number of marking animals, or its range."""
    if "animals" not in run.constant:
        return None
    ends = ("animals_low", "animals_high") if "animals_low" in run.constant else ("animals",)
    counts = {f"{run.constant[end].values[at]:g}": None for end in ends}
    return "–".join(counts)


def _area(row: pd.Series, width: float) -> dict[str, str]:
    """An area and its interval, to the digits that suit the whole column."""
    lower, upper = float(row["area_km2_lower"]), float(row["area_km2_upper"])
    return {"median": number(float(row["area_km2_median"]), width), "interval": interval(lower, upper, width)}


def overlap_rows(overlaps: pd.DataFrame) -> dict[str, Any]:
    """The pairs that overlap most, at most fifteen, and what is left out."""
    order = overlaps.sort_values("median", ascending=False, kind="stable")
    shown, rest = order.head(PAIRS_SHOWN), order.iloc[PAIRS_SHOWN:]
    rows = [
        {
            "group": row.group,
            "neighbour": row.neighbour,
            "median": number(row.median, max(row.upper - row.lower, LEAST_OVERLAP_WIDTH)),
            "interval": interval(row.lower, row.upper, max(row.upper - row.lower, LEAST_OVERLAP_WIDTH)),
            "bar": bar(row.lower, row.median, row.upper, None, (0.0, 1.0)),
        }
        for row in shown.itertuples()
    ]
    left_out = {"count": len(rest), "most": number(float(rest["median"].max()), 0.01)} if len(rest) else None
    return {"rows": rows, "left_out": left_out}
