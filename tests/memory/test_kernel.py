"""Gamma and von Mises densities and the chance of a short step, against scipy."""

import jax
import jax.numpy as jnp
import numpy as np
import pytest
from scipy import special, stats

from bayesrange.memory import log_bessel, log_short_chance, log_step_density


def kernel(length, turn, shape, scale, concentration, known=True):
    rows = (jnp.atleast_1d(jnp.asarray(length)), jnp.atleast_1d(jnp.cos(turn)), jnp.full(np.size(length), known))
    log_scale = jnp.full(np.size(length), np.log(scale))
    return np.asarray(log_step_density(*rows, jnp.asarray(shape), log_scale, jnp.asarray(concentration)))


def test_the_kernel_is_scipys_gamma_and_von_mises():
    length, turn = np.array([0.01, 0.3, 2.0]), np.array([3.0, -0.4, 1.1])
    expected = stats.gamma(1.7, scale=0.2).logpdf(length) + stats.vonmises(0.8).logpdf(turn) - np.log(length)
    assert np.allclose(kernel(length, turn, 1.7, 0.2, 0.8), expected, rtol=1e-13)


def test_an_unknown_turn_is_uniform():
    length = np.array([0.01, 0.3, 2.0])
    expected = stats.gamma(1.7, scale=0.2).logpdf(length) - np.log(2 * np.pi * length)
    assert np.allclose(kernel(length, np.array([3.0, 0, 1.0]), 1.7, 0.2, 0.8, known=False), expected, rtol=1e-13)


def test_the_kernel_is_a_density_on_the_plane():
    """∫ k r dr dturn = 1, by Gauss–Legendre in r and the trapezoid in the turn (both exact to rounding here)."""
    point, weight = np.polynomial.legendre.leggauss(80)
    r, dr = 2.0 * (point + 1), 2.0 * weight
    angle = np.linspace(-np.pi, np.pi, 64, endpoint=False)
    rr, tt = np.meshgrid(r, angle)
    k = np.exp(kernel(rr.ravel(), tt.ravel(), 3.0, 0.1, 1.5)).reshape(rr.shape)
    assert np.isclose((k * rr * dr[None]).sum() * 2 * np.pi / 64, 1.0, rtol=1e-12)


def test_log_bessel_is_even_finite_and_scipys():
    kappa = np.array([0.0, 1e-9, 0.5, 2.0, -2.0, 50.0, 5000.0])
    expected = np.log(special.ive(0, np.abs(kappa))) + np.abs(kappa)
    assert np.allclose(log_bessel(jnp.asarray(kappa)), expected, rtol=1e-13, atol=1e-15)
    slope = jax.vmap(jax.grad(log_bessel))(jnp.asarray(kappa))
    ratio = np.sign(kappa) * special.ive(1, np.abs(kappa)) / special.ive(0, np.abs(kappa))
    assert np.allclose(slope, ratio, rtol=1e-12, atol=1e-15)


SHAPES = [0.2, 0.5, 1.0, 1.7, 5.0, 20.0]
RATIOS = np.geomspace(1e-6, 30, 40)


@pytest.mark.parametrize("shape", SHAPES)
def test_the_chance_of_a_short_step_is_scipys_incomplete_gamma(shape):
    found = np.asarray(log_short_chance(jnp.asarray(shape), jnp.log(RATIOS)))
    expected = special.gammainc(shape, RATIOS)
    # The log is the sum of terms up to 280 large (20 log 1e−6): a few ulps of that
    assert np.allclose(np.exp(found), expected, rtol=2e-13)


@pytest.mark.parametrize("shape", SHAPES)
def test_its_slopes_are_the_density_and_finite_differences(shape):
    def chance(a, log_x):
        return log_short_chance(a, log_x[None])[0]

    by_shape, by_log_x = jax.vmap(jax.grad(chance, (0, 1)), (None, 0))(jnp.asarray(shape), jnp.log(RATIOS))
    expected = RATIOS * stats.gamma(shape).pdf(RATIOS) / special.gammainc(shape, RATIOS)
    # where P is nearly 1 its slope is a difference of terms as large as x
    assert np.allclose(by_log_x, expected, rtol=1e-11, atol=1e-12)
    h = 1e-5
    difference = (np.log(special.gammainc(shape + h, RATIOS)) - np.log(special.gammainc(shape - h, RATIOS))) / (2 * h)
    # central differences: h²/6 × third derivative (up to 2/shape³ = 250) and rounding 1e-15/h on logs up to 280
    assert np.allclose(by_shape, difference, rtol=1e-6, atol=1e-7)


@pytest.mark.parametrize("shape", [1e-3, 0.2, 20.0, 400.0])
@pytest.mark.parametrize("log_ratio", [-200.0, -10.0, 0.0, 5.0, 20.0, 300.0])
def test_nothing_overflows_at_extremes(shape, log_ratio):
    value, slope = jax.value_and_grad(lambda a: log_short_chance(a, jnp.array([log_ratio]))[0])(jnp.asarray(shape))
    assert np.isfinite(value) and np.isfinite(slope) and value <= 0
    expected = special.gammainc(shape, np.exp(min(log_ratio, 20.0)))
    if expected > 1e-300:
        assert np.isclose(np.exp(value), special.gammainc(shape, np.exp(log_ratio)), rtol=1e-10)
