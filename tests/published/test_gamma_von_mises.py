"""Facts of the gamma and von Mises laws, and that steps without selection have exactly their likelihood.

Mardia & Jupp (2000), *Directional Statistics*, for A₁ = I₁/I₀ and the von Mises entropy (from memory; recomputed with
scipy); gamma moments by hand; tilting of both laws by selection for length and turn: Methods Ecol. Evol. 7:619 (2016),
gamma and von Mises lines from memory, derived in the test.
"""

import jax
import jax.numpy as jnp
import numpy as np
import pytest
from scipy import integrate, stats

from bayesrange.memory import (
    Landscape,
    StepParameters,
    Track,
    fit_gamma,
    fixed_range,
    log_bessel,
    log_step_density,
    make_blocks,
    make_nodes,
    make_steps,
    no_memory,
    places,
    read_places,
    step_log_likelihood,
    wide_reference,
)


@pytest.mark.parametrize(
    ("concentration", "resultant"), [(0.5, 0.2424996), (1.0, 0.4463900), (2.0, 0.6977747), (5.0, 0.8933831)]
)
def test_the_mean_resultant_is_the_slope_of_log_bessel(concentration, resultant):
    assert np.isclose(jax.grad(log_bessel)(jnp.asarray(concentration)), resultant, atol=5e-8)


def density(length, turn, shape=2.5, scale=40.0, concentration=2.0):
    log_scale = jnp.full(1, np.log(scale))
    args = (jnp.array([length]), jnp.cos(jnp.array([turn])), jnp.array([True]), jnp.asarray(shape), log_scale)
    return float(log_step_density(*args, jnp.asarray(concentration))[0])


def test_von_mises_at_concentration_two():
    at_100 = density(100.0, 0.0) + np.log(100.0) + 5.0991262  # the gamma law's log density at 100
    assert np.isclose(np.exp(at_100), 0.5158854, atol=2e-7)

    def of(turn):
        return np.exp(2 * np.cos(turn) - float(log_bessel(jnp.asarray(2.0)))) / (2 * np.pi)

    assert np.isclose(integrate.quad(of, -np.pi, 1.0)[0], 0.8895777, atol=5e-8)
    entropy = integrate.quad(lambda turn: -of(turn) * np.log(of(turn)), -np.pi, np.pi)[0]
    assert np.isclose(entropy, 1.2663213, atol=5e-8)


def test_the_gamma_law_is_fitted_by_its_mean_and_mean_log():
    """Shape 2.5, scale 40: mean 100, E log r = 4.3920360; both are what the fit reads."""
    quantiles = stats.gamma(2.5, scale=40.0).ppf((np.arange(20000) + 0.5) / 20000)
    fitted = fit_gamma(quantiles)
    assert np.isclose(quantiles.mean(), 100.0, rtol=1e-4) and np.isclose(np.log(quantiles).mean(), 4.392036, rtol=1e-4)
    assert np.allclose(fitted, (2.5, 40.0), rtol=2e-3)  # midpoint quantiles cut both tails


def test_selection_for_length_tilts_the_gamma_law():
    """Gamma(2, 50) × exp(−0.005 r + 0.3 log r) = 2.2581958 × Gamma(2.3, 40), at any length and turn."""
    for r in (3.0, 80.0, 400.0):
        tilted = density(r, 0.7, 2.0, 50.0) - 0.005 * r + 0.3 * np.log(r) - np.log(2.2581958)
        assert np.isclose(tilted, density(r, 0.7, 2.3, 40.0), atol=5e-8)


def test_selection_for_straightness_adds_to_the_concentration():
    change = density(10.0, 1.1, concentration=2.5) - density(10.0, 1.1, concentration=2.0) - 0.5 * np.cos(1.1)
    same = density(10.0, -2.0, concentration=2.5) - density(10.0, -2.0, concentration=2.0) - 0.5 * np.cos(-2.0)
    assert np.isclose(change, same, atol=1e-13)


@pytest.mark.parametrize("nodes", [1, 7, 64])
def test_without_selection_a_track_has_the_exact_likelihood(nodes):
    """ω = 1 on open ground: gamma and von Mises likelihood by scipy, whatever the nodes."""
    random = np.random.default_rng(3)
    place = np.cumsum(random.normal(size=(80, 2)) * 0.2, axis=0)
    track = Track(np.arange(80.0), *place.T)
    steps, _ = make_steps(track, 1.0, 0.1, 0.001, np.ones(80, bool))
    cells = (40, 40)
    ground = Landscape(
        jnp.asarray(-40.0), jnp.asarray(-40.0), jnp.asarray(2.0), jnp.zeros((0, *cells)), jnp.ones(cells, bool),
        jnp.ones((320, 320), bool),
    )  # fmt: skip
    reference = wide_reference(steps.length)
    points = make_nodes(steps, reference, nodes, 1)
    table = np.zeros((*places(steps, points)[0].shape, 0), np.float32)
    animal, _ = read_places(steps, points, ground, steps.time % 24, table)
    data = make_blocks(
        [animal], shortest=0.001, reference=reference, decay_basis=no_memory(), range_basis=fixed_range(0.1)
    )
    one = jnp.ones(1)
    parameters = StepParameters(
        2.1 * one, 0.11 * one, 0.6 * one, jnp.zeros((1, 4)), jnp.zeros((1, 0)), one, one, one, one, one,
        jnp.asarray(0.1), one, jnp.zeros((1, 2)), jnp.asarray(0.1),
    )  # fmt: skip
    found = np.asarray(step_log_likelihood(parameters, data))[np.asarray(data.counted)]
    turning = np.where(steps.turn_known, stats.vonmises(0.6).logpdf(steps.turn), -np.log(2 * np.pi))
    expected = stats.gamma(2.1, scale=0.11).logpdf(steps.length) - np.log(steps.length) + turning
    # both sums over nodes are the same single-precision numbers: only doubles' rounding is left
    assert np.abs(found - expected).max() < 1e-12
