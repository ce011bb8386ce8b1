"""Tracks drawn from the memory model: scipy's laws, the model written out in NumPy, and what memory does to a track."""

from functools import partial

import jax
import jax.numpy as jnp
import numpy as np
import pytest
from memory._walking import ground, log_omega, parameters, patchy, plain
from scipy import stats

from bayesrange.memory import (
    NO_STEP_FOUND,
    WALK_SENTENCES,
    WALKED,
    Stays,
    Timeline,
    Track,
    WalkError,
    allowed,
    make_stays,
    regular_timeline,
    seen_track,
    simulate,
    timeline_of,
)

LEVEL = 1e-3  # of each test of fit; seeds are fixed
START = jnp.asarray([1.0, 1.0])
SHORT = regular_timeline(40, 1.0)
MEMORIES = {"reference_strength": 4.0, "working_strength": 2.0, "selection": [0.6, -0.4]}


def steps_of(walk):
    dx, dy = np.diff(walk.x), np.diff(walk.y)
    direction = np.arctan2(dy, dx)
    return np.hypot(dx, dy), (np.diff(direction) + np.pi) % (2 * np.pi) - np.pi


def a_past(rng, count=30, at=(1.5, 1.5), spread=0.3, before=0.0):
    time = before - 5.0 * np.arange(count, 0, -1)
    x, y = rng.normal(at, spread, (count, 2)).T
    return Stays(*map(jnp.asarray, (time, np.full(count, 4.0), x, y, np.ones(count, bool))))


@partial(jax.jit, static_argnames="remembers")
def _many(p, landscape, timeline, start, keys, heading, past, remembers):
    if not remembers:  # plain numbers: the simulator sees that there is nothing to remember
        p = p._replace(reference_strength=np.zeros(()), working_strength=np.zeros(()))
    return jax.lax.map(lambda key: simulate(p, landscape, timeline, start, key, heading, past), keys)


def many(p, landscape, timeline, start, count, seed, heading=np.nan, past=None):
    """Walks one after the other in one call, compiled once per shape."""
    remembers = bool(p.reference_strength != 0) or bool(p.working_strength != 0)
    keys = jax.random.split(jax.random.key(seed), count)
    walks = _many(p, landscape, timeline, start, keys, jnp.asarray(heading), past, remembers)
    assert (walks.result == WALKED).all()
    return walks


@pytest.mark.parametrize(("shape", "concentration"), [(0.6, 0.3), (2.5, 2.0), (8.0, -1.0)])
def test_without_attraction_steps_are_gamma_and_turns_von_mises(shape, concentration):
    p = parameters(shape=shape, concentration=concentration)
    length, turn = steps_of(simulate(p, plain(1e4), regular_timeline(4000, 1.0), jnp.zeros(2), 3))
    assert stats.kstest(length, stats.gamma(shape, scale=0.12).cdf).pvalue > LEVEL
    turn = turn if concentration > 0 else turn % (2 * np.pi) - np.pi
    assert stats.kstest(turn, stats.vonmises(abs(concentration)).cdf).pvalue > LEVEL
    for a, b in ((length[1:], length[:-1]), (turn[1:], turn[:-1]), (length[1:], turn)):  # each is drawn afresh
        assert stats.spearmanr(a, b).pvalue > LEVEL


def test_the_first_turn_starts_from_the_heading_given_and_is_uniform_without_one():
    p, timeline = parameters(concentration=5.0), regular_timeline(1, 1.0)
    for heading, law in ((2.0, stats.vonmises(5.0)), (np.nan, stats.uniform(-np.pi, 2 * np.pi))):
        walks = many(p, plain(100.0), timeline, jnp.zeros(2), 3000, 4, heading=heading)
        turn = np.arctan2(walks.y[:, 1], walks.x[:, 1]) - np.nan_to_num(heading)
        assert stats.kstest((turn + np.pi) % (2 * np.pi) - np.pi, law.cdf).pvalue > LEVEL


def test_step_length_follows_the_solar_hour():
    rhythm = np.array([0.5, -0.3, 0.2, 0.4])
    timeline = regular_timeline(6000, 1.0, solar_hour=5.0)
    length, _ = steps_of(simulate(parameters(rhythm=rhythm), plain(1e4), timeline, jnp.zeros(2), 5))
    angle = 2 * np.pi * np.asarray(timeline.solar_hour) / 24
    scale = 0.12 * np.exp(np.stack([np.cos(angle), np.sin(angle), np.cos(2 * angle), np.sin(2 * angle)], 1) @ rhythm)
    assert scale.max() > 3 * scale.min()
    assert stats.kstest(length / scale, stats.gamma(1.6).cdf).pvalue > LEVEL
    evening = np.asarray(timeline.solar_hour) == 20.0
    assert stats.kstest(length[evening] / scale[evening], stats.gamma(1.6).cdf).pvalue > LEVEL


@pytest.mark.parametrize("pull", [0.0, 1.5, -0.7])
def test_attraction_of_every_step_is_that_of_the_model_written_out(pull):
    landscape = patchy()
    p = parameters(2, **MEMORIES, home_pull=pull, home=[2.2, 1.4], home_eps=0.05)
    past = a_past(np.random.default_rng(6))
    steps = 300  # more stays than are summed at a time
    rng = np.random.default_rng(7)
    duration = rng.uniform(0.5, 2.0, steps)
    time = 3.0 + np.cumsum(np.append(0.0, duration[:-1]))
    timeline = Timeline(*map(jnp.asarray, (time, duration, time % 24, np.ones(steps + 1, bool))))
    walk = simulate(p, landscape, timeline, START, 8, past=past)
    x, y = np.asarray(walk.x), np.asarray(walk.y)
    stays = [*zip(*past[:4], strict=True), *zip(time, duration, x, y, strict=False)]
    stays = [tuple(map(float, stay)) for stay in stays]
    expected = [log_omega(p, landscape, stays, time[i], x[i + 1 : i + 2], y[i + 1 : i + 2])[0] for i in range(steps)]
    assert np.ptp(expected) > 2
    # sums of up to 330 terms, decayed step by step: 300 roundings of a trace, most of which cancel
    np.testing.assert_allclose(walk.log_attraction, expected, rtol=0, atol=1e-12)
    assert np.asarray(allowed(landscape, walk.x, walk.y)).all()


STEP_CASES = {
    "near": ({**MEMORIES}, (1.3, 1.2)),
    "far": ({"reference_strength": 9.0, "selection": [0.0, 0.0]}, (2.25, 1.0)),
    "repelled": ({"reference_strength": -2.0, "working_strength": -3.0, "selection": [1.0, 0.5]}, (1.1, 0.9)),
    "homing": ({**MEMORIES, "home_pull": 3.0, "home": [2.6, 2.6]}, (1.3, 1.2)),
    "fleeing": ({**MEMORIES, "home_pull": -1.5, "home": [0.7, 1.3]}, (1.3, 1.2)),
}


@pytest.mark.parametrize("case", STEP_CASES)
def test_a_step_falls_where_kernel_times_attraction_says(case):
    """Shares of first steps in 8 sectors × 9 rings, against k ω summed over a fine polar mesh."""
    values, past_at = STEP_CASES[case]
    landscape, count, heading = patchy(), 3_000 if case == "far" else 6_000, 0.6
    p = parameters(2, **values, concentration=1.0)
    past = a_past(np.random.default_rng(9), at=past_at, spread=0.15)
    walks = many(p, landscape, regular_timeline(1, 1.0), START, count, 10, heading=heading, past=past)
    edges, sectors = np.array([0, 0.08, 0.16, 0.3, 0.5, 0.9, 1.15, 1.3, 1.7, 6.0]), 8
    quantile = (np.arange(4000) + 0.5) / 4000
    # half of the mesh's radii at the gamma law's quantiles, half even to 5 km: a mixture, each radius with its weight
    law, even = stats.gamma(1.6, scale=0.12), stats.uniform(0, 5)
    radius = np.concatenate([law.ppf(quantile), even.ppf(quantile)])
    weight = law.pdf(radius) / (law.pdf(radius) + even.pdf(radius))
    angle = (np.arange(160) + 0.5) * 2 * np.pi / 160
    r, a = (m.ravel() for m in np.meshgrid(radius, angle))
    x, y = 1.0 + r * np.cos(a), 1.0 + r * np.sin(a)
    mass = np.tile(weight, angle.size) * stats.vonmises(1.0).pdf(a - heading)
    on = np.asarray(allowed(landscape, jnp.asarray(x), jnp.asarray(y)))
    r, a, x, y, mass = r[on], a[on], x[on], y[on], mass[on]
    mass = mass * np.exp(log_omega(p, landscape, list(zip(*map(np.asarray, past[:4]), strict=True)), 0.0, x, y))
    bins = lambda r, a: np.digitize(r, edges[1:-1]) * sectors + (a % (2 * np.pi) / (2 * np.pi) * sectors).astype(int)  # noqa: E731
    expected = np.bincount(bins(r, a), mass, (edges.size - 1) * sectors) / mass.sum() * count
    dx, dy = np.asarray(walks.x[:, 1]) - 1.0, np.asarray(walks.y[:, 1]) - 1.0
    seen = np.bincount(bins(np.hypot(dx, dy), np.arctan2(dy, dx)), minlength=expected.size)
    few = expected < 8  # taken together: counts too small for the test's law
    seen, expected = (np.append(v[~few], v[few].sum()) for v in (seen, expected))
    expected, seen = expected[expected > 0], seen[expected > 0]
    assert stats.chisquare(seen, expected).pvalue > LEVEL
    reach = 0.12 * (1.6 + 3 * np.sqrt(1.6) + 3)  # where the branch of long steps begins
    beyond = float((np.hypot(dx, dy) > reach).mean())
    assert beyond > 0.04 if case == "far" else beyond < 0.1, beyond  # both branches are put to the test


def home_range_growth(p, count=40, steps=1000, seed=11):
    """Mean net squared displacement in the last fifth of the walk over that in its fifth before the middle."""
    walks = many(p, plain(1e3), regular_timeline(steps, 1.0), jnp.zeros(2), count, seed)
    square = np.asarray(walks.x**2 + walks.y**2).mean(0)
    return square[-steps // 5 :].mean() / square[3 * steps // 10 : steps // 2].mean()


def test_reference_memory_makes_a_home_range_of_a_naive_animals_walk():
    # without memory it grows like time: 0.9 / 0.4 = 2.25 on average, with sd about 0.45 over 40 walks
    assert 1.4 < home_range_growth(parameters()) < 3.6
    assert home_range_growth(parameters(reference_strength=6.0, reference_decay=500.0)) < 1.35


def test_working_memory_alone_puts_off_the_return():
    """Share of places come back to (within 0.1 km) 3 to 12 hours later, in a square of 1.5 km."""
    here = ground(np.zeros((0, 15, 15)), np.ones((120, 120)), 0.1)
    share = {}
    for strength in (0.0, 3.0):
        p = parameters(working_strength=strength, working_decay=8.0, recall_half=1.0)
        walks = many(p, here, regular_timeline(300, 1.0), jnp.asarray([0.7, 0.7]), 30, 12)
        place = np.asarray(walks.x + 1j * walks.y)
        back = [abs(place[:, lag:][:, :285] - place[:, :285]) < 0.1 for lag in range(3, 13)]
        share[strength] = np.any(back, 0).mean(1)
    gap = share[0.0].mean() - share[3.0].mean()
    error = np.sqrt(sum(s.var(ddof=1) / s.size for s in share.values()))
    assert gap > 6 * error and gap > 0.1, (gap, error)


def test_gaps_are_walked_through_and_hidden():
    p, landscape = parameters(2, **MEMORIES), patchy()
    time = np.array([0.0, 1, 2, 3, 7, 8, 9, 12, 13])
    stays = make_stays(Track(time, np.linspace(1, 1.2, 9), np.ones(9)), 1.0)
    gappy = timeline_of(stays)
    whole = gappy._replace(observed=jnp.ones_like(gappy.observed))
    walk, seen = simulate(p, landscape, gappy, START, 13), simulate(p, landscape, whole, START, 13)
    np.testing.assert_array_equal(walk.x, seen.x)  # the same walk
    track = seen_track(walk, gappy)
    np.testing.assert_array_equal(track.time, time)
    np.testing.assert_array_equal(track.x, np.asarray(seen.x)[[0, 1, 2, 3, 7, 8, 9, 12, 13]])
    np.testing.assert_array_equal(seen_track(seen, whole).y, seen.y)


def test_a_seed_gives_one_track_and_a_different_past_another():
    p, landscape, timeline = parameters(2, **MEMORIES), patchy(), SHORT
    walk = simulate(p, landscape, timeline, START, 14)
    np.testing.assert_array_equal(walk.x, simulate(p, landscape, timeline, START, jax.random.key(14)).x)
    assert (np.asarray(walk.x[1:]) != np.asarray(simulate(p, landscape, timeline, START, 15).x[1:])).all()
    past = a_past(np.random.default_rng(16))
    assert not np.array_equal(walk.x, simulate(p, landscape, timeline, START, 14, past=past).x)
    # what is of no duration is no stay, and the first steps do not depend on how many follow
    none = past._replace(duration=jnp.zeros_like(past.duration))
    np.testing.assert_allclose(simulate(p, landscape, timeline, START, 14, past=none).x, walk.x, atol=1e-12)
    longer = simulate(p, landscape, regular_timeline(60, 1.0), START, 14)
    np.testing.assert_allclose(longer.x[:41], walk.x, atol=1e-12)


@pytest.mark.parametrize("over", [jax.vmap, lambda f: lambda *args: jax.lax.map(lambda a: f(*a), args)])
def test_mapped_over_animals_each_walks_as_it_does_alone(over):
    landscape, timeline = patchy(), SHORT
    padded = timeline._replace(duration=timeline.duration.at[20:].set(0.0))
    cases = [
        (parameters(2, **MEMORIES), timeline, jnp.asarray(1), a_past(np.random.default_rng(1))),
        (parameters(2, selection=[1.0, 0.0]), padded, jnp.asarray(2), a_past(np.random.default_rng(2))),
    ]

    def one(p, timeline, seed, past):
        return simulate(p, landscape, timeline, START, jax.random.key(seed), past=past)

    together = over(one)(*jax.tree.map(lambda *leaves: jnp.stack(leaves), *cases))
    for i, case in enumerate(cases):
        alone = one(*case)
        # the same draws; sums in another order
        np.testing.assert_allclose(together.x[i], alone.x, atol=1e-12)
        np.testing.assert_array_equal(together.tries[i], alone.tries)
    assert (together.tries[1, 20:] == 0).all() and (together.x[1, 21:] == together.x[1, 20]).all()


def test_what_cannot_be_walked_is_said():
    p, landscape, timeline = parameters(2, **MEMORIES), patchy(), SHORT
    with pytest.raises(WalkError, match="no-go ground: choose a place"):
        simulate(p, landscape, timeline, jnp.asarray([2.8, 2.4]), 1)  # in the pond
    for wrong in ({"recall_half": 0.0}, {"scale": -1.0}, {"selection": [np.nan, 0.0]}, {"home_pull": np.inf}):
        changed = p._replace(**{name: jnp.asarray(value) for name, value in wrong.items()})
        with pytest.raises(WalkError, match="not finite, or a step's shape"):
            simulate(changed, landscape, timeline, START, 1)
    with pytest.raises(WalkError, match="give only stays before it"):
        simulate(p, landscape, timeline, START, 1, past=a_past(np.random.default_rng(1), before=5.0))


def test_a_step_that_is_not_found_ends_the_track_and_is_no_silent_draw():
    lone = np.zeros((80, 80))
    lone[40, 40] = 1  # one sub-cell of 12.5 m for steps of some 40 km
    here, start = ground(np.zeros((0, 10, 10)), lone, 0.1), jnp.asarray([0.506, 0.506])
    p, timeline = parameters(shape=8.0, scale=5.0), regular_timeline(6, 1.0)
    with pytest.raises(WalkError, match="raise `most_tries`.*Places found: 1"):
        simulate(p, here, timeline, start, 1, most_tries=1000)
    walk = simulate(p, here, timeline, start, 1, most_tries=1000, throw=False)
    assert int(walk.result) == NO_STEP_FOUND and "habitable" in WALK_SENTENCES[NO_STEP_FOUND]
    assert np.isfinite(walk.x[0]) and np.isnan(walk.x[1:]).all()
    assert walk.tries[0] >= 1000 and (walk.tries[1:] == 0).all()
