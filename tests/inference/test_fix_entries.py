"""Location error as a fixed quadrature: exact where the density is bilinear, and no mass made or lost unnoticed."""

import dataclasses

import numpy as np
import pytest
from inference._tiny_study import SOUTH, WEST
from scipy import stats

from bayesrange import StudyError
from bayesrange.inference import fix_entries


def read(grid, values, x, y, error, reading="bilinear"):
    """Σ entries × values of each fix; x and y in metres from the south-western corner."""
    place = (np.atleast_1d(np.asarray(v, float)) for v in (np.add(x, WEST), np.add(y, SOUTH), error))
    cell, log_share = fix_entries(grid, *place, reading)
    return (np.exp(log_share) * values.ravel()[cell]).sum(1), np.exp(log_share).sum(1)


@pytest.fixture
def plane(study):
    """A density that is bilinear everywhere: 1 + 2x − y + xy in km from the corner, with its mean over an error."""
    x, y = np.meshgrid((study.grid.x_m - WEST) / 1000, (study.grid.y_m - SOUTH) / 1000)
    return lambda a, b: 1 + 2 * a - b + a * b, 1 + 2 * x - y + x * y


@pytest.mark.parametrize("error", [0.0, 5.0, 30.0, 99.0, 150.0, 199.0])
def test_bilinear_density_is_averaged_exactly_away_from_edges(study, plane, error):
    function, values = plane
    x, y = np.array([1010.0, 1234.5, 1150.0]), np.array([1350.0, 1277.7, 1499.9])
    mean, mass = read(study.grid, values, x, y, np.full(3, error))
    # E[x y] = x̄ ȳ as the two errors are independent, so the mean is the value at the fix; round-off only.
    np.testing.assert_allclose(mean, function(x / 1000, y / 1000), rtol=1e-12)
    np.testing.assert_allclose(mass, 1, rtol=1e-12)


def test_nodes_have_the_variance_of_the_error(study):
    # E[(x + e)²] = x² + sd²; reading bilinearly between centres h apart adds the chord's f″/2 · h²/6 on the average.
    x = np.meshgrid((study.grid.x_m - WEST) / 1000, study.grid.y_m)[0]
    at, sd = np.linspace(1000, 1100, 400, endpoint=False), 150.0
    mean, _ = read(study.grid, x**2, at, np.full(400, 1200.0), np.full(400, sd))
    excess = (mean - (at / 1000) ** 2).mean()
    assert excess == pytest.approx(0.15**2 + 0.1**2 / 6, rel=1e-4)


@pytest.mark.parametrize("reading", ["bilinear", "cell"])
def test_wide_error_has_the_gaussian_mass_of_each_cell(study, reading):
    sd, place = 350.0, (np.array([WEST + 1200.0]), np.array([SOUTH + 1300.0]))
    cells, log_share = fix_entries(study.grid, *place, np.array([sd]), reading)
    share = np.zeros(24 * 24)
    np.add.at(share, cells[0], np.exp(log_share[0]))
    edges = np.arange(25) * 100.0
    along = np.diff(stats.norm(1200, sd).cdf(edges))
    up = np.diff(stats.norm(1300, sd).cdf(edges))
    # Each cell's share is what it has in the density's integral
    part = study.grid.basis_share if reading == "bilinear" else study.grid.habitable
    expected = np.outer(up, along) * part
    # Beyond 5 sd nothing is counted; here the area ends before.
    np.testing.assert_allclose(share.reshape(24, 24), expected, rtol=1e-9, atol=1e-15)


@pytest.mark.parametrize("reading", ["bilinear", "cell"])
def test_mass_beyond_the_edge_is_lost_and_not_moved_inside(study, reading):
    # Half the error of a fix on the edge lies outside, where there is no density.
    # Three nodes 1.73 sd apart: one of weight 1/6 lies 34 m outside, still within reach of the first row's centres.
    _, mass = read(study.grid, np.ones((24, 24)), [600.0, 600.0], [1.0, 1200.0], [20.0, 20.0], reading)
    np.testing.assert_allclose(mass, [1 - 1 / 6, 1], rtol=1e-12)
    _, mass = read(study.grid, np.ones((24, 24)), [600.0, 600.0], [1.0, 1200.0], [150.0, 150.0], reading)
    # Five nodes: the middle one (weight 8/15) is just inside, one side (7/30) outside. Source: Gauss–Hermite weights of
    # order 5, Abramowitz & Stegun table 25.10.
    np.testing.assert_allclose(mass, [1 - 7 / 30, 1], rtol=1e-3)


def test_same_cell_of_several_nodes_is_one_entry(study):
    cell, log_share = fix_entries(
        study.grid, np.array([WEST + 1200.0]), np.array([SOUTH + 1200.0]), np.array([30.0]), "cell"
    )
    used = cell[0][np.isfinite(log_share[0])]
    assert used.size == np.unique(used).size == 4


def test_fixes_with_and_without_error_keep_their_order(study, plane):
    function, values = plane
    x, y = np.array([1010.0, 900.0, 1150.0, 800.0]), np.array([1350.0, 1277.7, 1499.9, 900.0])
    error = np.array([150.0, 0.0, 30.0, 0.0])
    mean, _ = read(study.grid, values, x, y, error)
    np.testing.assert_allclose(mean, function(x / 1000, y / 1000), rtol=1e-12)


def test_padding_points_at_an_inside_cell(study):
    x, y = np.array([WEST + 1010.0, WEST + 900.0]), np.array([SOUTH + 1350.0, SOUTH + 1277.7])
    cell, log_share = fix_entries(study.grid, x, y, np.array([150.0, 0.0]), "bilinear")
    assert cell.shape == log_share.shape
    padding = ~np.isfinite(log_share)
    assert padding[1].sum() > 0 and study.grid.inside.ravel()[cell].all()


def test_fix_that_reads_no_ground_is_an_error_with_its_count(study):
    # The cut south-eastern corner: 2.35 km east, 50 m north.
    place = np.array([WEST + 600.0, WEST + 2350.0]), np.array([SOUTH + 600.0, SOUTH + 50.0])
    with pytest.raises(StudyError, match=r"fixes: 1 fix\(es\) lie where no cell is habitable \(the first is number 2"):
        fix_entries(study.grid, *place, np.zeros(2), "cell")


def test_grid_with_no_go_ground_gives_it_no_mass(study):
    # A wall of uninhabitable cells west of the fix takes the mass of its nodes.
    sub_cells = study.grid.sub_cells.copy()
    sub_cells[:, : 10 * 8] = False
    habitable = study.grid.habitable.copy()
    habitable[:, :10] = 0.0
    walled = dataclasses.replace(study.grid, sub_cells=sub_cells, habitable=habitable)
    _, mass = read(walled, np.ones((24, 24)), 1001.0, 1200.0, 20.0)
    assert mass[0] == pytest.approx(1 - 1 / 6)  # the outer node of three has weight 1/6
