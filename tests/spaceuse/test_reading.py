"""The density of a fix integrates to 1, is bilinear between centres, and takes in location error by quadrature."""

import jax.numpy as jnp
import numpy as np
import pytest
from scipy.interpolate import RegularGridInterpolator
from spaceuse._grounds import SUB, ragged_grid

from bayesrange.inference import fix_entries
from bayesrange.spaceuse import Reading, log_fix_density

EPS = np.finfo(float).eps
HOME_KM, KM2 = np.array([2.1, 0.65]), 1e-6  # [m²] → [km²]


@pytest.fixture(scope="module")
def grid():
    return ragged_grid()


@pytest.fixture(scope="module")
def coarse():
    """The same land in cells of 200 m, for sums over every place."""
    return ragged_grid(9, 11, 200.0)


def holgate(grid, localising=4.0):
    """Log of a round range about a place in the south of the land; its scale is arbitrary."""
    rho = np.hypot(*np.meshgrid(grid.x_m / 1000 - HOME_KM[0], grid.y_m / 1000 - HOME_KM[1]))
    return np.where(grid.inside, -localising * rho, -np.inf)


def rough(grid):
    """Log density without any smoothness."""
    noise = np.random.default_rng(1).normal(size=grid.shape)
    return np.where(grid.inside, noise, -np.inf)


def read(grid, log_density, x, y, error_m, how):
    """Density of fixes [1/km²] as a fit would take it."""
    x, y = np.atleast_1d(np.asarray(x, float)), np.atleast_1d(np.asarray(y, float))
    cell, log_share = fix_entries(grid, x, y, np.broadcast_to(np.asarray(error_m, float), x.shape), how)
    share = grid.basis_share if how == "bilinear" else grid.habitable
    basis = jnp.asarray(share * grid.cell_m**2 * KM2)
    reading = Reading(jnp.asarray(cell), jnp.asarray(log_share), jnp.zeros(x.size, int), basis)
    return np.exp(np.asarray(log_fix_density(jnp.asarray(log_density)[None], reading)))


def lattice(grid, margin_m, step_m):
    """Midpoints of squares over the grid and at least a margin around it, in line with the sub-cells [m]."""
    ny, nx = grid.shape
    margin_m = step_m * np.ceil(margin_m / step_m)
    x = np.arange(grid.west_m - margin_m + step_m / 2, grid.west_m + nx * grid.cell_m + margin_m, step_m)
    y = np.arange(grid.south_m - margin_m + step_m / 2, grid.south_m + ny * grid.cell_m + margin_m, step_m)
    return (axis.ravel() for axis in np.meshgrid(x, y))


@pytest.mark.parametrize("how", ["bilinear", "cell"])
@pytest.mark.parametrize(("error_m", "law"), [(0.0, holgate), (0.0, rough), (19.9, holgate)])
def test_density_of_fixes_integrates_to_1_over_the_habitable_area(coarse, how, error_m, law):
    grid = coarse
    step = grid.cell_m / SUB
    x, y = lattice(grid, 0.0, step)
    land = grid.habitable_at(x, y)
    assert 0.3 < land.mean() < 0.9
    total = read(grid, law(grid), x[land], y[land], error_m, how).sum() * step**2 * KM2
    # 4,000 additions; the normaliser is the same sum in another order. Below 0.1 cell an error is no error.
    assert total == pytest.approx(1.0, abs=100 * EPS)


@pytest.mark.parametrize("how", ["bilinear", "cell"])
@pytest.mark.parametrize("error_m", [25.0, 120.0, 199.0, 201.0, 360.0])
def test_density_of_fixes_with_error_integrates_to_1_over_the_plane(coarse, how, error_m):
    grid = coarse
    # Each node moves the whole density by one shift; where it would leave habitable ground it counts for nothing.
    step = grid.cell_m / SUB
    x, y = lattice(grid, 3 * error_m, step)
    at, _ = np.polynomial.hermite_e.hermegauss(3 if error_m < grid.cell_m else 5)
    reaches = np.zeros(x.size, bool)
    for along in at:
        for up in at:
            reaches |= grid.habitable_at(x + error_m * along, y + error_m * up)
    total = read(grid, holgate(grid), x[reaches], y[reaches], error_m, how).sum() * step**2 * KM2
    # Nodes lie anywhere in their sub-cells, so that this sum is no exact one; for each there is an opposite node, which
    # takes out the first order: 3e-6 seen, against 1e-3 where the fixes are shifted by a third of a sub-cell.
    assert total == pytest.approx(1.0, abs=2e-5)


@pytest.mark.parametrize("how", ["bilinear", "cell"])
def test_density_of_fixes_with_wide_error_integrates_to_1_over_the_plane(coarse, how):
    grid, error_m, step = coarse, 450.0, 100.0
    x, y = lattice(grid, 4 * error_m, step)
    rows, columns = np.nonzero(grid.inside)
    reach = 5 * error_m
    near = np.zeros(x.size, bool)
    for centre_x, centre_y in zip(grid.x_m[columns], grid.y_m[rows], strict=True):
        near |= (abs(x - centre_x) < reach) & (abs(y - centre_y) < reach)
    total = read(grid, holgate(grid), x[near], y[near], error_m, how).sum() * step**2 * KM2
    # the margin and the reach of 5 sd leave out 1e-6 each; the midpoint rule is exact to e^{-2π²·25} for a Gaussian
    assert total == pytest.approx(1.0, abs=1e-5)


def test_bilinear_reading_is_scipys_interpolator_in_the_interior(grid):
    # scipy.interpolate.RegularGridInterpolator(method="linear")
    law = rough(grid)
    density = np.where(grid.inside, np.exp(law), 0.0)
    rng = np.random.default_rng(2)
    x, y = rng.uniform(1100, 3100, 4000), rng.uniform(-200, 1400, 4000)
    rows, columns, _ = grid.bilinear(x, y)
    inner = grid.inside[rows, columns].all(1) & (np.ptp(rows, 1) == 1) & (np.ptp(columns, 1) == 1)
    assert inner.sum() > 1000
    expected = RegularGridInterpolator((grid.y_m, grid.x_m), density)(np.stack([y, x], 1)[inner])
    expected /= (density * grid.basis_share).sum() * grid.cell_m**2 * KM2
    np.testing.assert_allclose(read(grid, law, x[inner], y[inner], 0.0, "bilinear"), expected, rtol=100 * EPS)


def test_cell_reading_is_the_cells_own_density(grid):
    law = rough(grid)
    row, column = 9, 8
    x = grid.x_m[column] + grid.cell_m * np.array([-0.499, 0.0, 0.499])
    expected = np.exp(law[row, column]) / (np.exp(law) * grid.habitable * grid.cell_m**2 * KM2).sum()
    found = read(grid, law, x, np.full(3, grid.y_m[row]), 0.0, "cell")
    np.testing.assert_allclose(found, expected, rtol=100 * EPS)


def convolved(grid, law, x, y, error_m):
    """∫ u(z) N(y; z, σ²) dz by 4-point Gauss–Legendre in parts² pieces of every cell, u bilinear on the land."""
    parts = 4 if error_m > 30 else 20  # pieces of 25 or 5 m that end at the kinks of the bilinear surface
    at, weight = np.polynomial.legendre.leggauss(4)
    width = grid.cell_m / parts
    axes = []
    for start, count, centre in ((grid.west_m, grid.shape[1], x), (grid.south_m, grid.shape[0], y)):
        edges = start + width * np.arange(count * parts)
        edges = edges[abs(edges - centre) < 7 * error_m + width]
        axes.append((edges[:, None] + width * (at + 1) / 2).ravel())
    place_x, place_y = (axis.ravel() for axis in np.meshgrid(*axes))
    share_x, share_y = (np.tile(weight * width / 2, axis.size // 4) for axis in axes)
    land = grid.habitable_at(place_x, place_y)
    place_x, place_y, share = place_x[land], place_y[land], np.outer(share_y, share_x).ravel()[land]
    rows, columns, corner = grid.bilinear(place_x, place_y)
    density = (np.exp(law)[rows, columns] * corner).sum(1)
    density /= (np.exp(law) * grid.basis_share).sum() * grid.cell_m**2 * KM2
    gauss = np.exp(-0.5 * ((place_x - x) ** 2 + (place_y - y) ** 2) / error_m**2) / (2 * np.pi * error_m**2)
    return (density * gauss * share).sum()


@pytest.mark.parametrize(
    ("error_m", "apart"),
    # In nats. One node leaves out σ²/2 times the curvature, kinks between cells included; 3 nodes per axis cross such
    # kinks (rms 0.008 at one cell over random inner places), 5 nodes the edge too; cells are a box of half an sd.
    [(5.0, 3e-3), (40.0, 0.02), (95.0, 0.03), (150.0, 0.05), (250.0, 0.02)],
)
def test_location_error_is_a_convolution(grid, error_m, apart):
    law = holgate(grid)
    for x, y in ((2130.0, 410.0), (2050.0, 350.0), (1900.0, 700.0)):  # 0.35 km or more from any edge
        exact = convolved(grid, law, x, y, error_m)
        found = read(grid, law, x, y, error_m, "bilinear")[0]
        assert abs(np.log(found / exact)) < apart, (x, y)


def test_location_error_is_no_formality(grid):
    # At the home, the peak is blurred: reading the place itself would be off by 0.2 nats and more.
    law = holgate(grid)
    for error_m in (95.0, 150.0, 250.0):
        exact = convolved(grid, law, 2100.0, 650.0, error_m)
        assert np.log(read(grid, law, 2100.0, 650.0, 0.0, "bilinear")[0] / exact) > 0.2
        assert abs(np.log(read(grid, law, 2100.0, 650.0, error_m, "bilinear")[0] / exact)) < 0.1


def test_a_fix_reads_more_cells_the_less_is_known_of_its_place(grid):
    x, y = np.full(4, 2110.0), np.full(4, 405.0)
    _, log_share = fix_entries(grid, x, y, np.array([0.0, 60.0, 120.0, 260.0]), "bilinear")
    counts = np.isfinite(log_share).sum(1)
    assert counts[0] == 4 and (np.diff(counts) > 0).all()
    # of the first two nothing lies off the land, so that nothing of the fix is lost
    np.testing.assert_allclose(np.exp(log_share[:2]).sum(1), 1.0, rtol=10 * EPS)


def test_very_low_densities_stay_finite():
    # 1,000 nats per cell: exp underflows, the log-sum-exp of the corners must not
    grid = ragged_grid()
    law = holgate(grid, 10_000.0)
    cell, log_share = fix_entries(grid, np.array([1250.0]), np.array([790.0]), np.zeros(1), "bilinear")
    basis = jnp.asarray(grid.basis_share * grid.cell_m**2 * KM2)
    reading = Reading(jnp.asarray(cell), jnp.asarray(log_share), jnp.zeros(1, int), basis)
    value = float(log_fix_density(jnp.asarray(law)[None], reading)[0])
    corners = law.ravel()[cell[0]] + log_share[0]
    # at 10,000 nats the largest term of a sum is the sum to within log 4
    assert -9000 < value < -7000
    assert value == pytest.approx(corners.max() - law.max() - np.log(basis.ravel()[law.argmax()]), abs=2 * np.log(4))


def test_groups_read_their_own_density(grid):
    laws = np.stack([holgate(grid), rough(grid)])
    cell, log_share = fix_entries(grid, np.array([2130.0, 2130.0]), np.array([510.0, 510.0]), np.zeros(2), "bilinear")
    basis = jnp.asarray(grid.basis_share * grid.cell_m**2 * KM2)
    reading = Reading(jnp.asarray(cell), jnp.asarray(log_share), jnp.asarray([0, 1]), basis)
    both = np.exp(np.asarray(log_fix_density(jnp.asarray(laws), reading)))
    alone = [read(grid, law, 2130.0, 510.0, 0.0, "bilinear")[0] for law in laws]
    np.testing.assert_allclose(both, alone, rtol=10 * EPS)
    assert abs(np.log(both[0] / both[1])) > 0.1
