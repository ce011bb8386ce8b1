"""Derivatives of the flux solver: against differences of solved states and the Gibbs solver, in every use of JAX."""

from functools import cache
from pathlib import Path

import jax
import jax.numpy as jnp
import numpy as np
import pytest
from jax.flatten_util import ravel_pytree
from spaceuse._grounds import make_parameters, make_setting, ragged, smooth_layer

from bayesrange.spaceuse import SOLVED, _flux, _flux_adjoint, flux, gibbs
from bayesrange.spaceuse._sparse import choose

HOMES = np.array([[1.55, 0.6], [2.05, 0.9], [2.6, 0.4]])
STEP = 1e-3
"""Of five-point differences: they err by step⁴, and by the solve's 1e-10 over the step."""


def case(avoidance, retreat):
    domain = ragged(perception=0.2)
    layers = [smooth_layer(np.random.default_rng(k), domain) for k in (7, 8)]
    setting = make_setting(domain, layers, [2.0, 3.0, 1.0])
    around = np.array([1.0, 0.8, 1.1])  # groups differ in every term
    resource = [[0.4, -0.2, 0.3], [0.2, 0.5, -0.3]]
    return make_parameters(HOMES, 4 * around[::-1], avoidance * around, resource, 0.01, retreat * around[::-1]), setting


@cache
def score(solver, coupled=True, **options):
    """A smooth function of all log densities, as the likelihood of 150 fixes would be; and the result code."""
    _, setting = case(0.0, 0.0)
    rng = np.random.default_rng(9)
    share = np.where(setting.domain.inside, rng.gamma(0.3, 1.0, (3, *setting.domain.area.shape)), 0.0)
    share = jnp.asarray(50 * share / share.sum((1, 2), keepdims=True))

    def value(parameters):
        solution = solver(parameters, setting, coupled=coupled, **options)
        seen = jnp.where(share > 0, share * jnp.where(share > 0, solution.log_density, 0.0), 0.0)
        return seen.sum(), solution.result

    return value


@cache
def slope(*arguments, **options):
    """((value, result code), gradient), compiled once."""
    return jax.jit(jax.value_and_grad(score(*arguments, **options), has_aux=True))


@pytest.fixture(params=["klu", "superlu"])
def linear(request):
    if request.param == "klu":
        pytest.importorskip("klujax_cpp")
    return request.param


@pytest.mark.parametrize("avoidance, retreat", [(0.3, 0.5), (0.0, 2.0), (2.0, 1.0)])
def test_gradient_of_every_parameter_is_the_difference_of_solutions(avoidance, retreat):
    parameters, _ = case(avoidance, retreat)
    both = slope(flux)
    (_, result), gradient = both(parameters)
    assert int(result) == SOLVED
    flat, unravel = ravel_pytree(parameters)
    found, differences = np.asarray(ravel_pytree(gradient)[0]), np.empty(flat.size)
    assert flat.size == 3 + 3 + 3 + 6 + 1 + 6
    for i in range(flat.size):
        at = [float(both(unravel(flat.at[i].add(k * STEP)))[0][0]) for k in (-2, -1, 1, 2)]
        differences[i] = (at[0] - 8 * at[1] + 8 * at[2] - at[3]) / (12 * STEP)
    names = np.concatenate([[name] * part.size for name, part in parameters._asdict().items() if part is not None])
    for kind in dict.fromkeys(names.tolist()):
        own = names == kind
        scale = np.abs(differences[own]).max()
        assert scale > 0.1, f"{kind} does not matter here, so that its gradient is not tested"
        # the project's target; small components are held to the largest of their kind
        np.testing.assert_allclose(found[own], differences[own], rtol=1e-5, atol=1e-5 * scale, err_msg=kind)


@pytest.mark.parametrize("coupled", [True, False])
def test_without_retreat_the_gradient_is_that_of_the_gibbs_solver(coupled):
    for avoidance in (0.0, 0.2, 4.0):
        parameters, _ = case(avoidance, 0.0)
        (_, expected), (_, found) = slope(gibbs, coupled)(parameters), slope(flux, coupled)(parameters)
        for name in ("localising", "avoidance", "resource", "home", "over_marking"):
            size = max(float(jnp.abs(getattr(expected, name)).max()), 1e-3)
            # the adjoint stops at 1e-7
            np.testing.assert_allclose(getattr(found, name), getattr(expected, name), atol=1e-6 * size, err_msg=name)


@pytest.mark.parametrize("way", [{"linear": "superlu"}, {"start": "uncoupled"}], ids=["superlu", "uncoupled"])
def test_gradient_does_not_depend_on_the_start_or_the_sparse_solver(way):
    parameters, _ = case(1.0, 1.0)
    usual, other = (ravel_pytree(f(parameters)[1])[0] for f in (slope(flux), slope(flux, **way)))
    np.testing.assert_allclose(other, usual, atol=1e-6 * float(jnp.abs(usual).max()))  # adjoints stop at 1e-7


def test_batches_of_gradients_and_rows_of_a_jacobian_are_those_of_one_by_one(linear):
    # A factor is released once, however many results wait for it: a second release would end the process.
    parameters, setting = case(0.5, 0.5)

    value = score(flux, linear=linear)

    def of(kappa):
        return value(parameters._replace(retreat=jnp.full(3, kappa)))[0]

    several, one = jnp.asarray([0.1, 1.0, 4.0]), jax.jit(jax.value_and_grad(of))
    values, slopes = jax.jit(jax.vmap(jax.value_and_grad(of)))(several)
    for i, kappa in enumerate(several):
        value, by_kappa = one(kappa)
        assert float(values[i]) == pytest.approx(float(value), rel=1e-9)
        assert float(slopes[i]) == pytest.approx(float(by_kappa), rel=1e-6)

    def cells(kappa):
        return flux(parameters._replace(retreat=jnp.full(3, kappa)), setting, linear=linear).log_density[:, 9, 9]

    rows = jax.jit(jax.jacrev(cells))(several[1])
    step = 1e-4
    differences = (cells(several[1] + step) - cells(several[1] - step)) / (2 * step)
    np.testing.assert_allclose(rows, differences, rtol=1e-5)  # step² and 1e-10/step


def test_value_and_gradient_may_stand_in_one_program(linear):
    # Equal factorisations are not merged: one would be released under the other.
    parameters, _ = case(0.5, 0.5)
    value = score(flux, linear=linear)

    def several(parameters):
        return value(parameters)[0], jax.grad(value, has_aux=True)(parameters)[0].retreat, value(parameters)[0]

    first, by_retreat, again = jax.jit(several)(parameters)
    (expected, _), gradient = slope(flux, linear=linear)(parameters)
    assert float(first) == float(again) == pytest.approx(float(expected), rel=1e-12)
    np.testing.assert_allclose(by_retreat, gradient.retreat, rtol=1e-9)


def test_gradients_hold_no_memory(linear):
    # 300 gradients that kept their factors would hold 300 × 3 × 100 KB = 90 MB.
    statm = Path("/proc/self/statm")
    if not statm.exists():
        pytest.skip("resident memory is read from /proc")
    parameters, _ = case(0.2, 0.5)
    gradient, value = slope(flux, linear=linear), jax.jit(score(flux, linear=linear))
    resident = []
    for i in range(340 if linear == "klu" else 100):
        changed = parameters._replace(retreat=parameters.retreat * (1 + 1e-3 * i))
        jax.block_until_ready((gradient(changed), value(changed)))
        resident.append(int(statm.read_text().split()[1]) * 4096 / 1e6)
    assert resident[-1] - resident[40] < 10


def test_a_failed_adjoint_gives_nan_not_a_wrong_slope(monkeypatch):
    parameters, setting = case(1.0, 1.0)
    monkeypatch.setattr(_flux_adjoint, "STEPS", 2)

    def cells(parameters):
        return _flux._log_density((parameters, setting), choose(None), True, "gibbs")[0][:, 9, 9].sum()

    value, gradient = jax.jit(jax.value_and_grad(cells))(parameters)
    assert np.isfinite(float(value))
    assert np.isnan(np.asarray(gradient.retreat)).all()
