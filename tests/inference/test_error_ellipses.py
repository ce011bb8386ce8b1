"""Elliptical location errors: exact where the density is bilinear, else against integrals from scipy."""

import numpy as np
import pytest
from inference._tiny_study import SOUTH, WEST, fixes_table, write_study
from scipy import interpolate, stats

from bayesrange.inference import find_card, fix_entries, make_data, make_scales, make_spec, read_card
from bayesrange.study import read_study


def read(grid, values, x, y, ellipse, reading="bilinear"):
    """Σ entries × values of each fix; x and y in metres from the south-western corner."""
    ellipse = np.atleast_2d(np.asarray(ellipse, float))
    x, y = np.atleast_1d(np.add(x, WEST, dtype=float)), np.atleast_1d(np.add(y, SOUTH, dtype=float))
    circle = np.sqrt((ellipse[:, 0] ** 2 + ellipse[:, 1] ** 2) / 2)
    cell, log_share = fix_entries(grid, x, y, circle, reading, ellipse)
    return (np.exp(log_share) * values.ravel()[cell]).sum(1), np.exp(log_share).sum(1)


def covariance(major, minor, bearing):
    """Of easting and northing; the bearing is clockwise from north."""
    axis = np.array([np.sin(np.radians(bearing)), np.cos(np.radians(bearing))])
    across = np.array([axis[1], -axis[0]])
    return major**2 * np.outer(axis, axis) + minor**2 * np.outer(across, across)


@pytest.mark.parametrize("ellipse", [(60, 15, 30), (150, 30, 120), (199, 120, 45), (95, 11, 90)])
def test_a_bilinear_density_is_averaged_exactly(study, ellipse):
    # 1 + 2x − y + xy in km: its mean is the value at the fix plus the covariance of the two errors; round-off only.
    x, y = np.meshgrid((study.grid.x_m - WEST) / 1000, (study.grid.y_m - SOUTH) / 1000)
    mean, mass = read(study.grid, 1 + 2 * x - y + x * y, 1150.0, 1277.7, ellipse)
    exact = 1 + 2 * 1.15 - 1.2777 + 1.15 * 1.2777 + covariance(*ellipse)[0, 1] / 1e6
    np.testing.assert_allclose([mean[0], mass[0]], [exact, 1], rtol=1e-12)


@pytest.mark.parametrize("ellipse", [(250, 40, 30), (300, 8, 75), (400, 220, 160)])
def test_a_wide_ellipse_averages_a_bilinear_density_to_its_strips(study, ellipse):
    x, y = np.meshgrid((study.grid.x_m - WEST) / 1000, (study.grid.y_m - SOUTH) / 1000)
    inside = np.where(study.grid.inside, 1 + 2 * x - y + x * y, 0)
    mean, mass = read(study.grid, inside, 1150.0, 1277.7, ellipse)
    exact = 1 + 2 * 1.15 - 1.2777 + 1.15 * 1.2777 + covariance(*ellipse)[0, 1] / 1e6
    if mass[0] > 1 - 1e-5:  # strips of half a cell add 1/12 of their width² to the variance, 0.0002 km²
        np.testing.assert_allclose(mean[0], exact, atol=4e-4)
    assert 0.98 < mass[0] <= 1


@pytest.mark.parametrize("bearing", [0, 30, 75, 140])
@pytest.mark.parametrize(
    ("major", "minor", "apart"),
    # Five nodes an axis on a density with kinks at every cell; strips of half a cell
    [(90, 30, 0.003), (180, 60, 0.003), (260, 9, 0.003), (350, 90, 0.003), (420, 250, 0.003)],
)
def test_a_smooth_density_against_its_closed_form(study, bearing, major, minor, apart):
    # A normal density of sd 420 m seen through a normal error is normal with the covariances added (closed form).
    grid = study.grid
    centre, spread = np.array([1150.0, 1250.0]), 420.0
    place = np.array([1000.0, 1400.0])
    x, y = np.meshgrid(grid.x_m - WEST, grid.y_m - SOUTH)
    density = stats.multivariate_normal(centre, spread**2 * np.eye(2)).pdf(np.stack([x, y], axis=-1))
    found, _ = read(grid, density, *place, (major, minor, bearing))
    error = covariance(major, minor, bearing)
    # Between centres 100 m apart the chord lies as if h²/6 were added to each axis' variance on the average
    chord = 100.0**2 / 6 * np.eye(2)
    exact = stats.multivariate_normal(centre, spread**2 * np.eye(2) + chord + error).pdf(place)
    assert abs(np.log(found[0] / exact)) < apart + 0.004  # the average is not the value at this place


@pytest.mark.parametrize("reading", ["bilinear", "cell"])
@pytest.mark.parametrize("ellipse", [(250, 60, 30), (300, 210, 100), (450, 15, 60)])
def test_wide_ellipses_against_a_fine_lattice(study, reading, ellipse):
    # The slow twin: scipy's normal density on a lattice of 4 m over the density as it is read
    grid, place = study.grid, np.array([1120.0, 1333.0])
    rough = np.random.default_rng(5).uniform(0.5, 1.5, grid.shape)
    at = np.arange(2.0, 2400.0, 4.0)
    x, y = np.meshgrid(at, at)
    if reading == "cell":
        values = rough[(y // 100).astype(int), (x // 100).astype(int)]
    else:
        axes = grid.y_m - SOUTH, grid.x_m - WEST
        surface = interpolate.RegularGridInterpolator(axes, rough, bounds_error=False, fill_value=None)
        values = surface(np.stack([np.clip(y, 50, 2350), np.clip(x, 50, 2350)], axis=-1))
    ground = grid.habitable_at(x.ravel() + WEST, y.ravel() + SOUTH).reshape(x.shape)
    weight = stats.multivariate_normal(place, covariance(*ellipse)).pdf(np.stack([x, y], axis=-1)) * 16 * ground
    found, mass = read(grid, rough, *place, ellipse, reading)
    np.testing.assert_allclose(mass[0], weight.sum(), atol=2e-3)
    # White noise from cell to cell is the worst case; three nodes across a thin ellipse jump where cells are constant.
    assert found[0] == pytest.approx((weight * values).sum(), rel=0.06 if reading == "cell" else 0.02)


def test_a_wide_ellipse_that_is_nearly_a_circle_reads_as_the_circle(study):
    x, y = np.meshgrid(study.grid.x_m - WEST, study.grid.y_m - SOUTH)
    density = np.exp(-((x - 1100) ** 2 + (y - 1300) ** 2) / 2 / 500**2)
    place = np.array([WEST + 1200.0]), np.array([SOUTH + 1250.0])
    values = []
    for ellipse in ([[300.0, 300.0, 0.0]], [[300.01, 300.0, 33.0]]):
        cell, log_share = fix_entries(study.grid, *place, np.array([300.0]), "bilinear", np.array(ellipse))
        values.append((np.exp(log_share) * density.ravel()[cell]).sum())
    # The circle's cell masses leave out how the density bends within a cell: h²/12 · (f_xx + f_yy) / 2, 0.2 % here
    assert values[1] == pytest.approx(values[0], rel=0.005)


def test_circles_are_read_bit_for_bit_as_without_ellipses(study):
    rng = np.random.default_rng(9)
    x, y = WEST + rng.uniform(400, 1900, 60), SOUTH + rng.uniform(400, 1900, 60)
    error = np.resize([0.0, 5.0, 60.0, 150.0, 320.0], 60)
    plain = fix_entries(study.grid, x, y, error, "bilinear")
    circles = fix_entries(study.grid, x, y, error, "bilinear", np.column_stack([error, error, 0 * error + 20]))
    assert all((a == b).all() for a, b in zip(plain, circles, strict=True))
    ellipse = np.column_stack([error, error, 0 * error])
    ellipse[7] = 170, 20, 60
    mixed = fix_entries(study.grid, x, y, error, "bilinear", ellipse)
    same = np.arange(60) != 7
    assert (mixed[0][same] == plain[0][same]).all() and (mixed[1][same] == plain[1][same]).all()
    assert not np.array_equal(mixed[1][7], plain[1][7])


def test_an_ellipse_wider_than_the_area_is_read_within_it(study):
    _, mass = read(study.grid, np.ones(study.grid.shape), 1200.0, 1200.0, (40_000, 900, 20))
    # A ribbon of sd 900 m across an area of 2.4 km: along the ribbon its density is 1/(√(2π) 40 km)
    assert mass[0] == pytest.approx(2400 * 2400 / (2 * np.pi * 40_000 * 900), rel=0.25)
    assert mass[0] < 2400 * 2400 / (2 * np.pi * 40_000 * 900)


def test_a_range_model_reads_the_ellipses_of_its_study(tmp_path):
    fixes = fixes_table().assign(major="", minor="", turn="")
    middle = fixes["x"].between(WEST + 600, WEST + 1500) & fixes["y"].between(SOUTH + 600, SOUTH + 1800)
    fixes.loc[middle, ["major", "minor", "turn"]] = ["180", "60", "35"]
    path = write_study(tmp_path, fixes, model={"card": "localising", "layers": []})
    keys = 'error_major = "major"\nerror_minor = "minor"\nerror_bearing = "turn"\n'
    path.write_text(path.read_text().replace("[fixes]\n", "[fixes]\n" + keys))
    study, card = read_study(path), read_card(find_card("localising"))
    spec, scales = make_spec(study, card), make_scales(study, [])
    reading = make_data(study, card, spec, scales, np.ones(len(study.fixes))).reading
    table = study.fixes
    oblong = (table["error_major_m"] == 180).to_numpy()
    assert oblong.sum() == middle.sum() > 20
    expected = fix_entries(
        study.grid,
        *(table[c].to_numpy(float) for c in ("x", "y", "error_m")),
        "bilinear",
        np.column_stack([180.0 * oblong, 60.0 * oblong, 35.0 * oblong]),
    )
    for part, wanted in zip((reading.cell, reading.log_share), expected, strict=True):
        np.testing.assert_array_equal(part[: len(table)], wanted)
