"""The walk itself: one scan over the steps, each proposed from the kernel until one is accepted.

A try is accepted with the chance ω / ceiling. Most tries end at a bound of ω where they fall (`_ceiling`); for the
others the traces are summed over all the animal's own stays before. Units: km, h.
"""

from functools import partial
from typing import NamedTuple

import jax
import jax.numpy as jnp
from jaxtyping import Array, Bool, Float, Int

from bayesrange.memory._ceiling import SLACK, Tiles, make_tiles, presence_bound, tile_of, within_reach
from bayesrange.memory._landscape import Landscape, allowed, read_layers
from bayesrange.memory._likelihood import StepParameters
from bayesrange.memory._proposals import Kernel, make_kernel, propose

TRIES = 16
"""Proposals drawn at a time."""
CANDIDATES = 4
"""Proposals of a batch whose traces are summed; those behind them are dropped unseen."""
CHUNK = 256
"""Stays summed at a time."""

WALKED = 0
NO_STEP_FOUND = 1
CEILING_BROKEN = 2
NOT_A_MODEL = 3
START_OFF_GROUND = 4
PAST_TOO_LATE = 5


class Timeline(NamedTuple):
    """When an animal stays and which of its places are seen (a pytree of arrays).

    A row is one stay: the animal is at a place for `duration` and then steps to the next. Gaps are rows like others,
    one nominal interval each, whose places are walked through and not observed. Rows of duration 0 at the end are
    padding: the animal stays where it is.

    Attributes:
        time: start of each stay [h], ascending.
        duration: time until the step [h].
        solar_hour: hour of the solar day at the start [h]; only `rhythm` reads it.
        observed: whether each place is seen; one more than stays, for the place after the last step.
    """

    time: Float[Array, " stays"]
    duration: Float[Array, " stays"]
    solar_hour: Float[Array, " stays"]
    observed: Bool[Array, " stays+1"]


class Walk(NamedTuple):
    """A simulated track (a pytree of arrays).

    Attributes:
        x: eastings of all places, seen or not [km]; NaN from the step on that was not found.
        y: northings [km].
        observed: as in the timeline.
        log_attraction: log ω of the place that each step led to, at the time of the step.
        tries: proposals drawn for each step.
        result: a key of `WALK_SENTENCES`.
    """

    x: Float[Array, " places"]
    y: Float[Array, " places"]
    observed: Bool[Array, " places"]
    log_attraction: Float[Array, " steps"]
    tries: Int[Array, " steps"]
    result: Int[Array, ""]


class Past(NamedTuple):
    """Stays of before the walk; without any for a naive animal. Those of duration 0 are padding."""

    time: Float[Array, " stays"]
    duration: Float[Array, " stays"]
    x: Float[Array, " stays"]
    y: Float[Array, " stays"]


class _Memory(NamedTuple):
    """Stays so far [km], what is left of each now in both traces [h], and the bound of the traces on each tile [h]."""

    x: Float[Array, " room"]
    y: Float[Array, " room"]
    left: Float[Array, "2 room"]
    bound: Float[Array, "2 ty tx"]


class _Animal(NamedTuple):
    """Where the animal is and whence it came."""

    x: Float[Array, ""]
    y: Float[Array, ""]
    cos: Float[Array, ""]
    sin: Float[Array, ""]
    heading_known: Bool[Array, ""]


class _Ground(NamedTuple):
    """What stays the same from step to step."""

    parameters: StepParameters
    landscape: Landscape
    tiles: Tiles
    kernel: Kernel


class _Search(NamedTuple):
    """The search for one step, and the step where it was found."""

    batch: Int[Array, ""]
    found: Bool[Array, ""]
    broken: Bool[Array, ""]
    animal: _Animal
    log_attraction: Float[Array, ""]


@partial(jax.jit, static_argnames=("batches", "remembers"))
def walk(
    parameters: StepParameters, landscape: Landscape, timeline: Timeline, start: Float[Array, "2"],
    heading: Float[Array, ""], past: Past, key: Array, batches: int, remembers: bool,
) -> Walk:  # fmt: skip
    """A track from the model.

    Args:
        parameters: of one animal.
        landscape: the ground.
        timeline: stays and which places are seen.
        start: first place [km].
        heading: direction of the step before the first [rad]; NaN where not known.
        past: stays of before.
        key: JAX key.
        batches: of `TRIES` proposals, before a step is given up.
        remembers: whether memory counts; if not, no stay is kept.
    """
    kernel = make_kernel(parameters.shape, parameters.concentration)
    ground = _Ground(parameters, landscape, make_tiles(parameters, landscape), kernel)
    decays = jnp.stack([parameters.reference_decay, parameters.working_decay])
    before, steps = past.time.size, timeline.time.size

    def step(state: tuple, row: tuple) -> tuple:
        animal, memory, result = state
        index, scale, duration, elapsed = row
        count = before + index
        still = ground.tiles.still + SLACK
        log_bound = still + _recall(memory.bound, parameters, bound=True) if remembers else still
        search = partial(_try_batch, ground, memory, count, scale, log_bound, jax.random.fold_in(key, index), animal)
        walking = (result == WALKED) & (duration > 0)
        first = _Search(jnp.asarray(0), ~walking, jnp.asarray(False), animal, jnp.asarray(0.0))
        last = jax.lax.while_loop(lambda s: ~s.found & ~s.broken & (s.batch < batches), search, first)
        result = jnp.where(last.broken, CEILING_BROKEN, jnp.where(last.found, result, NO_STEP_FOUND))
        if remembers:
            memory = _remember(memory, animal, count, duration, jnp.exp(-elapsed / decays), ground)
        there = jnp.where(result == WALKED, 1.0, jnp.nan)
        return (last.animal, memory, result), (last.animal.x * there, last.animal.y * there, *last[4:], last.batch)

    elapsed = jnp.diff(timeline.time, append=timeline.time[-1:] + timeline.duration[-1:])
    rows = (jnp.arange(steps), _scales(parameters, timeline.solar_hour), timeline.duration, elapsed)
    result = _first_result(parameters, landscape, timeline, start, past, remembers)
    known = ~jnp.isnan(heading)
    animal = _Animal(*start, jnp.where(known, jnp.cos(heading), 1.0), jnp.where(known, jnp.sin(heading), 0.0), known)
    state = (animal, _first_memory(ground, past, timeline, remembers), result)
    (_, _, result), (x, y, log_attraction, batch) = jax.lax.scan(step, state, rows)
    x, y = jnp.concatenate([start[:1], x]), jnp.concatenate([start[1:], y])
    return Walk(x, y, timeline.observed, log_attraction, batch * TRIES, result)


def _try_batch(
    ground: _Ground, memory: _Memory, count: Int[Array, ""], scale: Float[Array, ""],
    log_bound: Float[Array, "ty tx"], key: Array, animal: _Animal, search: _Search,
) -> _Search:  # fmt: skip
    """One batch of proposals: the first one accepted, if any."""
    tiles, kernel, flat_bound = ground.tiles, ground.kernel, log_bound.ravel()
    near = within_reach(tiles, animal.x, animal.y, kernel.reach * scale)
    highest, near_highest = log_bound.max(), jnp.where(near, log_bound, -jnp.inf).max()
    key = jax.random.fold_in(key, search.batch)
    tries = propose(key, TRIES, kernel, highest - near_highest, animal.heading_known)
    cos = animal.cos * tries.cos_turn - animal.sin * tries.sin_turn
    sin = animal.sin * tries.cos_turn + animal.cos * tries.sin_turn
    x, y = animal.x + scale * tries.length * cos, animal.y + scale * tries.length * sin
    least = tries.log_chance + jnp.where(tries.long, highest, near_highest)  # accepted where log ω is above this
    bound = flat_bound[tile_of(tiles, x, y)]
    open_yet = tries.valid & allowed(ground.landscape, x, y) & (least < bound)
    chosen = jnp.nonzero(open_yet, size=CANDIDATES, fill_value=0)[0]
    real = jnp.arange(CANDIDATES) < open_yet.sum()
    log_attraction = _log_attraction(ground, memory, count, x[chosen], y[chosen])
    accepted = real & (least[chosen] < log_attraction)
    broken = jnp.any(real & ~(log_attraction <= bound[chosen]))
    which = jnp.argmax(accepted)
    i = chosen[which]
    known = jnp.asarray(True)
    moved = _Animal(x[i], y[i], cos[i], sin[i], known)
    moved = jax.tree.map(lambda new, old: jnp.where(accepted[which], new, old), moved, search.animal)
    return _Search(search.batch + 1, accepted[which], broken, moved, log_attraction[which])


def _log_attraction(
    ground: _Ground, memory: _Memory, count: Int[Array, ""], x: Float[Array, " places"], y: Float[Array, " places"]
) -> Float[Array, " places"]:
    """Log ω at some places, traces summed over the first `count` stays."""
    p = ground.parameters
    home_x, home_y = p.home
    distance = jnp.sqrt((x - home_x) ** 2 + (y - home_y) ** 2 + p.home_eps**2)
    still = read_layers(ground.landscape, x, y) @ p.selection - jnp.where(p.home_pull == 0, 0.0, p.home_pull * distance)
    if not memory.x.size:
        return still

    def add(i: Int[Array, ""], traces: Float[Array, "2 places"]) -> Float[Array, "2 places"]:
        stay_x, stay_y = (jax.lax.dynamic_slice(a, (i * CHUNK,), (CHUNK,)) for a in (memory.x, memory.y))
        left = jax.lax.dynamic_slice(memory.left, (0, i * CHUNK), (2, CHUNK))
        square = (x[:, None] - stay_x[None]) ** 2 + (y[:, None] - stay_y[None]) ** 2
        return traces + left @ jnp.exp(-0.5 * square / p.encoding_range**2).T

    traces = jax.lax.fori_loop(0, -(-count // CHUNK), add, jnp.zeros((2, x.size)))
    return still + _recall(traces, p)


def _recall(traces: Float[Array, "2 ..."], parameters: StepParameters, bound: bool = False) -> Float[Array, "..."]:
    """κ_R ρ(R) − κ_W ρ(W); as a bound, traces are the largest they can be, and what puts off may be nil."""
    strengths = [parameters.reference_strength, -parameters.working_strength]
    recall = traces / (traces + parameters.recall_half)
    return sum(jnp.maximum(s, 0.0) * r if bound else s * r for s, r in zip(strengths, recall, strict=True))


def _remember(
    memory: _Memory, animal: _Animal, count: Int[Array, ""], duration: Float[Array, ""], kept: Float[Array, " 2"],
    ground: _Ground,
) -> _Memory:  # fmt: skip
    """The stay that ends now joins the others, and all of them fade by the time since it began."""
    by_y, by_x = presence_bound(ground.tiles, animal.x[None], animal.y[None], ground.parameters.encoding_range)
    left = memory.left.at[:, count].set(duration) * kept[:, None]
    bound = (memory.bound + duration * (by_y[0][:, None] * by_x[0][None])[None]) * kept[:, None, None]
    return _Memory(memory.x.at[count].set(animal.x), memory.y.at[count].set(animal.y), left, bound)


def _scales(parameters: StepParameters, solar_hour: Float[Array, " stays"]) -> Float[Array, " stays"]:
    """Scale of the steps [km] by the hour of the day."""
    once = 2.0 * jnp.pi * solar_hour / 24.0
    daily = jnp.stack([jnp.cos(once), jnp.sin(once), jnp.cos(2.0 * once), jnp.sin(2.0 * once)], 1)
    return parameters.scale * jnp.exp(daily @ parameters.rhythm)


def _first_memory(ground: _Ground, past: Past, timeline: Timeline, remembers: bool) -> _Memory:
    """What is left of the past when the walk begins, with room for the stays to come."""
    p, before = ground.parameters, past.time.size
    room = -(-(before + timeline.time.size) // CHUNK) * CHUNK if remembers else 0
    if not remembers:
        return _Memory(jnp.zeros(0), jnp.zeros(0), jnp.zeros((2, 0)), jnp.zeros((2, 0, 0)))
    decays = jnp.stack([p.reference_decay, p.working_decay])
    left = past.duration[None] * jnp.exp(-(timeline.time[0] - past.time)[None] / decays[:, None])
    left = jnp.where(past.duration[None] > 0, left, 0.0)
    by_y, by_x = presence_bound(ground.tiles, past.x, past.y, p.encoding_range)
    x, y = (jnp.zeros(room).at[:before].set(a) for a in (past.x, past.y))
    bound = jnp.einsum("ks,si,sj->kij", left, by_y, by_x)
    return _Memory(x, y, jnp.zeros((2, room)).at[:, :before].set(left), bound)


def _first_result(
    parameters: StepParameters, landscape: Landscape, timeline: Timeline, start: Float[Array, "2"], past: Past,
    remembers: bool,
) -> Int[Array, ""]:  # fmt: skip
    """What forbids a walk before its first step, or `WALKED`."""
    p = parameters
    positive, finite = [p.shape, p.scale], [p.rhythm, p.selection, p.home_pull, p.concentration, start, *timeline[:3]]
    if remembers:
        positive += [p.reference_decay, p.working_decay, p.recall_half, p.encoding_range]
        finite += [p.reference_strength, p.working_strength, *past]
    good = jnp.stack([jnp.isfinite(a) & (a > 0) for a in positive]).all()
    good &= jnp.stack([jnp.isfinite(a).all() for a in finite]).all() & ~jnp.any(timeline.duration < 0)
    good &= (p.home_pull == 0) | (jnp.isfinite(p.home).all() & jnp.isfinite(p.home_eps))
    late = jnp.any((past.time >= timeline.time[:1]) & (past.duration > 0))
    result = jnp.where(late, PAST_TOO_LATE, WALKED)
    result = jnp.where(allowed(landscape, start[0], start[1]), result, START_OFF_GROUND)
    return jnp.where(good, result, NOT_A_MODEL)
