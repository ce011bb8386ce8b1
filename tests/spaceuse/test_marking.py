"""Marking that comes with the parameters (an uncertain number of animals) in place of the setting's."""

import jax
import jax.numpy as jnp
import numpy as np
import pytest
from spaceuse._grounds import make_parameters, make_setting, square

from bayesrange.spaceuse import arrival_scent, flux, gibbs

HOMES = np.array([[0.4, 0.5], [0.9, 0.7]])
SETTING = make_setting(square(14, 0.1), [], [2.0, 3.0])
OTHER = jnp.asarray(SETTING.marking) * jnp.array([1.7, 0.6])


def parameters(solver):
    return make_parameters(HOMES, 4.0, 0.8, retreat=1.0 if solver is flux else 0.0)


@pytest.mark.parametrize("solver", [gibbs, flux])
def test_marking_of_the_parameters_counts_instead_of_the_settings(solver):
    given = parameters(solver)
    own = jax.jit(solver)(given._replace(marking=OTHER), SETTING)
    replaced = jax.jit(solver)(given, SETTING._replace(marking=OTHER))
    np.testing.assert_array_equal(own.log_density, replaced.log_density)
    np.testing.assert_array_equal(own.foreign, replaced.foreign)
    assert np.abs(own.log_density - jax.jit(solver)(given, SETTING).log_density).max() > 0.01


@pytest.mark.parametrize("solver", [gibbs, flux])
def test_gradient_by_marking_agrees_with_central_differences(solver):
    given = parameters(solver)
    at = jnp.array([40, 77])

    @jax.jit
    @jax.value_and_grad
    def value(marking):
        density = solver(given._replace(marking=marking), SETTING).log_density
        return density.reshape(2, -1)[:, at].sum()

    step = 1e-4
    moves = step * jnp.eye(2)
    slopes = [(value(OTHER + move)[0] - value(OTHER - move)[0]) / (2 * step) for move in moves]
    # Truncation step² / 6 × third derivative; a solve's relative 1e-10 over the step.
    np.testing.assert_allclose(value(OTHER)[1], slopes, rtol=1e-4, atol=1e-5)
    assert np.abs(slopes).min() > 1e-2


def test_groups_arrive_with_the_marking_of_the_parameters():
    given = parameters(gibbs)
    own = arrival_scent(given._replace(marking=OTHER), SETTING, [1, 0])
    np.testing.assert_array_equal(own, arrival_scent(given, SETTING._replace(marking=OTHER), [1, 0]))
