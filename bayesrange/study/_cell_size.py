"""How large the cells are: chosen from the ranges if the user leaves it open, else judged against them."""

import math

import numpy as np
import pandas as pd
import shapely

from bayesrange._errors import StudyError
from bayesrange.study._grid import LARGEST, Frame, Grid
from bayesrange.study._settings import SamplingSection
from bayesrange.study._tables import counted

_FEWEST_CELLS, _BETTER_CELLS = 10, 20
_FEWEST_FIXES = 10
# Bias of `localising` with bilinear reading, by cells across the 95 % range (tests/published/test_holgate_okubo.py)
_BIAS_CELLS, _BIAS_PERCENT = np.array([5.0, 8, 10, 16, 24, 32]), np.array([23.0, 10.3, 7.0, 2.97, 1.4, 0.81])
_MOST_CELLS = 150  # along a side: what is chosen stays within, what is given above it is warned of
_ROUND = (1, 1.2, 1.5, 2, 2.5, 3, 4, 5, 6, 8, 10)  # readable sizes, times a power of ten


def choose_cell(fixes: pd.DataFrame, area: shapely.Polygon | shapely.MultiPolygon) -> tuple[float, str]:
    """A readable cell size [m] for `cell_m = "auto"`, and why it was chosen.

    20 cells across the smallest range, or as many as a grid of at most 150 × 150 cells allows.

    Raises:
        StudyError: no group has enough fixes to tell its range, or all of one are at one place.
    """
    across = {str(group): across_m(own) for group, own in fixes.groupby("group") if len(own) >= _FEWEST_FIXES}
    if not across:
        raise StudyError(
            f'[study] cell_m: no group has the {_FEWEST_FIXES} fixes that "auto" needs to judge its range by; '
            "expected a number of metres."
        )
    group = min(across, key=across.__getitem__)
    label = f'group "{group}"' if group else "study"
    if not across[group] > 0:
        raise StudyError(
            f"[study] cell_m: nearly all fixes of the {label} are at one place, so its range cannot be told; mend the "
            "fixes, or give a number of metres."
        )
    west, south, east, north = area.bounds
    coarsest, finest = across[group] / _BETTER_CELLS, max(east - west, north - south) / (_MOST_CELLS - 1)
    range_told = f"95 % of the fixes of the {label} lie within {across[group]:.0f} m, the smallest range"
    if coarsest >= finest and (chosen := _readable(coarsest, up=False)) >= finest:
        return chosen, f"Cells of {chosen:g} m were chosen ({range_told}: {across[group] / chosen:.0f} cells across)."
    chosen = _readable(finest, up=True)
    return chosen, (
        f"Cells of {chosen:g} m were chosen ({range_told}: {across[group] / chosen:.1f} cells across); finer ones "
        f"would make the grid larger than {_MOST_CELLS} × {_MOST_CELLS} cells."
    )


def check_size(frame: Frame, groups: int, sampling: SamplingSection) -> list[str]:
    """Remark on a grid of more than 150 × 150 cells, with the expected cost.

    Raises:
        StudyError: a grid so large that a fit would take days.
    """
    cells = frame.ny * frame.nx
    if max(frame.ny, frame.nx) <= LARGEST and cells <= _MOST_CELLS**2:
        return []
    # 16 ms for value and gradient at 64 × 64 cells and 6 groups, power 1.2 in cells; steps of 15 gradients
    draws = sampling.chains * (sampling.warmup + sampling.draws)
    hours = 0.016 * (cells / 64**2) ** 1.2 * max(groups, 1) / 6 * draws * 15 / 3600
    cost = f"{hours:.2g} hours" if hours < 48 else f"{hours / 24:.2g} days"
    if max(frame.ny, frame.nx) > LARGEST:
        coarser = frame.cell_m * max(frame.ny, frame.nx) / LARGEST
        raise StudyError(
            f"[study] cell_m: the grid would have {frame.ny} × {frame.nx} cells, more than {LARGEST} along a side, and "
            f"a fit would take about {cost} of one core; use cells of at least {coarser:.0f} m, or a smaller area."
        )
    coarser = frame.cell_m * math.sqrt(cells) / _MOST_CELLS
    return [
        f"[study] cell_m: the grid has {frame.ny} × {frame.nx} cells, more than {_MOST_CELLS} × {_MOST_CELLS}: expect "
        f"a fit to take about {cost} of one core, the card with retreat several times that; cells of {coarser:.0f} m "
        "would bring it down."
    ]


def check_resolution(fixes: pd.DataFrame, grid: Grid) -> list[str]:
    """Remarks on groups whose range is only 10 to 20 cells across, or that have few fixes.

    Across means twice the distance from the median place that holds 95 % of the group's fixes.

    Raises:
        StudyError: a group whose range is less than 10 cells across.
    """
    said, coarse = [], []
    for group, own in fixes.groupby("group"):
        label = f'group "{group}"' if group else "study"
        if len(own) < _FEWEST_FIXES:
            said.append(f"The {label} has only {counted(len(own), 'fix', 'fixes')}: too few to judge the cell size by.")
            continue
        width_m = across_m(own)
        cells = width_m / grid.cell_m
        if cells < _FEWEST_CELLS:
            raise StudyError(
                f"[study] cell_m: 95 % of the fixes of the {label} lie within {width_m:.0f} m, only {cells:.1f} cells "
                f"across, which would bias localising by about {_bias(cells):.0f} % or more; "
                f"use cells of at most {width_m / _FEWEST_CELLS:.0f} m, better {width_m / _BETTER_CELLS:.0f} m."
            )
        if cells < _BETTER_CELLS:
            coarse.append((cells, label))
    if coarse:
        cells, label = min(coarse)
        others = (
            f" ({counted(len(coarse), 'group', 'groups')} have fewer than {_BETTER_CELLS})" if len(coarse) > 1 else ""
        )
        better = cells * grid.cell_m / _BETTER_CELLS
        said.append(
            f"95 % of the fixes of the {label} lie within only {cells:.1f} cells{others}: expect localising to be "
            f"biased by about {_bias(cells):.1f} %; cells of {better:.0f} m would make it {_BETTER_CELLS}."
        )
    return said


def across_m(own: pd.DataFrame) -> float:
    """Twice the distance from the median place that holds 95 % of the fixes [m]."""
    return float(2 * np.quantile(np.hypot(own["x"] - own["x"].median(), own["y"] - own["y"].median()), 0.95))


def _readable(size_m: float, up: bool) -> float:
    """The next readable size above or below [m]."""
    power = 10.0 ** math.floor(math.log10(size_m))
    sizes = [step * power for step in _ROUND]
    if up:
        return min(s for s in sizes if s >= size_m * (1 - 1e-9))
    return max(s for s in sizes if s <= size_m * (1 + 1e-9))


def _bias(cells: float) -> float:
    """Bias of localising expected with so many cells across a range [%]."""
    return float(np.exp(np.interp(np.log(max(cells, 1)), np.log(_BIAS_CELLS), np.log(_BIAS_PERCENT))))
