"""The cell size: chosen for the smallest range, and judged."""

import re

import numpy as np
import pytest

from bayesrange.study import StudyError


def discs(folder, **radii):
    """Fixes of each group in a ring of that radius [m] about its place, so that they lie within exactly twice it."""
    angle = np.linspace(0, 2 * np.pi, 60, endpoint=False)
    for group, radius in radii.items():
        own = (folder.fixes["group"] == group).to_numpy()
        x, y = folder.groups.loc[folder.groups["group"] == group, ["x", "y"]].to_numpy(dtype=float)[0]
        folder.fixes.loc[own, "x"] = x + radius * np.cos(angle)
        folder.fixes.loc[own, "y"] = y + radius * np.sin(angle)
    folder.toml["study"]["cell_m"] = "auto"


def chosen(folder):
    study = folder.read()
    return study.grid.cell_m, next(w for w in study.warnings if "were chosen" in w)


@pytest.mark.parametrize(
    ("radius", "cell", "across"),
    [(1000, 100, "20"), (740, 60, "25"), (590, 50, "24"), (510, 50, "20"), (499, 40, "25"), (300, 30, "20")],
)
def test_auto_takes_20_cells_across_the_smallest_range_rounded_down(folder, radius, cell, across):
    discs(folder, north=1100, south=radius, east=1150)
    size, said = chosen(folder)
    assert size == cell  # 2 × radius / 20, down to the next of 1, 1.2, 1.5, 2, 2.5, 3, 4, 5, 6, 8 × 10^n
    assert said == (
        f'[study] cell_m: Cells of {cell} m were chosen (95 % of the fixes of the group "south" lie within '
        f"{2 * radius} m, the smallest range: {across} cells across)."
    )


def test_auto_keeps_the_grid_within_150_by_150_cells_and_says_so(folder):
    discs(folder, north=1100, south=210, east=1150)
    size, said = chosen(folder)
    assert size == 30  # 4000 m / 149 = 26.8, up to the next readable one
    assert "14.0 cells across); finer ones would make the grid larger than 150 × 150 cells." in said
    assert any("within only 14.0 cells" in w for w in folder.read().warnings)


def test_auto_that_cannot_be_fine_enough_is_an_error(folder):
    discs(folder, north=1100, south=100, east=1150)
    with pytest.raises(StudyError, match=r'fixes of the group "south" lie within 200 m, only 6.7 cells'):
        folder.read()


def test_auto_passes_over_groups_with_too_few_fixes(folder):
    discs(folder, north=1100, south=300, east=1100)
    south = folder.fixes.index[folder.fixes["group"] == "south"]
    folder.fixes = folder.fixes.drop(index=south[9:])
    assert chosen(folder)[0] == 100
    folder.fixes = folder.fixes.groupby("group").head(9)
    with pytest.raises(StudyError, match=re.escape('no group has the 10 fixes that "auto" needs')):
        folder.read()


def test_auto_of_a_group_at_one_place_is_an_error(folder):
    discs(folder, north=1100, south=0, east=1100)
    with pytest.raises(StudyError, match='nearly all fixes of the group "south" are at one place'):
        folder.read()


def test_a_grid_above_150_by_150_cells_is_warned_of_with_its_cost(folder):
    folder.toml["study"]["cell_m"] = 25
    folder.toml["sampling"] = {"chains": 2, "warmup": 300, "draws": 700}
    said = [w for w in folder.read().warnings if "150 × 150" in w]
    # 0.016 s × (160² / 64²)^1.2 × 3 groups / 6 × 2000 draws × 15 gradients = 0.60 h
    assert said == [
        "[study] cell_m: the grid has 160 × 160 cells, more than 150 × 150: expect a fit to take about 0.6 hours of "
        "one core, the card with retreat several times that; cells of 27 m would bring it down."
    ]
    folder.toml["study"]["cell_m"] = 27
    assert not [w for w in folder.read().warnings if "150 × 150" in w]
