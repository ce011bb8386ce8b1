"""Derivatives by the implicit function theorem against differences of solved steady states."""

import jax
import jax.numpy as jnp
import numpy as np
import pytest
from jax.flatten_util import ravel_pytree
from spaceuse._grounds import make_parameters, make_setting, ragged, smooth_layer, solve, square

from bayesrange.spaceuse import NOT_CONVERGED, SOLVED, Parameters, gibbs
from bayesrange.spaceuse import _fixed_point as fixed_point

HOMES = np.array([[1.55, 0.6], [2.05, 0.9], [2.6, 0.4], [2.0, 0.25]])
STEP = 1e-3
"""Of five-point differences: they err by step⁴, and by the solve's 1e-10 over the step."""


def steep_setting():
    domain = ragged(perception=0.2)
    layers = [smooth_layer(np.random.default_rng(k), domain) for k in (7, 8)]
    return make_setting(domain, layers, [2.0, 3.0, 1.0, 2.0])


def free(parameters: Parameters) -> dict:
    """The parameters that `gibbs` knows; `retreat` is none of them."""
    return {name: value for name, value in parameters._asdict().items() if name not in ("retreat", "marking")}


@pytest.fixture(scope="module")
def score():
    """A smooth function of all log densities: as a likelihood of 200 fixes would be."""
    setting = steep_setting()
    rng = np.random.default_rng(9)
    share = np.where(setting.domain.inside, rng.gamma(0.3, 1.0, (4, *setting.domain.area.shape)), 0.0)
    share = jnp.asarray(50 * share / share.sum((1, 2), keepdims=True))

    @jax.jit
    def value(varied):
        solution = gibbs(Parameters(retreat=jnp.zeros(4), **varied), setting)
        terms = jnp.where(share > 0, share * jnp.where(share > 0, solution.log_density, 0.0), 0.0)
        return terms.sum(), (solution.result, solution.steps)

    return value, jax.jit(jax.grad(lambda varied: value(varied)[0]))


@pytest.mark.parametrize("avoidance", [0.2, 2.0, 4.0])
def test_gradient_of_every_parameter_is_the_difference_of_solutions(score, avoidance):
    value, gradient = score
    around = np.array([1.0, 0.8, 1.1, 0.9])  # groups differ in every term
    parameters = make_parameters(
        HOMES, 4.0 * around[::-1], avoidance * around, [[0.4, -0.2, 0.3, 0.1], [0.2, 0.5, -0.3, 0.0]], over_marking=0.01
    )
    varied = free(parameters)
    (_, (result, _)) = value(varied)
    assert int(result) == SOLVED
    flat, unravel = ravel_pytree(varied)
    found = np.asarray(ravel_pytree(gradient(varied))[0])
    assert found.size == 4 + 4 + 8 + 1 + 8
    differences = np.empty(flat.size)
    for i in range(flat.size):
        at = [float(value(unravel(flat.at[i].add(k * STEP)))[0]) for k in (-2, -1, 1, 2)]
        differences[i] = (at[0] - 8 * at[1] + 8 * at[2] - at[3]) / (12 * STEP)
    names = [name for name, part in varied.items() for _ in range(part.size)]
    # the project's target; components range over three powers of ten, small ones are held to the largest of their kind
    for kind in varied:
        own = np.array([name == kind for name in names])
        scale = np.abs(differences[own]).max()
        assert scale > 0.1, f"{kind} does not matter here, so that its gradient is not tested"
        np.testing.assert_allclose(found[own], differences[own], rtol=1e-5, atol=1e-5 * scale, err_msg=kind)


def test_uncoupled_gradient_is_the_score_of_a_gibbs_law():
    # d log u(x)/dγ = h(x) − E h, d log u(x)/dβ = E ρ − ρ(x): the score of an exponential family, in numpy
    domain = square(16)
    layer = smooth_layer(np.random.default_rng(10), domain)
    setting = make_setting(domain, [layer], [1.0])
    x, y = np.meshgrid(domain.x, domain.y)
    rho = np.sqrt((x - 0.7) ** 2 + (y - 0.9) ** 2 + 0.05**2)
    mass = np.exp(-3.0 * rho + 0.5 * layer)
    mass /= mass.sum()

    def at_a_cell(localising, resource):
        parameters = make_parameters([0.7, 0.9], localising, resource=resource)
        return gibbs(parameters, setting, coupled=False).log_density[0, 4, 11]

    by_beta, by_gamma = jax.grad(at_a_cell, (0, 1))(jnp.asarray(3.0), jnp.asarray([0.5]))
    assert float(by_beta) == pytest.approx((mass * rho).sum() - rho[4, 11], rel=1e-12)
    assert float(by_gamma[0]) == pytest.approx(layer[4, 11] - (mass * layer).sum(), rel=1e-12)


def test_gradient_at_no_avoidance_is_the_uncoupled_one_and_avoidances_own():
    # At α = 0: d log u_i/dα_i = E F̃_i − F̃_i(x), F̃ that of groups without neighbours.
    setting = steep_setting()
    alone = solve(make_parameters(HOMES, 4.0, 0.0, [0.3, 0.1]), setting)
    foreign, density = np.asarray(alone.foreign), np.asarray(alone.density)
    mean = (density * np.asarray(setting.domain.area) * foreign).sum((1, 2))

    def of_a_cell(avoidance):
        return gibbs(make_parameters(HOMES, 4.0, avoidance, [0.3, 0.1]), setting).log_density[1, 11, 9]

    gradient = np.asarray(jax.jit(jax.grad(of_a_cell))(jnp.zeros(4)))
    np.testing.assert_allclose(gradient, [0, mean[1] - foreign[1, 11, 9], 0, 0], atol=1e-9)


def linear_step(flat, theta):
    """x ↦ A x + θ: the fixed point is (1 − A)⁻¹ θ, its adjoint (1 − A)⁻ᵀ."""
    matrix, shift = theta
    return matrix @ flat + shift


@pytest.fixture
def linear():
    rng = np.random.default_rng(11)
    matrix = rng.normal(size=(30, 30))
    matrix *= 0.9 / np.abs(np.linalg.eigvals(matrix)).max()
    return jnp.asarray(matrix), jnp.asarray(rng.normal(size=30))


def test_fixed_point_and_adjoint_are_those_of_numpys_linear_solver(linear):
    matrix, shift = (np.asarray(part) for part in linear)
    weight = np.random.default_rng(12).normal(size=30)

    def value(theta):
        flat, _ = fixed_point.implicit_fixed_point(linear_step, theta, jnp.zeros(30))
        return jnp.asarray(weight) @ flat

    exact = np.linalg.solve(np.eye(30) - matrix, shift)
    adjoint = np.linalg.solve(np.eye(30) - matrix.T, weight)
    flat, iteration = fixed_point.implicit_fixed_point(linear_step, linear, jnp.zeros(30))
    assert float(iteration.residual) <= fixed_point.TOLERANCE
    scale = np.linalg.norm(np.linalg.inv(np.eye(30) - matrix), 2)
    # a residual of 1e-10 relative to the largest value leaves an error of that times ‖(1 − A)⁻¹‖ and √30
    np.testing.assert_allclose(np.asarray(flat), exact, atol=1e-10 * np.abs(exact).max() * scale * 6)
    by_matrix, by_shift = jax.grad(value)(linear)
    bound = 1e-8 * scale * 6  # the adjoint may stop at 100 times the tolerance
    np.testing.assert_allclose(np.asarray(by_shift), adjoint, atol=bound * np.abs(adjoint).max())
    size = np.abs(np.outer(adjoint, exact)).max()
    np.testing.assert_allclose(np.asarray(by_matrix), np.outer(adjoint, exact), atol=2 * bound * size)


def test_an_adjoint_that_does_not_converge_gives_nan_not_a_wrong_slope(linear, monkeypatch):
    usual, calls = fixed_point.anderson, []

    def tired(step, start, *args, **kwargs):
        """The forward solve as ever; the adjoint is given up after 3 steps."""
        calls.append(start)
        return usual(step, start, *args, **({**kwargs, "max_steps": 3} if len(calls) > 1 else kwargs))

    monkeypatch.setattr(fixed_point, "anderson", tired)
    total, gradient = jax.value_and_grad(
        lambda shift: fixed_point.implicit_fixed_point(linear_step, (linear[0], shift), jnp.zeros(30))[0].sum()
    )(linear[1])
    assert len(calls) == 2 and np.isfinite(float(total))
    assert np.isnan(np.asarray(gradient)).all()


def test_a_solve_that_does_not_converge_says_so(monkeypatch):
    setting = steep_setting()
    usual = fixed_point.anderson
    monkeypatch.setattr(fixed_point, "anderson", lambda step, start, **_: usual(step, start, max_steps=3))
    solution = gibbs(make_parameters(HOMES, 4.0, 4.0, [0.3, 0.1]), setting)
    assert int(solution.result) == NOT_CONVERGED and int(solution.steps) == 3
    assert float(solution.residual) > fixed_point.TOLERANCE
