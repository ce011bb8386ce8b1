"""Tries of a step: the valid ones follow the gamma and von Mises laws (scipy), whichever branch they come from."""

import jax
import jax.numpy as jnp
import numpy as np
import pytest
from scipy import stats

from bayesrange.memory._proposals import make_kernel, propose

LEVEL = 1e-3  # of each test of fit; seeds are fixed


def drawn(shape, concentration, reach, log_ceilings=0.0, known=True, tries=40_000, seed=1):
    reach = None if reach is None else jnp.asarray(reach)
    kernel = make_kernel(jnp.asarray(shape), jnp.asarray(concentration), reach)
    return jax.jit(propose, static_argnums=1)(
        jax.random.key(seed), tries, kernel, jnp.asarray(log_ceilings), jnp.asarray(known)
    )


@pytest.mark.parametrize("shape", [0.3, 0.9, 1.0, 2.5, 30.0])
@pytest.mark.parametrize("share_beyond", [0.5, 0.05])
def test_lengths_of_both_branches_together_are_gamma(shape, share_beyond):
    tries = drawn(shape, 0.0, stats.gamma(shape).isf(share_beyond))
    valid = np.asarray(tries.valid)
    length, long = np.asarray(tries.length)[valid], np.asarray(tries.long)[valid]
    assert long.sum() > 200 and (~long).sum() > 200
    assert stats.kstest(length, stats.gamma(shape).cdf).pvalue > LEVEL
    # the branches share the lengths between them as the law does: two-sided binomial test
    assert stats.binomtest(int(long.sum()), long.size, share_beyond).pvalue > LEVEL


@pytest.mark.parametrize("shape", [0.3, 1.6, 30.0])
def test_a_higher_ceiling_beyond_the_reach_asks_for_as_many_more_long_tries(shape):
    share, log_ceilings = 0.01, 3.0
    tries = drawn(shape, 0.0, stats.gamma(shape).isf(share), log_ceilings)
    long = np.asarray(tries.long)[np.asarray(tries.valid)]
    odds = share / (1 - share) * np.exp(log_ceilings)
    assert stats.binomtest(int(long.sum()), long.size, odds / (1 + odds)).pvalue > LEVEL


def test_the_branch_of_long_steps_begins_where_about_one_in_a_thousand_lies():
    for shape in (0.3, 1.0, 5.0, 50.0):
        beyond = stats.gamma(shape).sf(float(make_kernel(jnp.asarray(shape), jnp.asarray(0.0)).reach))
        assert 1e-4 < beyond < 5e-3, (shape, beyond)


@pytest.mark.parametrize("concentration", [1e-5, 0.01, 0.35, 2.0, 50.0, 1e4])
@pytest.mark.parametrize("sign", [1, -1])
def test_turns_are_von_mises_about_straight_on_or_straight_back(concentration, sign):
    tries = drawn(1.6, sign * concentration, None, tries=20_000)
    valid = np.asarray(tries.valid)
    assert valid.mean() > 0.6  # Best & Fisher 1979: at least 0.66 of the turns, and nearly all lengths
    turn = np.arctan2(np.asarray(tries.sin_turn)[valid], np.asarray(tries.cos_turn)[valid])
    turn = turn if sign > 0 else (turn % (2 * np.pi)) - np.pi
    assert stats.kstest(turn, stats.vonmises(concentration).cdf).pvalue > LEVEL
    length = np.asarray(tries.length)[valid]
    assert stats.spearmanr(length, abs(turn)).pvalue > LEVEL


@pytest.mark.parametrize(("concentration", "known"), [(0.0, True), (5.0, False)])
def test_turns_are_uniform_without_concentration_or_heading(concentration, known):
    tries = drawn(1.6, concentration, None, known=known)
    valid = np.asarray(tries.valid)
    turn = np.arctan2(np.asarray(tries.sin_turn)[valid], np.asarray(tries.cos_turn)[valid])
    assert stats.kstest(turn, stats.uniform(-np.pi, 2 * np.pi).cdf).pvalue > LEVEL
