"""A group that feels nothing but its home: the Holgate–Okubo law, its isopleths, and what cells do to them.

A pull of constant strength β per unit diffusion gives u = β²/(2π) e^{−βr}: distances to the home are Gamma(2, rate β)
(Holgate 1971; Okubo 1980: citations from memory, formulae checked by quadrature with scipy, 2026-12-01). Lengths here
are in units of 1/β. ε is half a cell, as in a fit.
"""

import jax
import jax.numpy as jnp
import numpy as np
import pyproj
import pytest
from scipy import integrate, optimize, stats
from spaceuse._grounds import make_parameters, make_setting, solve

from bayesrange.inference import fix_entries, isopleth_levels, rank_mass
from bayesrange.spaceuse import Reading, log_fix_density, make_domain
from bayesrange.study import Grid

RADIUS_95 = 4.743865  # βr of the 95 % isopleth: chi-square(4)/2
AREAS = {0.50: 8.849391, 0.90: 47.53205, 0.95: 70.69919, 0.99: 138.4428}  # β² × area: π (chi-square(4; p)/2)²
OFFSET = np.array([0.137, 0.291])  # of the home from a corner of cells, in cells: no symmetry helps


def solved(cell, half=20.0, localising=1.0):
    """Density, cell areas and distances to the home on cells over ±half; beyond lie 4e-8 of the mass."""
    n = 2 * round(half / cell)
    centres = (np.arange(n) + 0.5 - n // 2) * cell
    domain = make_domain(centres, centres, np.full((n, n), cell**2), 0.0)
    home = OFFSET * cell
    parameters = make_parameters(home, localising)
    solution = solve(parameters, make_setting(domain, softening=cell / 2), coupled=False)
    r = np.hypot(*np.meshgrid(centres - home[0], centres - home[1]))
    return np.asarray(solution.density), np.asarray(domain.area), r


@pytest.fixture(scope="module")
def by_cell():
    return {cell: solved(cell) for cell in (0.2, 0.1, 0.05)}


def fitted_order(cells, errors):
    return np.polyfit(np.log(cells), np.log(np.abs(errors)), 1)[0]


def assert_order_2(cells, errors):
    """Halving the cell quarters the error, the better the smaller the cell: the next term is ε³ (1.90, 1.95 seen)."""
    first, second = np.diff(np.log(np.abs(errors))) / np.diff(np.log(cells))
    assert abs(second - 2) < 0.08 and abs(second - 2) < abs(first - 2), (errors, first, second)


def test_density_converges_to_the_closed_form_at_order_2(by_cell):
    distances = []
    for density, area, r in by_cell.values():
        distances.append((np.abs(density[0] - np.exp(-r) / (2 * np.pi)) * area).sum())
    assert_order_2(list(by_cell), distances)
    assert distances[-1] < 4e-4  # ε²/3 times the second derivative: 2e-4 seen


@pytest.mark.parametrize(("power", "moment"), [(1, 2.0), (2, 6.0)])
def test_moments_of_the_distance_converge_at_order_2(by_cell, power, moment):
    # E βr = 2, E β²r² = 6
    errors = [(density[0] * area * r**power).sum() - moment for density, area, r in by_cell.values()]
    assert_order_2(list(by_cell), errors)
    assert abs(errors[-1]) < 4e-4 * moment  # as above


@pytest.mark.parametrize("level", AREAS)
def test_isopleth_areas_and_radii(by_cell, level):
    # π (chi-square(4; p)/2)²; the chi-square row of printed tables (4 degrees of freedom: .50 3.35669, .95 9.48773, .99
    # 13.27670) gives the radii
    printed = {0.50: 3.35669, 0.90: 7.77944, 0.95: 9.48773, 0.99: 13.27670}
    assert np.sqrt(AREAS[level] / np.pi) == pytest.approx(printed[level] / 2, abs=5e-6)
    assert stats.chi2(4).ppf(level) == pytest.approx(printed[level], abs=5e-6)
    errors = []
    for density, area, _ in by_cell.values():
        denser, own = rank_mass(jnp.asarray(density), jnp.asarray(area))
        share, areas = isopleth_levels(denser, own, jnp.asarray(area), jnp.asarray([level]))
        # the share of each cell inside holds exactly the mass asked for
        assert float((share[0] * own).sum()) == pytest.approx(level, abs=1e-12)
        errors.append(float(areas[0, 0]) - AREAS[level])
    # order 2 from the density; counting cells in a circle adds noise well below it
    assert fitted_order(list(by_cell), errors) == pytest.approx(2.0, abs=0.25), errors
    assert abs(errors[-1]) < 0.002 * AREAS[level]


def bias_by_softening(cells_across):
    """Bias of β where only ε stands between model and truth, in continuous space: scipy.integrate.quad."""
    epsilon = RADIUS_95 / cells_across
    mean_rho = integrate.quad(lambda r: np.hypot(r, epsilon) * r * np.exp(-r), 0, 60)[0]

    def excess(beta):  # the likelihood is at its top where the model's mean ρ is the data's
        mass, first = (
            integrate.quad(lambda rho, p=p: rho**p * np.exp(-beta * (rho - epsilon)), epsilon, 80)[0] for p in (1, 2)
        )
        return first / mass - mean_rho

    return optimize.brentq(excess, 0.5, 2.0) - 1


@pytest.mark.parametrize(("cells_across", "percent"), [(24, 0.8), (16, 1.6), (8, 5.0), (5, 10.5)])
def test_softening_alone_biases_beta_as_documented(cells_across, percent):
    # 24, 16, 8, 5 cells across the 95 % range: documented as 0.8, 1.6, 5 and 10 %
    assert 100 * bias_by_softening(cells_across) == pytest.approx(percent, abs=0.05)


def bias_of_a_fit(cells_across, how):
    """β̂ − 1 of a likelihood of endless exact fixes from the true law, read as a fit reads them."""
    cell = 2 * RADIUS_95 / cells_across
    n = 2 * int(np.ceil(27 / cell))
    half = n // 2 * cell
    # endless fixes: 800 radii to 25 × 24 directions, weighted by the true law r e^-r (1e-9 lies beyond)
    radius = 25 * (np.arange(800) + 0.5) / 800
    weight = np.repeat(radius * np.exp(-radius), 24)
    weight = jnp.asarray(weight / weight.sum())
    angle = 2 * np.pi * (np.arange(24) + 0.5) / 24
    home = OFFSET * cell
    x = (home[0] + radius[:, None] * np.cos(angle)).ravel()
    y = (home[1] + radius[:, None] * np.sin(angle)).ravel()
    whole = np.ones((n, n))
    grid = Grid(-half, -half, cell, pyproj.CRS(32631), whole, whole, np.ones((8 * n, 8 * n), bool))
    cells, log_share = fix_entries(grid, x, y, np.zeros(x.size), how)
    reading = Reading(jnp.asarray(cells), jnp.asarray(log_share), jnp.zeros(x.size, int), jnp.asarray(cell**2 * whole))
    centres = (np.arange(n) + 0.5) * cell - half
    setting = make_setting(make_domain(centres, centres, cell**2 * whole, 0.0), softening=cell / 2)

    @jax.jit
    def misfit(beta):
        law = solve(make_parameters(home, beta), setting, coupled=False).log_density
        return -(weight @ log_fix_density(law, reading))

    return (
        optimize.minimize_scalar(
            lambda beta: float(misfit(beta)), bounds=(0.8, 1.6), method="bounded", options={"xatol": 1e-6}
        ).x
        - 1
    )


def test_bias_of_beta_in_a_fit():
    # Between the centres a straight line lies above the convex law, which biases β up again as much as ε does. Percent
    # by a separate numpy script without the package (2026-12-01); other places of the home in its cell: ± 2 % of these.
    across = np.array([24, 16])
    bias = np.array([bias_of_a_fit(n, "bilinear") for n in across])
    # two grids of fixes, both fine against the cell
    np.testing.assert_allclose(100 * bias, [1.404, 2.969], rtol=0.005)  # and 10.333 at 8 cells
    # the next term is of order 3 or 4 and already felt at 24 cells
    assert fitted_order(1 / across, bias) == pytest.approx(2.0, abs=0.2), bias
    # Within a cell the law is level, which takes part of ε's bias back: 0.5 and 0.9 % seen.
    for n in (24, 16):
        assert 0 < bias_of_a_fit(n, "cell") < bias_by_softening(n)
