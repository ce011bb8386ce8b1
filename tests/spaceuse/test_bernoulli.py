"""Bernoulli's function against 60-digit arithmetic of the standard library."""

from decimal import Decimal, localcontext

import jax
import jax.numpy as jnp
import numpy as np
import pytest

from bayesrange.spaceuse._special import SMALL, STEEPEST, bernoulli

EPS = np.finfo(float).eps

# both signs from 1e-9 to the steepest, 0, and close to where the series ends
SIZES = np.concatenate([np.geomspace(1e-9, STEEPEST, 300), SMALL * (1 + np.array([-1e-12, 0.0, 1e-12]))])
POINTS = np.concatenate([-SIZES, [0.0], SIZES])


def exact(z: float) -> tuple[float, float]:
    """B(z) = z/(eᶻ − 1) and B'(z) = (eᶻ − 1 − z eᶻ)/(eᶻ − 1)², in 60 digits."""
    if z == 0:
        return 1.0, -0.5
    with localcontext() as context:
        context.prec = 60
        power = Decimal(z).exp()
        less = power - 1
        return float(Decimal(z) / less), float((less - Decimal(z) * power) / less**2)


def test_value_is_good_to_a_few_ulps():
    expected = np.array([exact(z)[0] for z in POINTS])
    # exp, a quotient and a difference that loses 3 bits: 2.6 ulps seen
    np.testing.assert_allclose(bernoulli(jnp.asarray(POINTS)), expected, rtol=6 * EPS)


def test_derivative_is_good_to_some_ulps_on_both_sides_and_at_0():
    expected = np.array([exact(z)[1] for z in POINTS])
    derivative = jax.vmap(jax.grad(bernoulli))(jnp.asarray(POINTS))
    # (1 − z − B) cancels to about z/2 where the series ends: 16 ulps seen
    np.testing.assert_allclose(derivative, expected, rtol=40 * EPS)


def test_values_of_opposite_arguments_differ_by_the_argument():
    z = jnp.asarray(SIZES)
    # B(−a) = a + B(a), one rounding
    np.testing.assert_allclose(bernoulli(-z), z + bernoulli(z), rtol=2 * EPS)
    # and their quotient is eᵃ: what makes the Gibbs law a state without flux; the exponent is rounded to 600 ulps
    small = z[z < 300]
    np.testing.assert_allclose(jnp.log(bernoulli(-small) / bernoulli(small)), small, rtol=8 * EPS, atol=16 * EPS)


@pytest.mark.parametrize("z", [1e4, 1e300, -1e4])
def test_beyond_the_steepest_value_and_derivative_stay_finite(z):
    value, derivative = jax.value_and_grad(bernoulli)(z)
    assert np.isfinite(value) and np.isfinite(derivative)
    assert float(value) == pytest.approx(max(-z, 0.0) + exact(STEEPEST)[0], rel=1e-12)


def test_a_number_that_is_none_stays_one():
    assert np.isnan(bernoulli(jnp.asarray(np.nan)))
