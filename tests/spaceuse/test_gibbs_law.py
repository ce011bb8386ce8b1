"""Gradient drifts: the steady state is exp(potential)/Z to rounding, on any cells, and F̃ is its own perceived scent."""

import jax.numpy as jnp
import numpy as np
import pytest
from spaceuse._grounds import make_parameters, make_setting, ragged, smooth_layer, solve, square

from bayesrange.spaceuse import SOLVED, Setting, make_domain

EPS = np.finfo(float).eps


def potential_by_hand(parameters, setting):
    """−βρ + Σ γ_k h_k in numpy, group by group."""
    x, y = np.meshgrid(setting.domain.x, setting.domain.y)
    rows = []
    for i, (home_x, home_y) in enumerate(np.asarray(parameters.home)):
        rho = np.sqrt((x - home_x) ** 2 + (y - home_y) ** 2 + float(setting.softening) ** 2)
        rows.append(-float(parameters.localising[i]) * rho)
        for k, layer in enumerate(np.asarray(setting.layers)):
            rows[-1] = rows[-1] + float(parameters.resource[k, i]) * layer
    return np.stack(rows)


def normalised(potential, area):
    """exp(potential)/Z over the habitable area; 0 outside."""
    weight = np.where(area > 0, np.exp(potential - potential.max((1, 2), keepdims=True)), 0.0)
    return weight / (weight * area).sum((1, 2), keepdims=True)


@pytest.mark.parametrize("shape", ["one row", "small", "oblong", "ragged"])
def test_uncoupled_groups_follow_the_gibbs_law_at_any_grid_size(shape):
    # Oracle: the Gibbs law itself, in numpy. Zero flux on every edge and a gradient drift leave no other steady state.
    shapes = {"one row": square(9, ny=1), "small": square(5), "oblong": square(33, ny=20), "ragged": ragged()}
    domain = shapes[shape]
    rng = np.random.default_rng(4)
    layers = [smooth_layer(rng, domain, 1.0) for _ in range(2)]
    centre = np.array([float(domain.x.mean()), float(domain.y.mean())])
    home = centre + np.array([[0.0, 0.0], [0.21, -0.13], [-0.4, 0.3]])
    setting = make_setting(domain, layers, [2.0, 1.0, 4.0])
    resource = np.array([[0.5, -1.0, 2.0], [0.1, 0.7, -0.4]])
    parameters = make_parameters(home, [0.3, 4.0, 11.0], resource=resource)
    area = np.asarray(domain.area)
    expected = normalised(potential_by_hand(parameters, setting), area)
    for coupled in (False, True) if shape == "ragged" else (False,):  # with α = 0 scent has no say
        solution = solve(parameters, setting, coupled=coupled)
        assert int(solution.result) == SOLVED
        # exponents up to 30 and a few hundred additions: 1e3 ulps
        np.testing.assert_allclose(np.asarray(solution.density), expected, rtol=1e3 * EPS)
        assert np.isneginf(np.asarray(solution.log_density)[:, area == 0]).all()


def test_density_between_points_is_the_published_profile_however_coarse_the_cells():
    # u = exp(1.5 h − 4ρ)/Z on the unit square, h = sin πx cos 2πy, ρ = √(|x − (.4, .55)|² + .05²): closed form; values
    # printed to 8 decimals from scipy quadrature (2026-12-01). Cells of 1/5 have centres at .1, .3, …, .9.
    published = {(0.1, 0.1): 0.66960782, (0.5, 0.5): 0.55244305, (0.9, 0.9): 0.50763290}
    log_density, domain = taxis_in_the_unit_square(5)
    u = np.exp(np.asarray(log_density)[0])
    at = {point: u[round(point[1] * 5 - 0.5), round(point[0] * 5 - 0.5)] for point in published}
    for point, value in published.items():
        # both printed values carry half a unit of the eighth decimal
        assert at[point] / at[0.5, 0.5] == pytest.approx(value / published[0.5, 0.5], abs=3e-8)


def test_normaliser_converges_at_order_2():
    # Z = .247463293057858, Gauss–Legendre of 200 and 400 nodes agreeing to 3e-16 (scipy, 2026-12-01)
    at = (0.4 - 0.5 / 40, 0.55 - 0.5 / 40)  # a point that is a cell centre at 40, 120 and 360 cells
    errors = []
    for n in (40, 120, 360):
        log_density, domain = taxis_in_the_unit_square(n)
        column, row = int(np.argmin(abs(domain.x - at[0]))), int(np.argmin(abs(domain.y - at[1])))
        assert abs(float(domain.x[column]) - at[0]) + abs(float(domain.y[row]) - at[1]) < 1e-12
        rho = np.sqrt((at[0] - 0.4) ** 2 + (at[1] - 0.55) ** 2 + 0.05**2)
        exponent = 1.5 * np.sin(np.pi * at[0]) * np.cos(2 * np.pi * at[1]) - 4 * rho
        errors.append(np.exp(exponent - float(log_density[0, row, column])) - 0.247463293057858)
    orders = np.diff(np.log(np.abs(errors))) / -np.log(3)
    # midpoint rule on a smooth function is of order 2; at 40 cells ε = .05 is resolved by two cells, hence the width
    assert (abs(orders - 2) < 0.1).all(), (errors, orders)


def taxis_in_the_unit_square(n):
    centres = (np.arange(n) + 0.5) / n
    domain = make_domain(centres, centres, np.full((n, n), 1 / n**2), 0.0)
    x, y = np.meshgrid(centres, centres)
    layer = np.sin(np.pi * x) * np.cos(2 * np.pi * y)
    setting = Setting(domain, jnp.asarray(layer[None]), jnp.ones(1), jnp.asarray(0.05))
    parameters = make_parameters([0.4, 0.55], 4.0, resource=[1.5])
    return solve(parameters, setting, coupled=False).log_density, domain


def perceived_by_hand(marks, domain, perception):
    """K∗p / K∗1 as a sum over all pairs of cells; no use of the separable kernel."""
    area = np.asarray(domain.area)
    x, y = np.meshgrid(domain.x, domain.y)
    squared = (x.ravel()[:, None] - x.ravel()) ** 2 + (y.ravel()[:, None] - y.ravel()) ** 2
    kernel = np.exp(-0.5 * squared / perception**2) * area.ravel()
    return ((marks.reshape(len(marks), -1) @ kernel.T) / kernel.sum(1)).reshape(marks.shape)


@pytest.mark.parametrize("over_marking", [0.0, 0.05])
def test_coupled_groups_perceive_the_scent_that_they_lay(over_marking):
    domain = ragged(perception=0.2)
    rng = np.random.default_rng(5)
    setting = make_setting(domain, [smooth_layer(rng, domain)], [2.0, 3.0, 1.0])
    home = [[1.5, 0.6], [2.0, 0.9], [2.6, 0.4]]
    alpha = np.array([0.5, 1.0, 2.0])
    parameters = make_parameters(home, [3.0, 4.0, 5.0], alpha, [[0.4, -0.2, 0.3]], over_marking)
    solution = solve(parameters, setting)
    assert int(solution.result) == SOLVED
    area, density = np.asarray(domain.area), np.asarray(solution.density)
    marks = np.asarray(setting.marking)[:, None, None] * density
    for _ in range(200):  # p_i = q_i (1 + m Σ_{j≠i} p_j), iterated as it reads; load 0.4 makes 0.4^200
        marks_of_others = marks.sum(0) - marks
        marks = np.asarray(setting.marking)[:, None, None] * density * (1 + over_marking * marks_of_others)
    perceived = perceived_by_hand(marks, domain, 0.2)
    foreign = np.where(area > 0, perceived.sum(0) - perceived, 0.0)
    # the solve stops at a relative change of 1e-10
    np.testing.assert_allclose(np.asarray(solution.foreign), foreign, atol=2e-10 * foreign.max())
    expected = normalised(potential_by_hand(parameters, setting) - alpha[:, None, None] * foreign, area)
    # α F̃ up to 40 times 1e-10 in the exponent
    np.testing.assert_allclose(density[:, area > 0], expected[:, area > 0], rtol=1e-8)
    np.testing.assert_allclose((density * area).sum((1, 2)), 1.0, rtol=1e3 * EPS)
    assert (density >= 0).all()
    assert float(solution.load) < 1 and (over_marking == 0) == (float(solution.load) == 0)


def test_permuted_groups_have_the_permuted_solution():
    domain = ragged()
    setting = make_setting(domain, [smooth_layer(np.random.default_rng(6), domain)], [2.0, 3.0, 1.0])
    parameters = make_parameters(
        [[1.5, 0.6], [2.0, 0.9], [2.6, 0.4]], [3.0, 4.0, 5.0], [0.5, 1.0, 2.0], [[0.4, -0.2, 0.3]], 0.05
    )
    order = np.array([2, 0, 1])
    shuffled = parameters._replace(
        localising=parameters.localising[order],
        avoidance=parameters.avoidance[order],
        resource=parameters.resource[:, order],
        home=parameters.home[order],
    )
    usual = solve(parameters, setting)
    other = solve(shuffled, setting._replace(marking=setting.marking[order]))
    # both stop at a relative change of 1e-10 in F̃ ≤ 20, times α ≤ 2
    np.testing.assert_allclose(np.asarray(other.density), np.asarray(usual.density)[order], rtol=1e-8)
