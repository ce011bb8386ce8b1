"""Range areas and overlaps of neighbours with their intervals.

An interval holds the share `prob` of the posterior with equal tails. Effective sample size and rank-normalised R-hat
are ArviZ's (Vehtari et al. 2021, Bayesian Analysis 16:667); both are empty where a quantity does not vary.
"""

import os
from itertools import combinations
from pathlib import Path

import arviz_stats
import numpy as np
import pandas as pd
import xarray as xr
from jaxtyping import Float
from numpy.typing import NDArray

from bayesrange.report._read import Contents


def ranges_table(run: Contents) -> pd.DataFrame:
    """One row a group and isopleth.

    Columns: group, isopleth [%], area_km2_median, area_km2_lower, area_km2_upper, prob, mean, sd (of the area [km²]),
    ess_bulk, rhat.
    """
    areas = run.space_use["area_km2"].transpose("chain", "draw", "isopleth", "group")
    bulk, rhat = _convergence(areas)
    rows = []
    for group in run.groups:
        for isopleth in run.isopleths:
            at = {"group": group, "isopleth": isopleth}
            values = areas.sel(at).values
            median, lower, upper = _median_and_interval(values, run.prob)
            rows.append(
                {
                    "group": group,
                    "isopleth": isopleth,
                    "area_km2_median": median,
                    "area_km2_lower": lower,
                    "area_km2_upper": upper,
                    "prob": run.prob,
                    "mean": float(np.mean(values)),
                    "sd": float(np.std(values, ddof=1)),
                    "ess_bulk": float(bulk.sel(at)),
                    "rhat": float(rhat.sel(at)),
                }
            )
    return pd.DataFrame(rows)


def overlaps_table(run: Contents) -> pd.DataFrame:
    """One row a pair of groups: group, neighbour, median, lower, upper, prob of their Bhattacharyya coefficient.

    The coefficient ∫ √(u_i u_j) is 0 for ranges apart and 1 for equal ones. Symmetric, so each pair stands once.
    """
    overlap = run.space_use["overlap"].transpose("chain", "draw", "group", "neighbour")
    rows = []
    for group, neighbour in combinations(run.groups, 2):
        median, lower, upper = _median_and_interval(overlap.sel(group=group, neighbour=neighbour).values, run.prob)
        rows.append((group, neighbour, median, lower, upper, run.prob))
    return pd.DataFrame(rows, columns=["group", "neighbour", "median", "lower", "upper", "prob"])


def write_table(table: pd.DataFrame, file: Path) -> None:
    """Write a table as CSV, whole or not at all."""
    file.parent.mkdir(parents=True, exist_ok=True)
    part = file.with_name(file.name + ".part")
    table.to_csv(part, index=False, encoding="utf-8", lineterminator="\n")
    os.replace(part, file)


def _median_and_interval(values: Float[NDArray, "chain draw"], prob: float) -> tuple[float, float, float]:
    tail = (1 - prob) / 2
    lower, median, upper = np.quantile(values, [tail, 0.5, 1 - tail])
    return float(median), float(lower), float(upper)


def _convergence(values: xr.DataArray) -> tuple[xr.DataArray, xr.DataArray]:
    """Bulk effective sample size and R-hat over chains and draws; NaN where the values are all one."""
    with np.errstate(invalid="ignore", divide="ignore"):  # 0/0 for a constant: the NaN is the answer
        bulk, rhat = arviz_stats.ess(values, method="bulk"), arviz_stats.rhat(values)
    varies = values.max(("chain", "draw")) > values.min(("chain", "draw"))
    return bulk.where(varies), rhat.where(varies)
