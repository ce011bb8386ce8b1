"""The likelihood of steps against its slow twin, finite differences and identities."""

import jax
import jax.numpy as jnp
import numpy as np
import pytest
from memory._cases import SHORTEST, SIGMA, blocks, build, in_double, parameters, walk
from memory._twin import recall, twin_log_likelihood

from bayesrange.memory import (
    animal_log_likelihood,
    decay_basis,
    exact_trace,
    fixed_range,
    make_stays,
    no_memory,
    range_basis,
    step_log_likelihood,
    step_log_ratio,
)

NO_WEIGHT = {
    "selection": [0.0, 0.0], "reference_strength": 0.0, "working_strength": 0.0, "home_pull": 0.0,
}  # fmt: skip


@pytest.fixture(scope="module")
def track():
    return walk(160, 21)


@pytest.fixture(scope="module")
def case(track):
    return build(track, columns=26)


def twin(case, track, home, **values):
    p = parameters(**values)
    stays = make_stays(track, 1.0)
    reference, working = (
        exact_trace(stays, case.steps.time, case.x, case.y, float(tau[0]), SIGMA)
        for tau in (p.reference_decay, p.working_decay)
    )
    half = float(p.recall_half[0])
    log_omega = float(p.reference_strength[0]) * recall(reference, half)
    log_omega -= float(p.working_strength[0]) * recall(working, half)
    layers = np.concatenate([case.animal.layers_used[:, None], case.animal.layers_nodes], 1).astype(float)
    log_omega += layers @ np.asarray(p.selection[0])
    if home:
        offset = (case.x - float(p.home[0, 0])) ** 2 + (case.y - float(p.home[0, 1])) ** 2
        log_omega -= float(p.home_pull[0]) * np.sqrt(offset + float(p.home_eps) ** 2)
    return twin_log_likelihood(
        case.steps, case.nodes, case.reference, SHORTEST,
        shape=float(p.shape[0]), scale=float(p.scale[0]), concentration=float(p.concentration[0]),
        rhythm=np.asarray(p.rhythm[0]), hour=case.animal.hour, allowed=case.animal.allowed,
        log_omega_used=log_omega[:, 0], log_omega_nodes=log_omega[:, 1:],
    )  # fmt: skip


def by_step(data, p):
    return np.asarray(jax.jit(step_log_likelihood)(p, data))[np.asarray(data.counted)]


def test_the_case_holds_what_can_go_wrong(case):
    steps, ground = case.steps, case.animal.allowed
    assert steps.short.any() and (~steps.turn_known).any() and (~ground).any() and ground.any(1).all()
    assert (steps.short & steps.turn_known).any()


@pytest.mark.parametrize(
    "values", [{}, {"concentration": -0.8, "shape": 0.7}, {"reference_strength": 6.0, "recall_half": 1.0}]
)
@pytest.mark.parametrize("home", [False, True])
def test_each_step_is_its_slow_twin(case, track, home, values):
    found = by_step(case.blocks(home=home), parameters(**values))
    # single precision at the nodes (16 of them, log weights up to about 20) and 26 columns
    assert np.abs(found - twin(case, track, home, **values)).max() < 3e-5


def test_a_home_far_from_the_origin_is_as_good(track):
    """Northings of 6,000 km: the pull is the same as about the origin."""
    near = build(track, layers=0, bases=(no_memory(), fixed_range(SIGMA)))
    shift = np.array([640.0, 6000.0])
    steps = near.steps._replace(**{k: getattr(near.steps, k) + shift[i] for k, i in FAR.items()})
    nodes = near.nodes._replace(x=near.nodes.x + shift[0], y=near.nodes.y + shift[1])
    far = type(near)(near.animal._replace(steps=steps, nodes=nodes), *list(vars(near).values())[1:])
    here, there = parameters(layers=0), parameters(layers=0, home=np.array([0.3, -0.2]) + shift)
    difference = by_step(far.blocks(home=True), there) - by_step(near.blocks(home=True), here)
    assert np.abs(difference).max() < 1e-6  # single-precision coordinates would miss by 1e-4


FAR = {"x": 0, "y": 1, "end_x": 0, "end_y": 1}


def test_weighted_sums_of_steps(case):
    data, p = case.blocks(weight=np.array([0.3])), parameters()
    assert np.isclose(jax.jit(animal_log_likelihood)(p, data)[0], 0.3 * by_step(data, p).sum(), rtol=1e-12)


NAMES = [
    "shape", "scale", "concentration", "rhythm", "selection", "reference_strength", "reference_decay",
    "working_strength", "working_decay", "recall_half", "home_pull", "home", "home_eps", "encoding_range",
]  # fmt: skip


@pytest.fixture(scope="module")
def estimated(track):
    """With an estimated encoding range, a home, and everything in double precision."""
    bases = (decay_basis(0.9, 200.0, 0.5, 2000.0, 6), range_basis(0.05, 0.4, 4))
    return in_double(build(track, nodes=12, bases=bases).blocks(home=True))


@pytest.mark.parametrize("at", [{}, {"concentration": 0.0, "reference_strength": 0.0, "working_strength": 0.0}])
def test_gradients_are_finite_differences(estimated, at):
    p = parameters(**at)
    total = jax.jit(lambda p: animal_log_likelihood(p, estimated).sum())
    slope = jax.jit(jax.grad(total))(p)
    other = jax.jit(jax.grad(lambda p: step_log_likelihood(p, estimated).sum()))(p)
    for name in NAMES:
        value, found = getattr(p, name), np.asarray(getattr(slope, name))
        # Two ways back to the same gradient
        assert np.allclose(found, getattr(other, name), rtol=1e-9, atol=1e-9), name
        for index in np.ndindex(value.shape):
            h = 1e-5 * max(1.0, abs(float(value[index])))
            up, down = (float(total(p._replace(**{name: value.at[index].add(s * h)}))) for s in (1, -1))
            # log L is about 300: rounding 300 × 1e-15 / 1e-5 = 3e-8; truncation h² × third derivative
            assert np.isclose(found[index], (up - down) / (2 * h), rtol=1e-6, atol=2e-6), (name, index)


def test_single_precision_keeps_the_gradient(case):
    p, data = parameters(), case.blocks(home=True)
    of = jax.jit(jax.grad(lambda p, data: animal_log_likelihood(p, data).sum()))
    single, double = of(p, data), of(p, in_double(data))
    for name in NAMES:
        value, found, exact = (np.asarray(getattr(q, name)) for q in (p, single, double))
        # per unit of the parameter's own size: what moves a sampler
        assert np.abs((found - exact) * np.maximum(np.abs(value), 1e-3)).max() < 1e-3, name


EXTREMES = [
    {"shape": 1e-2}, {"shape": 300.0}, {"scale": 1e-5}, {"scale": 1e4}, {"concentration": 0.0},
    {"concentration": 500.0}, {"concentration": -500.0}, {"recall_half": 1e-8}, {"recall_half": 1e8},
    {"reference_decay": 1e-3, "working_decay": 1e-4}, {"reference_decay": 1e9}, {"reference_strength": 300.0},
    {"working_strength": -300.0}, {"selection": [80.0, -80.0]}, {"rhythm": [5.0, -5.0, 5.0, 5.0]},
    {"home_pull": 500.0}, {"home": [1e4, 1e4]}, {"home_eps": 1e-6},
]  # fmt: skip


@pytest.fixture(scope="module")
def value_and_grad(case):
    data = case.blocks(home=True)
    return jax.jit(jax.value_and_grad(lambda p: animal_log_likelihood(p, data).sum()))


@pytest.mark.parametrize("values", EXTREMES, ids=str)
def test_nothing_is_nan_at_extremes(value_and_grad, values):
    value, slope = value_and_grad(parameters(**values))
    assert np.isfinite(value)
    assert all(np.isfinite(part).all() for part in slope)


def test_second_derivatives_exist(estimated):
    p = parameters()

    def along(t):
        moved = p._replace(reference_decay=p.reference_decay * jnp.exp(t[0]), scale=p.scale * jnp.exp(t[1]))
        return animal_log_likelihood(moved, estimated).sum()

    found, h = jax.jit(jax.hessian(along))(jnp.zeros(2)), 1e-5
    unit = jnp.eye(2) * h
    slope = jax.jit(jax.grad(along))
    difference = jnp.stack([(slope(row) - slope(-row)) / (2 * h) for row in unit])
    # differences of gradients good to 1e-12 of about 100
    assert np.allclose(found, difference, rtol=1e-6, atol=1e-5)


def test_without_weights_any_nodes_give_the_plain_kernel(track):
    """ω = 1 on open ground: nodes cancel, whatever their number."""
    few, many = (build(track, nodes=k, seed=k) for k in (3, 40))
    p = parameters(**NO_WEIGHT)
    for one in (few, many):
        open_ground = one.animal._replace(allowed=np.ones_like(one.animal.allowed))
        data = type(one)(open_ground, one.reference, one.exact, one.x, one.y, one.bases, 0).blocks()
        weight = np.zeros_like(one.x)
        expected = twin_log_likelihood(
            one.steps, one.nodes, one.reference, SHORTEST, shape=1.6, scale=0.12, concentration=0.5,
            rhythm=np.asarray(p.rhythm[0]), hour=one.animal.hour, log_omega_used=weight[:, 0],
            log_omega_nodes=weight[:, 1:], allowed=np.ones_like(one.animal.allowed),
        )  # fmt: skip
        # both sums over nodes are the same single-precision numbers: only doubles' rounding is left
        assert np.abs(by_step(data, p) - expected).max() < 1e-11


def test_nodes_off_the_ground_stay_in_the_lower_sum():
    """Half of the weight off the ground doubles the density on it."""
    zero = jnp.zeros((1, 4))
    allowed = jnp.array([[True, True, False, False]])
    assert np.isclose(step_log_ratio(jnp.zeros(1), zero, zero, allowed)[0], np.log(2.0), rtol=1e-15)


def test_padding_and_company_change_nothing(track, case):
    others = [build(walk(n, seed), columns=26, seed=seed) for n, seed in ((30, 5), (290, 6))]
    others = [type(case)(o.animal, case.reference, o.exact, o.x, o.y, case.bases, 0) for o in others]
    alone, p = case.blocks(), parameters(3)
    p = p._replace(shape=jnp.array([2.0, 1.6, 1.1]), reference_decay=jnp.array([50.0, 300.0, 900.0]))
    together = blocks([others[0], case, others[1]])
    one = jax.tree.map(lambda a: a[1:2] if a.ndim else a, p)
    assert np.asarray(together.animal).tolist() == [0, 1, 1, 2, 2]
    kept = np.asarray(together.counted)[1:3]
    # the batched product sums 26 columns in single precision in an order of its own
    of_all = np.asarray(jax.jit(step_log_likelihood)(p, together))
    assert np.allclose(of_all[1:3][kept], by_step(alone, one), rtol=0, atol=2e-6)
    totals = jax.jit(animal_log_likelihood)
    assert np.isclose(totals(p, together)[1], totals(one, alone)[0], atol=1e-5, rtol=0)
    slope = jax.jit(jax.grad(lambda p: animal_log_likelihood(p, together)[1]))(p)
    assert not np.asarray(slope.shape)[[0, 2]].any() and slope.shape[1] != 0
    assert not of_all[~np.asarray(together.counted)].any()


def test_no_layers_and_no_memory_is_the_kernel_alone(track):
    bare = build(track, layers=0, bases=(no_memory(), fixed_range(SIGMA)))
    data = bare.blocks()
    assert data.table_nodes.shape[1] == 0 and data.layers_nodes.shape[-1] == 0 and data.xy_nodes.shape[1] == 0
    p = parameters(layers=0)
    full = build(track, layers=2)
    same = by_step(full.blocks(), parameters(**NO_WEIGHT))
    assert np.allclose(by_step(data, p), same, rtol=0, atol=1e-12)
    assert all(np.isfinite(part).all() for part in jax.jit(jax.grad(lambda p: animal_log_likelihood(p, data).sum()))(p))


def test_steps_without_a_node_on_the_ground_are_set_aside(track):
    from memory._cases import ground

    from bayesrange.memory import allowed, make_nodes, make_steps, read_places, wide_reference

    land = ground()
    nowhere = land._replace(sub_cells=land.sub_cells & (jnp.arange(240) % 4 == 0)[None])  # strips of 25 m
    on = np.asarray(allowed(nowhere, jnp.asarray(track.x), jnp.asarray(track.y)))
    steps, _ = make_steps(track, 1.0, 0.1, SHORTEST, on)
    nodes = make_nodes(steps, wide_reference(steps.length), 2, 0)
    table = np.zeros((len(steps.time), 3, 0), np.float32)
    animal, set_aside = read_places(steps, nodes, nowhere, steps.time % 24, table)
    assert set_aside > 0 and len(animal.steps.time) == len(steps.time) - set_aside
    assert animal.allowed.any(1).all()
