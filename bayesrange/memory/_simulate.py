"""Tracks drawn from given parameters over a landscape, step by step and exactly.

A step is proposed from the movement kernel and accepted with a chance in proportion to ω: no quadrature and none of
the likelihood's nodes. Equations: docs/mathematics. Units: km, h.
"""

import jax
import jax.numpy as jnp
import numpy as np
from jaxtyping import Array, Float

from bayesrange.memory._landscape import Landscape
from bayesrange.memory._likelihood import StepParameters
from bayesrange.memory._steps import Stays, Track
from bayesrange.memory._walk import (
    CEILING_BROKEN,
    NO_STEP_FOUND,
    NOT_A_MODEL,
    PAST_TOO_LATE,
    START_OFF_GROUND,
    TRIES,
    WALKED,
    Past,
    Timeline,
    Walk,
    walk,
)

WALK_SENTENCES = {
    WALKED: "The track was drawn to its end.",
    NO_STEP_FOUND: "No step was accepted within the allowed number of proposals: almost no habitable ground lies "
    "within reach, or selection and memory are so strong that a step hardly has a chance; raise `most_tries`.",
    CEILING_BROKEN: "A place attracted more than its bound allows: the simulator is wrong here, and the track is no "
    "draw from the model.",
    NOT_A_MODEL: "A parameter, time or place is not finite, or a step's shape or scale, a decay time, `recall_half` "
    "or `encoding_range` is not positive, or a duration is negative.",
    START_OFF_GROUND: "The start lies outside the study area or on no-go ground: choose a place on habitable ground.",
    PAST_TOO_LATE: "A stay of the past begins at or after the track's first time: give only stays before it.",
}


class WalkError(ArithmeticError):
    """A track that was asked for directly (`throw=True`) and could not be drawn."""


def regular_timeline(steps: int, interval: float, start: float = 0.0, solar_hour: float = 0.0) -> Timeline:
    """Timeline of equal intervals, all places observed.

    Args:
        steps: number of steps.
        interval: time between two places [h].
        start: time of the first [h].
        solar_hour: hour of the solar day at the start [h].
    """
    since = interval * jnp.arange(float(steps))
    observed = jnp.ones(steps + 1, bool)
    return Timeline(start + since, jnp.full(steps, float(interval)), (solar_hour + since) % 24.0, observed)


def timeline_of(stays: Stays, solar_hour: Float[np.ndarray, " stays"] | None = None) -> Timeline:
    """Timeline with the sampling times and gaps of an observed animal.

    Args:
        stays: of the animal, from `make_stays`; the fix after the last stay is observed.
        solar_hour: hour of the solar day at each stay's start [h]; None: 0 throughout, for parameters without rhythm.
    """
    hour = np.zeros(stays.time.size) if solar_hour is None else solar_hour
    return Timeline(*map(jnp.asarray, (stays.time, stays.duration, hour, np.append(stays.observed, True))))


def simulate(
    parameters: StepParameters,
    landscape: Landscape,
    timeline: Timeline,
    start: Float[Array, "2"],
    key: Array | int,
    heading: Float[Array, ""] | float | None = None,
    past: Stays | None = None,
    most_tries: int = 2**20,
    throw: bool = True,
) -> Walk:
    """One animal's track from the model; `jax.lax.map` and `jax.vmap` go over animals or draws.

    On a CPU `lax.map` is the faster: under `vmap` every animal waits at each step for the one that tries longest.

    Args:
        parameters: of one animal: scalars, `selection` (layers,), `rhythm` (4,), `home` (2,). `encoding_range` is
            read. With both strengths 0 (given as numbers, not traced) no stay is kept, which is many times faster.
        landscape: the ground.
        timeline: stays and which places are seen.
        start: first place [km].
        key: JAX key, or the seed of one. The same key gives the same track.
        heading: direction of the step before the first, anticlockwise from east [rad]; None or NaN where not known:
            the first turn is uniform.
        past: stays remembered from before, each begun before the timeline; None for a naive animal. Stays of duration
            0 are padding.
        most_tries: proposals for one step before the track is given up.
        throw: raise where the track could not be drawn. Traced calls never raise: read `result`.

    Raises:
        WalkError: `throw`, and the result is not `WALKED`.
    """
    key = jax.random.key(key) if isinstance(key, int) else key
    strengths = (parameters.reference_strength, parameters.working_strength)
    remembers = any(isinstance(s, jax.core.Tracer) or bool(np.any(np.asarray(s) != 0)) for s in strengths)
    earlier = Past(*(jnp.zeros(0),) * 4) if past is None else Past(past.time, past.duration, past.x, past.y)
    direction = jnp.asarray(jnp.nan if heading is None else heading, float)
    drawn = walk(
        parameters, landscape, timeline, start, direction, earlier, key, batches=-(-most_tries // TRIES),
        remembers=remembers,
    )  # fmt: skip
    if throw and not isinstance(drawn.result, jax.core.Tracer) and int(drawn.result) != WALKED:
        raise WalkError(f"{WALK_SENTENCES[int(drawn.result)]} Places found: {int(jnp.isfinite(drawn.x).sum())}.")
    return drawn


def seen_track(drawn: Walk, timeline: Timeline) -> Track:
    """What a collar would have recorded of a walk: the observed places and their times."""
    last = timeline.time[-1:] + timeline.duration[-1:]
    seen = np.asarray(drawn.observed)
    return Track(*(np.asarray(a)[seen] for a in (jnp.concatenate([timeline.time, last]), drawn.x, drawn.y)))
