"""Divergent transitions are told apart: those that met parameters without a steady state, and the others."""

import jax
import jax.numpy as jnp
import numpy as np
import pytest
from inference.conftest import whiten

from bayesrange.inference._replay import failed_solves
from bayesrange.inference._worker import _first_state, _key

WIDE = {"over_marking": jnp.array([1.0])}


@pytest.fixture(scope="module")
def data(coupled):
    """Hardly any avoidance, so that nothing but the wall itself tells the sampler that marks grow without bound."""
    return coupled.data._replace(priors={**coupled.data.priors, "avoidance": jnp.array([1e-3])} | WIDE)


@pytest.fixture(scope="module")
def sampled(coupled, data):
    """50 draws where the prior of over-marking reaches far beyond what leaves marks finite."""
    program = coupled.program
    whitening = whiten(program, data)
    state, records = _first_state(program, _key(1, 1), data, whitening), []
    for count in (50, 10, 50):
        state, record = program.advance(state, count, data, whitening)
        records.append({name: np.asarray(column)[:count] for name, column in record._asdict().items()})
    kept = {name: np.concatenate([record[name] for record in records[2:]]) for name in records[0]}
    return whitening, jax.tree.map(np.asarray, state), kept


def test_replay_finds_the_wall_in_the_transitions_that_diverged(coupled, data, sampled):
    whitening, state, record = sampled
    diverged = int(record["diverging"].sum())
    assert 5 < diverged < 45
    # All 50 are run again. The wall of infinite marks is the only thing steep enough to diverge at; and had the replay
    # gone another way than the transition did, some that missed the wall would meet it. Within a thousandth of the wall
    # (m Q > 0.999) whether the fixed point is found hangs on rounding, and the replay is a program of its own.
    again = {**record, "diverging": np.ones(50, bool)}
    assert 0.9 * diverged <= failed_solves(coupled.program, data, whitening, state, again) <= diverged


def test_without_divergences_nothing_is_replayed(coupled, data, sampled):
    whitening, state, _ = sampled
    assert failed_solves(coupled.program, data, whitening, state, {"diverging": np.zeros(4, bool)}) == 0
