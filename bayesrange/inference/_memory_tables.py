"""From tracks to the arrays of the step likelihood: nodes, columns of the compressed past, proof of its error.

The past is compressed to as few columns as keep the log-likelihood of each animal within a limit of the exact one,
tried on the longest record and then proved on every animal, at decay times drawn from the range of their priors.
"""

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any, NamedTuple

import jax
import jax.numpy as jnp
import numpy as np

from bayesrange._errors import StudyError
from bayesrange.inference._memory_study import AnimalTrack
from bayesrange.memory import (
    BLOCK,
    AnimalSteps,
    Basis,
    Landscape,
    Reference,
    StepData,
    StepParameters,
    decay_basis,
    decay_coefficients,
    fixed_range,
    make_blocks,
    make_nodes,
    no_memory,
    places,
    range_basis,
    range_coefficients,
    read_places,
    step_log_likelihood,
    tabulate,
)

TRACE_LIMIT = 1e-3
"""Largest |Δ log L| of an animal that compression may make."""
COLUMNS = ((16, 10), (18, 12), (20, 14), (24, 16), (28, 20), (32, 26))
"""Columns for decay times and, where it is estimated, for the encoding range, in the order in which they are tried."""
PROVED_AT = 6
"""Random pairs of decay times at which the error is proved."""


@dataclass(frozen=True)
class TableInput:
    """What step tables are made from; kept with the task, so that they can be made again with more nodes.

    Attributes:
        animals: tracks.
        landscape: ground and standardised layers.
        reference: law of the nodes' radii [km].
        shortest: [km].
        decays: shortest and longest decay time of the priors [h]; None without memory.
        ranges: shortest and longest encoding range [km], alike where it is fixed.
        columns: columns of the compression, decay and range.
        by_day: layers by day and night apart.
        home: places are kept for a pull to a centre.
        weight: of each animal's log-likelihood.
        seed: of the nodes.
    """

    animals: tuple[AnimalTrack, ...]
    landscape: Landscape
    reference: Reference
    shortest: float
    decays: tuple[float, float] | None
    ranges: tuple[float, float]
    columns: tuple[int, int]
    by_day: bool
    home: bool
    weight: tuple[float, ...]
    seed: int

    def keep(self, kept: list[np.ndarray]) -> "TableInput":
        """The same with only those steps of each animal."""
        return replace(self, animals=tuple(one.keep(mask) for one, mask in zip(self.animals, kept, strict=True)))

    def only(self, animal: int) -> "TableInput":
        """The same for one animal alone."""
        return replace(self, animals=(self.animals[animal],), weight=(1.0,), seed=self.seed + 1009 * animal)


class Proof(NamedTuple):
    """What came out of making tables, an animal each.

    Attributes:
        error: largest |Δ log L| that was found.
        kept: which steps count; the others have no node on habitable ground and are set aside.
    """

    error: list[float]
    kept: list[np.ndarray]


def bases(inputs: TableInput) -> tuple[Basis, Basis]:
    """Bases of the past, from the ages that occur and the decay times of the priors."""
    short, long = inputs.ranges
    reach = fixed_range(short) if short == long else range_basis(short, long, inputs.columns[1])
    if inputs.decays is None:
        return no_memory(), fixed_range(short)
    youngest = min(float(one.stays.duration.min()) for one in inputs.animals)
    oldest = max(one.record_h for one in inputs.animals)
    return decay_basis(0.9 * youngest, 1.1 * oldest, *inputs.decays, inputs.columns[0]), reach


def make_step_data(inputs: TableInput, count: int, shift: int = 0) -> StepData:
    """Steps with nodes and tables, in the columns that `inputs` say.

    Args:
        inputs: tracks and what their tables need.
        count: nodes a step.
        shift: added to the seed: other nodes for another purpose.
    """
    decay, reach = bases(inputs)
    made = [_tabulated(inputs, k, count, decay, reach, (), shift).steps for k in range(len(inputs.animals))]
    return _blocks(inputs, made, decay, reach)


def make_proved(inputs: TableInput, count: int) -> tuple[TableInput, StepData, Proof]:
    """Steps with nodes and tables in as few columns as the limit allows, and the proof of their error.

    Where the encoding range is known the columns are chosen for all animals at once; where it is estimated on the
    longest record, and proved on all: more columns are tried where that fails.

    Args:
        inputs: tracks and what their tables need; their columns are chosen here.
        count: nodes a step.

    Returns:
        The inputs with the columns and only the steps that count, the data, and the proof.

    Raises:
        StudyError: no number of columns will do.
    """
    tries = [list(COLUMNS)]
    if inputs.decays is None:
        tries = [[COLUMNS[0]]]
    elif inputs.ranges[0] != inputs.ranges[1]:
        longest = int(np.argmax([one.steps.time.size for one in inputs.animals]))
        fewest = _fewest(_errors(replace(inputs, columns=COLUMNS[-1]), [longest], count, list(COLUMNS))[1])
        tries = [[option] for option in COLUMNS[COLUMNS.index(fewest) :]]
    for options in tries:
        made, errors = _errors(replace(inputs, columns=options[-1]), range(len(inputs.animals)), count, options)
        if max(own[options[-1]] for own in errors) < TRACE_LIMIT / 2:
            break
    columns = _fewest(errors) if inputs.decays is not None else options[0]
    full, inputs = options[-1], replace(inputs, columns=columns)
    steps = [one.steps._replace(table=_fewer(one.steps.table, full, columns, inputs)) for one in made]
    data = _blocks(inputs, steps, *bases(inputs))
    proof = Proof([own[columns] for own in errors] if inputs.decays is not None else [0.0] * len(made),
                  [one.kept for one in made])  # fmt: skip
    return inputs.keep(proof.kept), data, proof


class _Tabulated(NamedTuple):
    """One animal's steps, which of its steps they are, and exact traces at their places."""

    steps: AnimalSteps
    kept: np.ndarray
    exact: np.ndarray


def _tabulated(
    inputs: TableInput, k: int, count: int, decay: Basis, reach: Basis, asked: Sequence[tuple[float, float]],
    shift: int = 0,
) -> _Tabulated:  # fmt: skip
    one = inputs.animals[k]
    nodes = make_nodes(one.steps, inputs.reference, count, inputs.seed + 7919 * shift + 31 * k)
    x, y = places(one.steps, nodes)
    table, exact = tabulate(one.stays, one.steps.time, x, y, decay, reach, asked)
    animal, _ = read_places(one.steps, nodes, inputs.landscape, one.hour, table)
    kept = np.isin(one.steps.fix, animal.steps.fix)
    return _Tabulated(_by_day(animal, one.day[kept]) if inputs.by_day else animal, kept, exact[kept])


def _blocks(inputs: TableInput, steps: list[AnimalSteps], decay: Basis, reach: Basis) -> StepData:
    return make_blocks(
        steps, shortest=inputs.shortest, reference=inputs.reference, decay_basis=decay, range_basis=reach,
        weight=np.array(inputs.weight), home=inputs.home,
    )  # fmt: skip


def _errors(
    inputs: TableInput, animals: Sequence[int], count: int, options: list[tuple[int, int]]
) -> tuple[list[_Tabulated], list[dict[tuple[int, int], float]]]:
    """Tables in the most columns, and for each animal the error with each option."""
    decay, reach = bases(inputs)
    pairs = _pairs(inputs) if inputs.decays is not None else []
    asked = [(tau, sigma) for reference, working, sigma in pairs for tau in (reference, working)]
    made = [_tabulated(inputs, k, count, decay, reach, asked) for k in animals]
    errors = [_errors_of(inputs, one, pairs, options, decay, reach) for one in made]
    return made, errors


def _fewest(errors: list[dict[tuple[int, int], float]]) -> tuple[int, int]:
    """The first option with which every animal's error is well below the limit."""
    for option in errors[0]:
        if max(own[option] for own in errors) < TRACE_LIMIT / 2:
            return option
    worst = max(list(own.values())[-1] for own in errors)
    raise StudyError(
        f"The past of the animals cannot be compressed to within {TRACE_LIMIT:g} of the log-likelihood with "
        f"{COLUMNS[-1][0]} columns (error {worst:.2g}): the priors of the decay times, or of an estimated encoding "
        "range, reach too far; give reference_decay, working_decay and encoding_range narrower priors in "
        "[model.priors]."
    )


def _fewer(table: np.ndarray, full: tuple[int, int], columns: tuple[int, int], inputs: TableInput) -> np.ndarray:
    """A table in fewer columns of the same bases."""
    if inputs.decays is None:
        return table
    reach = 1 if inputs.ranges[0] == inputs.ranges[1] else full[1]
    cut = table.reshape(*table.shape[:2], full[0], reach)[:, :, : columns[0], : columns[1]]
    return np.ascontiguousarray(cut.reshape(*table.shape[:2], -1))


def _errors_of(
    inputs: TableInput, one: _Tabulated, pairs: list[tuple[float, float, float]], options: list[tuple[int, int]],
    decay: Basis, reach: Basis,
) -> dict[tuple[int, int], float]:  # fmt: skip
    """Largest |Δ log L| of one animal with strong memories over the pairs of decay times, by option of columns."""
    found = dict.fromkeys(options, 0.0)
    for at, pair in enumerate(pairs):
        reference, working, sigma = pair
        by_range = np.asarray(range_coefficients(reach, jnp.log(sigma)))
        by_decay = [np.asarray(decay_coefficients(decay, jnp.log(tau))) for tau in (reference, working)]
        exact = one.exact[:, :, [2 * at, 2 * at + 1]].astype(np.float32)
        there = _log_likelihood(inputs, one.steps, exact, pair)
        for option in options:  # fewer columns of the same bases: their first coefficients
            first = [np.outer(own[: option[0]], by_range[: option[1]]).ravel() for own in by_decay]
            weight = np.stack(first, axis=1).astype(np.float32)
            compressed = _fewer(one.steps.table, inputs.columns, option, inputs) @ weight
            here = _log_likelihood(inputs, one.steps, compressed, pair)
            found[option] = max(found[option], abs(there - here))
    return found


def _log_likelihood(
    inputs: TableInput, steps: AnimalSteps, traces: np.ndarray, pair: tuple[float, float, float]
) -> float:
    """Log-likelihood of an animal's steps with these traces at its places, strong memories and the fitted kernel."""
    reference, working, sigma = pair
    data = make_blocks(
        [steps._replace(table=traces)], shortest=inputs.shortest, reference=inputs.reference,
        decay_basis=_picking(reference, working), range_basis=fixed_range(sigma),
    )  # fmt: skip
    most = max(blocks_of(inputs))
    return float(_summed(_strong(inputs, steps, pair), pad_blocks(data, most)))


@jax.jit
def _summed(parameters: StepParameters, data: StepData) -> jax.Array:
    return step_log_likelihood(parameters, data).sum()


def pad_blocks(data: StepData, blocks: int) -> StepData:
    """The same data with empty blocks at the end, so that records of unlike length share one compiled program."""
    more = blocks - data.animal.shape[0]
    if more <= 0:
        return data
    fill: dict[str, Any] = {"length": 1.0, "radius": 1.0, "allowed": True}
    padded = {}
    for name, value in data._asdict().items():
        if name in _SHARED:
            continue
        array = np.asarray(value)
        extra = np.full((more, *array.shape[1:]), fill.get(name, 0), array.dtype)
        padded[name] = np.concatenate([array, extra])
    return data._replace(**padded)


def split_animals(data: StepData) -> list[StepData]:
    """Each animal's data alone, with empty blocks at the end, so that all have one shape."""
    owner = np.asarray(data.animal)
    most = int(np.bincount(owner).max())
    found = []
    for k in range(data.weight.shape[0]):
        own = {name: np.asarray(getattr(data, name))[owner == k] for name in data._fields if name not in _SHARED}
        alone = data._replace(**own | {"animal": np.zeros_like(own["animal"])}, weight=np.ones(1))
        found.append(pad_blocks(alone, most))
    return found


_SHARED = ("weight", "shortest", "reference_shape", "reference_scale", "decay_basis", "range_basis")


def surface_table(inputs: TableInput, x: np.ndarray, y: np.ndarray, decay: Basis, reach: Basis) -> np.ndarray:
    """Table of each animal's past at some places [km] at the end of its record: (animals, places, columns)."""
    tables = []
    for one in inputs.animals:
        end = one.track.time[-1:]
        table, _ = tabulate(one.stays, end, x[None], y[None], decay, reach)
        tables.append(table[0])
    return np.stack(tables)


def _by_day(animal: Any, day: np.ndarray) -> Any:
    """Layers of a step that starts by day, then by night: the other half is 0."""
    light = np.stack([day, ~day], axis=-1).astype(animal.layers_nodes.dtype)  # (steps, 2)
    used = (animal.layers_used[:, :, None] * light[:, None, :]).reshape(len(day), -1)
    nodes = animal.layers_nodes[..., None] * light[:, None, None, :]
    return animal._replace(layers_used=used, layers_nodes=nodes.reshape(*nodes.shape[:2], -1))


def _pairs(inputs: TableInput) -> list[tuple[float, float, float]]:
    """Random reference and working decay times from the whole range, and encoding ranges; the extremes with them."""
    assert inputs.decays is not None
    random = np.random.default_rng(inputs.seed + 17)
    low, high = np.log(inputs.decays)
    pairs = np.sort(random.uniform(low, high, (PROVED_AT, 2)), axis=1)
    pairs[0] = low, high
    sigma = np.exp(random.uniform(*np.log(inputs.ranges), PROVED_AT))
    if inputs.ranges[0] != inputs.ranges[1]:  # an encoding range costs a pass of its own
        sigma = sigma[[0, 1, 2, 0, 1, 2][:PROVED_AT]]
        sigma[0] = inputs.ranges[0]
    return [(float(np.exp(b)), float(np.exp(a)), float(s)) for (a, b), s in zip(pairs, sigma, strict=True)]


def _picking(reference: float, working: float) -> Basis:
    """A basis whose coefficients at these two decay times are (1, 0) and (0, 1): its table is the traces themselves."""
    grid = np.array([working, 3 * max(reference, 1.001 * working)])
    weights = np.exp(-grid[:, None] / np.array([reference, working])[None])
    return Basis(grid, np.linalg.inv(weights).T)


def _strong(inputs: TableInput, animal: AnimalSteps, pair: tuple[float, float, float]) -> StepParameters:
    """Strong memories (κ_R 6, κ_W 3, m₀ 1 h) on the fitted movement kernel."""
    layers, (reference, working, sigma) = animal.layers_nodes.shape[-1], pair
    return StepParameters(
        shape=np.array([inputs.reference.shape / 0.6]), scale=np.array([inputs.reference.scale / 3]),
        concentration=np.array([0.3]), rhythm=np.zeros((1, 4)), selection=np.zeros((1, layers)),
        reference_strength=np.array([6.0]), reference_decay=np.array([reference]),
        working_strength=np.array([3.0]), working_decay=np.array([working]), recall_half=np.array([1.0]),
        encoding_range=np.array(sigma), home_pull=np.zeros(1), home=np.zeros((1, 2)), home_eps=np.array(1.0),
    )  # fmt: skip


def blocks_of(inputs: TableInput) -> list[int]:
    """Blocks that each animal's steps fill."""
    return [-(-one.steps.time.size // BLOCK) for one in inputs.animals]
