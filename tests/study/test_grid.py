import numpy as np
import pytest
import shapely

from bayesrange.study._grid import SUB, Frame, without_scraps

CELLS = 40


@pytest.fixture
def ragged(folder):
    """A study whose area has slanted and curved edges, a hole, and a no-go pond."""
    outline = folder.box(0, 0, 4000, 4000).intersection(
        shapely.affinity.rotate(folder.box(100, 60, 3950, 3900), 9)
    ) - shapely.Point(folder.west + 3300, folder.south + 3300).buffer(333)
    folder.area(outline)
    pond = np.zeros((400, 400), dtype="uint8")
    pond[120:150, 50:61] = 1  # 10 m pixels, row 0 north: 300 m × 110 m
    folder.raster("water.tif", pond, 10.0)
    folder.toml["layers"]["water"] = {"file": "water.tif", "no_go": True}
    folder.toml["fixes"]["error"] = 500  # no fix is refused: this is about the grid
    return folder.read()


def test_rows_run_north_and_the_transform_is_north_up(folder):
    grid = folder.read().grid
    assert grid.shape == (CELLS, CELLS)
    assert (grid.x_m[0], grid.y_m[0]) == (folder.west + 50, folder.south + 50)
    t = grid.transform
    assert (t.a, t.b, t.c, t.d, t.e, t.f) == (100, 0, folder.west, 0, -100, folder.south + 4000)


def test_the_grid_snaps_outward_to_multiples_of_the_cell(folder):
    folder.area(folder.box(30, 30, 3990, 3990))
    folder.toml["study"]["cell_m"] = 70
    grid = folder.read().grid
    assert grid.west_m % 70 == 0 and grid.west_m <= folder.west + 30 < grid.west_m + 70
    assert grid.south_m % 70 == 0 and grid.south_m <= folder.south + 30 < grid.south_m + 70


def test_habitable_area_is_the_polygons_less_the_pond(ragged):
    expected = ragged.area.area / 1e6 - 0.3 * 0.11
    # centre-point sampling at 12.5 m along some 17 km of edge: error well below one sub-cell's width of it
    assert abs(ragged.grid.habitable_km2 - expected) < 0.02
    assert ((ragged.grid.habitable * 64) % 1 == 0).all()


def test_basis_shares_sum_to_the_habitable_area_and_are_1_within(ragged):
    grid = ragged.grid
    assert grid.basis_share.sum() == pytest.approx(grid.habitable.sum(), rel=1e-13)  # round-off of 1600 sums
    full = np.pad(grid.habitable == 1, 1)
    within = np.all([full[1 + i : 41 + i, 1 + j : 41 + j] for i in (-1, 0, 1) for j in (-1, 0, 1)], axis=0)
    assert within.sum() > 500
    assert (grid.basis_share[within] == 1.0).all()
    assert (grid.basis_share[~grid.inside] == 0).all()


def test_basis_shares_are_the_integral_of_the_bilinear_weights(ragged):
    grid = ragged.grid
    # slow twin: every sub-cell centre read one by one, habitable ones found from the polygon and the pond
    offset = (np.arange(CELLS * 8) + 0.5) * 12.5
    x, y = (a.ravel() for a in np.meshgrid(grid.west_m + offset, grid.south_m + offset))
    in_area = shapely.contains_xy(ragged.area, x, y)
    left, bottom = ragged.grid.west_m + 500, ragged.grid.south_m + 2500
    pond = (x > left) & (x < left + 110) & (y > bottom) & (y < bottom + 300)
    rows, columns, weights = grid.bilinear(x[in_area & ~pond], y[in_area & ~pond])
    share = np.zeros(grid.shape)
    np.add.at(share, (rows, columns), weights / 64)
    np.testing.assert_allclose(grid.basis_share, share, atol=1e-12)


def test_bilinear_reading_is_exact_for_planes_away_from_edges(folder):
    grid = folder.read().grid
    rng = np.random.default_rng(2)
    x, y = grid.west_m + rng.uniform(50, 3950, 200), grid.south_m + rng.uniform(50, 3950, 200)
    plane = 3 + 0.2 * (grid.x_m - grid.west_m)[None] - 0.7 * (grid.y_m - grid.south_m)[:, None]
    rows, columns, weights = grid.bilinear(x, y)
    read = (plane[rows, columns] * weights).sum(axis=1)
    # values up to 3000, a few products each
    np.testing.assert_allclose(read, 3 + 0.2 * (x - grid.west_m) - 0.7 * (y - grid.south_m), atol=1e-9)


def test_bilinear_weights_use_inside_cells_only_and_sum_to_1_or_0(ragged):
    grid = ragged.grid
    rng = np.random.default_rng(3)
    x, y = grid.west_m + rng.uniform(-500, 4500, 2000), grid.south_m + rng.uniform(-500, 4500, 2000)
    rows, columns, weights = grid.bilinear(x, y)
    assert (weights[~grid.inside[rows, columns]] == 0).all()
    total = weights.sum(axis=1)
    assert np.isclose(total[total > 0], 1, rtol=1e-14).all()
    assert 0 < (total == 0).sum() < 2000


def test_cells_of_places(folder):
    grid = folder.read().grid
    rows, columns = grid.cell_of(
        np.array([0.0, 99.9, 100.0, 3999.9, 4000.0, -0.1]) + grid.west_m, np.full(6, 1250.0) + grid.south_m
    )
    assert rows.tolist() == [12, 12, 12, 12, -1, -1]
    assert columns.tolist() == [0, 0, 1, 39, -1, -1]


def test_a_scrap_that_hangs_on_by_a_corner_is_left_out_and_said():
    frame = Frame(0.0, 0.0, 100.0, 4, 4)
    ground = np.zeros((4 * SUB, 4 * SUB), dtype=bool)
    ground[: 2 * SUB, : 2 * SUB] = True  # four whole cells
    ground[2 * SUB : 2 * SUB + 2, 2 * SUB : 2 * SUB + 3] = True  # six sub-cells that touch them by a corner
    kept, said = without_scraps(ground, frame)
    assert kept.sum() == 4 * SUB**2
    assert said == [
        "1 scrap(s) of ground at the edge of the area, together 938 m² and each less than a cell, touch the rest by a "
        "corner at the most and are left out."
    ]


def test_a_piece_of_a_whole_cell_is_no_scrap():
    frame = Frame(0.0, 0.0, 100.0, 4, 4)
    ground = np.zeros((4 * SUB, 4 * SUB), dtype=bool)
    ground[: 2 * SUB, : 2 * SUB] = True
    ground[3 * SUB :, 3 * SUB :] = True
    kept, said = without_scraps(ground, frame)
    assert kept is ground and said == []
