"""Two groups on a line that retreat from, or avoid, each other's perceived scent, against quadrature in scipy.

On a line every drift has a potential: log u_i = −β_i ρ_i − α_i F̃_i − κ_i ∫F̃_i ρ_i' dx + const. The reference
iterates it on 2,401 points with Simpson's rule; it knows no cells, no fluxes and no matrix.
"""

import jax.numpy as jnp
import numpy as np
import pytest
from scipy.integrate import cumulative_simpson, simpson

from bayesrange.spaceuse import SOLVED, Parameters, Setting, flux, make_domain

LENGTH, EPSILON, DELTA = 3.0, 0.1, 0.2  # [km]; ε fixed, so that all cell sizes solve one problem
AMOUNT = np.array([1.2, 1.8])  # n_i A₀ [km]: mean scent 1 on 3 km
HOME = np.array([0.9, 1.9])

CASES = {
    "retreat": {"beta": [2.0, 3.0], "kappa": [1.0, 1.5], "alpha": [0.0, 0.0]},
    "strong retreat": {"beta": [1.0, 2.0], "kappa": [4.0, 6.0], "alpha": [0.0, 0.0]},
    "avoidance": {"beta": [3.0, 4.0], "kappa": [0.0, 0.0], "alpha": [2.0, 3.0]},
    "both": {"beta": [2.0, 3.0], "kappa": [1.0, 0.5], "alpha": [0.5, 1.0]},
}


def reference(beta, kappa, alpha, points):
    """x and both densities, by damped substitution until nothing changes."""
    x = np.linspace(0.0, LENGTH, points)
    weight = np.full(points, 2.0)  # of Simpson's rule
    weight[1::2], weight[[0, -1]] = 4.0, 1.0
    weight *= LENGTH / (points - 1) / 3
    kernel = np.exp(-0.5 * ((x[:, None] - x) / DELTA) ** 2) * weight
    kernel /= kernel.sum(1, keepdims=True)
    beta, kappa, alpha = (np.array(value)[:, None] for value in (beta, kappa, alpha))
    rho = np.sqrt((x - HOME[:, None]) ** 2 + EPSILON**2)
    slope = (x - HOME[:, None]) / rho
    foreign = np.zeros((2, points))
    for _ in range(600):
        exponent = -beta * rho - alpha * foreign - kappa * cumulative_simpson(foreign * slope, x=x, axis=1, initial=0)
        u = np.exp(exponent - exponent.max(1, keepdims=True))
        u /= simpson(u, x=x, axis=1)[:, None]
        change = (AMOUNT[:, None] * u)[::-1] @ kernel.T - foreign
        foreign = foreign + 0.4 * change
    assert np.abs(change).max() < 1e-12
    return x, u


def by_cells(n, beta, kappa, alpha):
    x = (np.arange(n) + 0.5) * LENGTH / n
    domain = make_domain(x, np.array([0.5]), np.full((1, n), LENGTH / n), DELTA)
    setting = Setting(domain, jnp.zeros((0, 1, n)), jnp.asarray(AMOUNT), jnp.asarray(EPSILON))
    parameters = Parameters(
        jnp.asarray(beta), jnp.asarray(kappa), jnp.asarray(alpha), jnp.zeros((0, 2)), jnp.asarray(0.0),
        jnp.stack([jnp.asarray(HOME), jnp.full(2, 0.5)], axis=1),
    )  # fmt: skip
    solution = flux(parameters, setting, start="uncoupled")
    assert int(solution.result) == SOLVED
    return x, np.asarray(solution.density)[:, 0]


@pytest.mark.parametrize("case", CASES)
def test_cells_converge_to_the_quadrature_at_order_2(case):
    x, exact = reference(**CASES[case], points=2401)
    coarse, half = reference(**CASES[case], points=1201)
    # Simpson's rule at half the points: trusted 100 times closer than what it is compared with
    np.testing.assert_allclose(half, exact[:, ::2], atol=1e-7)
    errors = []
    for n in (60, 120, 240):
        centres, density = by_cells(n, **CASES[case])
        at = np.searchsorted(x, centres - 1e-9)  # all centres are points of the reference
        np.testing.assert_allclose(x[at], centres, atol=1e-12)
        errors.append(np.abs(density - exact[:, at]).max())
    orders = -np.diff(np.log2(errors))
    assert (abs(orders - 2) < 0.05).all(), (errors, orders)
    assert errors[-1] < 1e-3


def test_neighbours_move_the_reference_far_more_than_the_tolerance():
    # so that β alone cannot pass
    _, alone = reference([2.0, 3.0], [0.0, 0.0], [0.0, 0.0], 1201)
    for case in ("retreat", "both"):
        _, exact = reference(**CASES[case], points=1201)
        assert np.abs(exact - alone).max() > 0.1
