"""Nodes fill the reference law evenly; the gamma law is that of greatest likelihood."""

import numpy as np
import pytest
from memory._cases import SHORTEST, walk
from scipy import special, stats

from bayesrange.memory import Reference, fit_gamma, make_nodes, make_steps, places, wide_reference


def some_steps():
    track = walk(120, 1)
    return make_steps(track, 1.0, 0.1, SHORTEST, np.ones(len(track.time), bool))[0]


def test_the_gamma_law_is_scipys():
    length = np.random.default_rng(2).gamma(0.7, 0.3, 400)
    shape, _, scale = stats.gamma.fit(length, floc=0)
    fitted = fit_gamma(np.concatenate([length, np.zeros(9)]))
    # scipy minimises numerically to about 1e-6 in the parameters
    assert np.allclose(fitted, (shape, scale), rtol=1e-5)
    assert np.allclose(wide_reference(length), (0.6 * fitted.shape, 3 * fitted.scale), rtol=1e-5)


def test_lengths_all_alike_do_not_break_the_fit():
    fitted = fit_gamma(np.full(50, 0.2))
    assert np.isfinite(fitted).all() and np.isclose(fitted.shape * fitted.scale, 0.2, rtol=1e-12)


def test_no_positive_length_is_an_error():
    with pytest.raises(ValueError, match="at least one positive"):
        fit_gamma(np.zeros(3))


def test_each_stratum_of_the_reference_holds_one_node():
    reference = Reference(0.96, 0.4)
    nodes = make_nodes(some_steps(), reference, 32, seed=5)
    share = special.gammainc(reference.shape, nodes.radius / reference.scale)
    assert (np.floor(share * 32) == np.arange(32)[None]).all()


def test_nodes_stand_where_radius_and_turn_say():
    steps = some_steps()
    nodes = make_nodes(steps, Reference(0.96, 0.4), 32, seed=5)
    dx, dy = nodes.x - steps.x[:, None], nodes.y - steps.y[:, None]
    assert np.allclose(np.hypot(dx, dy), nodes.radius, rtol=1e-9)
    direction = np.angle((dx + 1j * dy) * np.exp(-1j * (steps.heading[:, None] + nodes.turn)))
    # of the position itself: 1e-16 km on radii down to 1e-4
    assert np.abs(direction[nodes.radius > 1e-4]).max() < 1e-10
    assert (np.abs(nodes.turn) <= np.pi).all()


def test_rotations_sides_and_offsets_differ_between_steps_and_follow_the_seed():
    steps, reference = some_steps(), Reference(0.96, 0.4)
    nodes, again, other = (make_nodes(steps, reference, 8, seed) for seed in (1, 1, 2))
    assert np.array_equal(nodes.turn, again.turn) and not np.array_equal(nodes.turn, other.turn)
    assert len(np.unique(nodes.turn[:, 0])) == len(np.unique(nodes.radius[:, 3])) == len(steps.time)
    turning = np.sign(np.sin(nodes.turn[:, 1] - nodes.turn[:, 0]))
    assert {-1.0, 1.0} == set(turning)


def test_a_tiny_shape_leaves_finite_logs():
    nodes = make_nodes(some_steps(), Reference(0.02, 1.0), 64, seed=1)
    assert np.isfinite(np.log(nodes.radius.astype(np.float32))).all()


def test_a_short_step_is_read_at_its_start_and_any_other_at_its_end():
    steps = some_steps()
    nodes = make_nodes(steps, Reference(0.9, 0.4), 5, 1)
    x, y = places(steps, nodes)
    assert steps.short.any() and not steps.short.all()
    start, end = (steps.x, steps.y), (steps.end_x, steps.end_y)
    for read, here, there in zip((x, y), start, end, strict=True):
        assert np.array_equal(read[steps.short, 0], here[steps.short])
        assert np.array_equal(read[~steps.short, 0], there[~steps.short])
    assert np.array_equal(x[:, 1:], nodes.x) and np.array_equal(y[:, 1:], nodes.y)
