"""Small tracks and ground for the tests of memory: gaps, rests, no-go ground and unknown turns all occur."""

from dataclasses import dataclass

import jax
import jax.numpy as jnp
import numpy as np

from bayesrange.memory import (
    AnimalSteps,
    Landscape,
    Nodes,
    Reference,
    StepData,
    StepParameters,
    Steps,
    Track,
    allowed,
    decay_basis,
    fixed_range,
    make_blocks,
    make_nodes,
    make_stays,
    make_steps,
    places,
    read_places,
    tabulate,
    wide_reference,
)

CELL, SIDE, SHORTEST, SIGMA = 0.2, 30, 0.004, 0.15  # [km], cells, [km], [km]


def ground(layers: int = 2) -> Landscape:
    """6 × 6 km about the origin with a no-go block in the north-east and smooth layers."""
    centre = (np.arange(SIDE) + 0.5) * CELL - SIDE * CELL / 2
    x, y = np.meshgrid(centre, centre)
    inside = ~((x > 0.8) & (y > 0.6))
    waves = [np.sin(2 * x + y), np.cos(1.5 * y - x), np.sin(x * y)][:layers]
    values = np.array([np.where(inside, w, 0.0) for w in waves]).reshape(layers, SIDE, SIDE)
    low = jnp.asarray(-SIDE * CELL / 2)
    sub_cells = jnp.asarray(np.kron(inside, np.ones((8, 8), bool)))
    return Landscape(low, low, jnp.asarray(CELL), jnp.asarray(values), jnp.asarray(inside), sub_cells)


def walk(fixes: int, seed: int, keep_all: bool = False) -> Track:
    """An hourly walk held near the origin, with rests; unless `keep_all`, every 17th and a run of fixes are missing."""
    random = np.random.default_rng(seed)
    place, heading = np.zeros((fixes, 2)), 0.0
    for t in range(1, fixes):
        length = 0.001 if t % 13 == 5 else random.gamma(1.6, 0.12)
        angle = heading + random.vonmises(0, 0.4)
        move = length * np.array([np.cos(angle), np.sin(angle)])
        place[t] = place[t - 1] + move - (0.05 * place[t - 1] if length > 0.01 else 0.0)
        heading = np.arctan2(*(place[t] - place[t - 1])[::-1])
    hour = np.arange(fixes, dtype=float)
    kept = np.full(fixes, True) if keep_all else (hour % 17 != 8) & ~((hour > 22) & (hour < 27))
    return Track(hour[kept], place[kept, 0], place[kept, 1])


@dataclass(frozen=True)
class Case:
    """One animal, built."""

    animal: AnimalSteps
    reference: Reference
    exact: np.ndarray  # (steps, places, decays)
    x: np.ndarray
    y: np.ndarray
    bases: tuple
    set_aside: int

    @property
    def steps(self) -> Steps:
        return self.animal.steps

    @property
    def nodes(self) -> Nodes:
        return self.animal.nodes

    def blocks(self, **changes) -> StepData:
        return blocks([self], **changes)


def build(
    track: Track, nodes: int = 16, columns: int = 18, seed: int = 0, layers: int = 2, exact_at=(), bases=None
) -> Case:
    land = ground(layers)
    on_ground = np.asarray(allowed(land, jnp.asarray(track.x), jnp.asarray(track.y)))
    steps, _ = make_steps(track, 1.0, 0.1, SHORTEST, on_ground)
    reference = wide_reference(steps.length)
    points = make_nodes(steps, reference, nodes, seed)
    bases = bases or (decay_basis(0.9, 2000.0, 0.5, 15000.0, columns), fixed_range(SIGMA))
    x, y = places(steps, points)
    table, exact = tabulate(make_stays(track, 1.0), steps.time, x, y, *bases, exact_at)
    animal, set_aside = read_places(steps, points, land, np.mod(steps.time + 3, 24), table)
    return Case(animal, reference, exact, x, y, bases, set_aside)


def blocks(cases: list[Case], **changes) -> StepData:
    first = cases[0]
    given = {"shortest": SHORTEST, "reference": first.reference, "decay_basis": first.bases[0]}
    given |= {"range_basis": first.bases[1], **changes}
    return make_blocks([case.animal for case in cases], **given)


def in_double(data: StepData) -> StepData:
    """The same data with everything in double precision, for finite differences."""
    return jax.tree.map(lambda a: a.astype(float) if a.dtype == jnp.float32 else a, data)


def parameters(animals: int = 1, layers: int = 2, **changes) -> StepParameters:
    """Ordinary values; a change is one number (or row) for every animal."""
    values = {
        "shape": 1.6, "scale": 0.12, "concentration": 0.5, "rhythm": [0.2, -0.1, 0.05, 0.1],
        "selection": [0.6, -0.4, 0.3][:layers], "reference_strength": 3.0, "reference_decay": 300.0,
        "working_strength": 1.2, "working_decay": 8.0, "recall_half": 3.0, "home_pull": 0.7, "home": [0.3, -0.2],
    } | {k: v for k, v in changes.items() if k not in ("encoding_range", "home_eps")}  # fmt: skip
    rows = {k: jnp.repeat(jnp.asarray(v, float)[None], animals, axis=0) for k, v in values.items()}
    rest = {"encoding_range": SIGMA, "home_eps": 0.1}
    return StepParameters(**rows, **{k: jnp.asarray(changes.get(k, v)) for k, v in rest.items()})
