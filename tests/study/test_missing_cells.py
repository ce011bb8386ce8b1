"""Cells inside the area without a value: where they are, and filling them from the nearest cell."""

import re

import numpy as np
import pytest
from scipy.spatial import cKDTree

from bayesrange.study import StudyError


def worms_with_gaps(folder, *gaps, seed=8):
    values = np.random.default_rng(seed).normal(size=(40, 40))
    for rows, columns in gaps:
        values[rows, columns] = np.nan
    folder.raster("worms.tif", values, 100.0)
    return values[::-1]


def test_the_error_says_how_many_where_and_what_would_do(folder):
    # rows from the north: y 2800 to 3000 m and x 500 to 1000 m; one more cell at x 3000 to 3100 m, y 0 to 100 m
    worms_with_gaps(folder, (slice(10, 12), slice(5, 10)), (39, 30))
    told = (
        "[layers.worms] worms.tif: 11 of 1600 cells inside the area have no value (in 2 patches, the largest of 10 "
        "cells around x = 500750, y = 5602900, within x 500500 to 503100 and y 5600000 to 5603000); "
    )
    with pytest.raises(StudyError, match=re.escape(told)) as caught:
        folder.read()
    assert str(caught.value).endswith('by fill = "nearest" and fill_within_m = 100.')
    assert sorted(p.name for p in folder.folder.iterdir()) == [
        "area.geojson", "fixes.csv", "groups.csv", "study.toml", "worms.tif",
    ]  # fmt: skip


def test_the_distance_that_the_error_names_is_enough(folder):
    worms_with_gaps(folder, (slice(10, 20), slice(12, 25)))
    with pytest.raises(StudyError, match="fill_within_m = ") as caught:
        folder.read()
    enough = float(re.search(r"fill_within_m = ([\d.]+)\.$", str(caught.value))[1])
    folder.toml["layers"]["worms"] |= {"fill": "nearest", "fill_within_m": enough}
    assert folder.read().counts["cells_filled"] == 130
    folder.toml["layers"]["worms"]["fill_within_m"] = 300
    with pytest.raises(StudyError, match="cell that has one is up to 500 m away, farther than fill_within_m"):
        folder.read()


def test_filled_cells_have_the_value_of_a_nearest_cell(folder):
    values = worms_with_gaps(folder, (slice(10, 14), slice(5, 10)), (slice(38, 40), slice(0, 3)))
    folder.toml["layers"]["worms"] |= {"fill": "nearest", "fill_within_m": 400}
    study = folder.read()
    filled = study.layers["worms"].values
    known = ~np.isnan(values)
    np.testing.assert_array_equal(filled[known], values[known])
    # scipy's tree of the known cells: the value is that of one at the least distance
    tree, gaps = cKDTree(np.argwhere(known)), np.argwhere(~known)
    least, _ = tree.query(gaps)
    for cell, distance in zip(gaps, least, strict=True):
        near = np.argwhere(known)[tree.query_ball_point(cell, distance + 1e-9)]
        assert filled[tuple(cell)] in values[tuple(near.T)]
    assert study.counts["cells_filled"] == 26
    said = (
        "[layers.worms] worms.tif: 26 cells inside the area had no value and took that of the nearest cell, at most "
        f"{100 * least.max():.0f} m away."
    )
    assert said in study.warnings


def test_fill_without_gaps_changes_nothing_and_is_not_counted(folder):
    values = worms_with_gaps(folder)
    folder.toml["layers"]["worms"] |= {"fill": "nearest", "fill_within_m": 400}
    study = folder.read()
    np.testing.assert_array_equal(study.layers["worms"].values, values)
    assert "cells_filled" not in study.counts


def test_cells_outside_the_area_are_not_missed_and_lend_their_value(folder):
    folder.area(folder.box(0, 0, 3900, 4000))
    folder.fixes["x"] = folder.fixes["x"].clip(upper=folder.west + 3800)
    values = worms_with_gaps(folder, (slice(None), slice(36, 39)))
    values = np.concatenate([values, values[:, :1]], axis=1)
    folder.raster("worms.tif", values[::-1], 100.0)
    folder.toml["layers"]["worms"] |= {"fill": "nearest", "fill_within_m": 300}
    read = folder.read().layers["worms"].values
    assert read.shape == (40, 39)
    np.testing.assert_array_equal(read[:, 38], values[:, 35])  # the grid ends at the area: nothing east of it is read
