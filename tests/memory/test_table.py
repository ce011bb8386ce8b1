"""The tabulated past gives the exact traces' likelihood, at any decay time and range."""

import jax.numpy as jnp
import numpy as np
import pytest
from memory._cases import SIGMA, build, parameters, walk
from memory._twin import recall

from bayesrange.memory import (
    Basis,
    decay_basis,
    fixed_range,
    make_stays,
    no_memory,
    range_basis,
    step_log_ratio,
    tabulate,
    traces,
)

TYPICAL, STRONG = (3.0, 1.2, 6.0), (6.0, 3.0, 1.0)  # κ_R, κ_W, m₀ [h]
# half an interval to 15,000 h; both ends and random between
DECAYS = np.concatenate([[0.5, 15000.0], np.exp(np.random.default_rng(8).uniform(np.log(0.5), np.log(15000), 6))])


def log_likelihood(case, reference, working, strength):
    """The part of the log-likelihood that traces change, in double precision."""
    back, off, half = strength
    log_omega = back * recall(np.maximum(reference, 0), half) - off * recall(np.maximum(working, 0), half)
    layers = np.concatenate([case.animal.layers_used[:, None], case.animal.layers_nodes], 1).astype(float)
    log_omega = log_omega + layers @ np.array([0.6, -0.4])
    p, nodes = parameters(), case.nodes
    log_quad = (p.shape[0] - case.reference.shape) * np.log(nodes.radius)
    log_quad = log_quad + (1 / case.reference.scale - 1 / p.scale[0]) * nodes.radius
    log_quad = log_quad + p.concentration[0] * np.cos(nodes.turn) * case.steps.turn_known[:, None]
    of_step = step_log_ratio(
        jnp.asarray(log_omega[:, 0]), jnp.asarray(log_omega[:, 1:]), log_quad, jnp.asarray(case.animal.allowed)
    )
    return float(of_step.sum())


def largest_error(case, table, basis, pairs, strength):
    """Largest |Δ log L| over pairs of decay times, as the sampler reads the table: all in its precision."""
    worst = 0.0
    for i, j in pairs:
        log_decay = jnp.log(jnp.array([DECAYS[i], DECAYS[j]]))
        held = np.asarray(traces(table, log_decay, jnp.log(SIGMA), basis, fixed_range(SIGMA)), float)
        exact = log_likelihood(case, case.exact[..., i], case.exact[..., j], strength)
        worst = max(worst, abs(log_likelihood(case, held[..., 0], held[..., 1], strength) - exact))
    return worst


@pytest.fixture(scope="module")
def long_case():
    """About 1,350 usable steps with 64 nodes each."""
    track = walk(1500, 11, keep_all=True)
    bases = (decay_basis(1.0, 1500.0, 0.5, 15000.0, 24), fixed_range(SIGMA))
    return build(track, nodes=64, bases=bases, exact_at=[(float(tau), SIGMA) for tau in DECAYS])


PAIRS = [(i, j) for i in range(8) for j in range(8) if DECAYS[j] < DECAYS[i]]


@pytest.mark.parametrize(("columns", "strength", "error"), [(20, TYPICAL, 1e-3), (24, STRONG, 1e-3)])
def test_the_table_is_the_exact_trace_to_a_thousandth_of_a_nat(long_case, columns, strength, error):
    """Over decay times from half an interval to 15,000 h: 20 columns for typical memory, 24 for strong."""
    assert len(long_case.steps.time) > 1300
    basis = Basis(long_case.bases[0].grid, long_case.bases[0].columns[:, :columns])
    table = jnp.asarray(long_case.animal.table[..., :columns])
    assert table.dtype == jnp.float32
    assert largest_error(long_case, table, basis, PAIRS, strength) < error


def test_too_few_columns_are_seen_to_fail(long_case):
    basis = Basis(long_case.bases[0].grid, long_case.bases[0].columns[:, :10])
    assert largest_error(long_case, jnp.asarray(long_case.animal.table[..., :10]), basis, PAIRS, STRONG) > 0.1


def test_an_estimated_range_is_held_too():
    """14 range columns for ranges a factor of six apart."""
    track = walk(260, 12)
    sigmas = [0.05, 0.11, 0.3]
    pairs = [(decay, sigma) for sigma in sigmas for decay in (400.0, 6.0)]
    bases = (decay_basis(0.9, 300.0, 0.5, 3000.0, 16), range_basis(0.05, 0.3, 14))
    case = build(track, nodes=24, bases=bases, exact_at=pairs)
    assert case.animal.table.shape[-1] == 16 * 14
    for k, sigma in enumerate(sigmas):
        log_decay = jnp.log(jnp.array([400.0, 6.0]))
        held = np.asarray(traces(jnp.asarray(case.animal.table), log_decay, jnp.log(sigma), *bases), float)
        exact = case.exact[..., 2 * k : 2 * k + 2]
        for strength in (TYPICAL, STRONG):
            difference = log_likelihood(case, held[..., 0], held[..., 1], strength) - log_likelihood(
                case, exact[..., 0], exact[..., 1], strength
            )
            assert abs(difference) < 1e-3


def test_fewer_columns_are_a_slice():
    track, wide = walk(60, 5), decay_basis(0.9, 100.0, 0.5, 900.0, 9)
    narrow, reach = Basis(wide.grid, wide.columns[:, :4]), range_basis(0.05, 0.3, 3)
    stays = make_stays(track, 1.0)
    x, y = track.x[::3, None] + np.array([[0.0, 0.1]]), track.y[::3, None] + np.array([[0.0, 0.2]])
    whole, part = (tabulate(stays, track.time[::3], x, y, basis, reach)[0] for basis in (wide, narrow))
    # single precision of sums made in another order
    assert np.allclose(whole[..., :12], part, rtol=1e-5, atol=1e-6)


def test_a_table_without_columns_is_empty():
    track = walk(30, 5)
    x, y = track.x[:, None], track.y[:, None]
    table, exact = tabulate(make_stays(track, 1.0), track.time, x, y, no_memory(), fixed_range(SIGMA))
    assert table.shape == (len(track.time), 1, 0) and exact.shape == (len(track.time), 1, 0)
