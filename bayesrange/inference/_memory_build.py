"""From a study and a memory card to specification, scales and arrays."""

from dataclasses import dataclass, replace
from typing import Any

import jax
import numpy as np

from bayesrange._errors import StudyError
from bayesrange.inference._cards import Card
from bayesrange.inference._memory_checks import check_card, is_pooled, unit_covariates
from bayesrange.inference._memory_data import EXCESS, MemoryData, MemorySpec
from bayesrange.inference._memory_model import animal_layout
from bayesrange.inference._memory_scales import MemoryScales, memory_scales, prior_in_km, range_limits_of, upper_end
from bayesrange.inference._memory_study import FEWEST_STEPS, AnimalTrack, Tracks, make_tracks
from bayesrange.inference._memory_tables import (
    COLUMNS,
    Proof,
    TableInput,
    make_proved,
    split_animals,
    surface_table,
)
from bayesrange.inference._priors import Prior
from bayesrange.inference._scales import layer_scales
from bayesrange.memory import Landscape, Steps, choose_count, quadrature_error, wide_reference
from bayesrange.study import Study

MOST_CELLS = 10_000
"""Cells of the recall surfaces, at the most; finer grids are thinned."""
HOME_MARGIN = 0.1


@dataclass(frozen=True)
class MemoryPlan:
    """A memory fit before its tables are made.

    Attributes:
        spec: the static part; of all animals, also where each is fitted alone.
        scales: frozen scales.
        tracks: the animals' records.
        landscape: ground and standardised layers.
        priors: of each coordinate, in the units of the numerics.
        spread_scale: of each coefficient of the hierarchy.
        covariates: coded, of each unit.
        effect_sd: prior sd of a covariate's coefficient.
        seed: of the nodes.
        nodes: nodes a step, as asked for; None: by a pilot.
    """

    spec: MemorySpec
    scales: MemoryScales
    tracks: Tracks
    landscape: Landscape
    priors: dict[str, Prior]
    spread_scale: np.ndarray
    covariates: np.ndarray
    effect_sd: float
    seed: int
    nodes: int | None


@dataclass(frozen=True)
class MemoryTables:
    """What was made for the sampler: one set of arrays, or one an animal where each is fitted alone."""

    data: list[MemoryData]
    inputs: list[TableInput]
    proof: Proof
    nodes: int
    pilot: dict[int, float]


def make_plan(study: Study, card: Card) -> MemoryPlan:
    """Check a study against a memory card and lay out its fit.

    Raises:
        StudyError: the two do not fit together.
    """
    check_card(study, card)
    model = study.settings.model
    tracks = make_tracks(study)
    pooled = is_pooled(study, tracks)
    layers = study.model_layers if "resources" in card.terms else ()
    scales = memory_scales(study, tracks, layer_scales(study, list(layers)))
    optional = (("encoding_range",) if _estimates_range(study, card) else ()) + (
        ("step_rhythm",) if "step_length" in model.vary else ()
    )
    for name in optional:
        if name not in card.priors:
            raise StudyError(f"{card.file.name}: no prior for {name}; write [priors.{name}] with family and numbers.")
    names = card.parameters + optional
    priors = {EXCESS.get(name, name): prior_in_km(card.priors[name], name, scales) for name in names}
    by_day = "selection" in model.vary
    named = tuple(f"{layer}, {part}" for layer in layers for part in ("day", "night")) if by_day else layers
    covariates = unit_covariates(study, tracks, pooled)
    spec = MemorySpec(
        parameters=names,
        families=tuple((name, prior.family) for name, prior in priors.items()),
        pooled=pooled,
        layers=named,
        animals=tuple(one.name for one in tracks.animals),
        units=tuple(" + ".join(tracks.animals[i].name for i in unit) for unit in tracks.units),
        covariates=tuple(name for name, _ in covariates),
        rhythm="step_rhythm" in optional,
        estimated_range="encoding_range" in optional,
        range_limits=range_limits_of(priors, scales),
    )
    layout = animal_layout(spec)
    spreads = [_spread(card, name) for name, _, count in layout.coefficients for _ in range(count)] if layout else []
    coded = [values for _, values in covariates]
    return MemoryPlan(
        spec, scales, tracks, _landscape(study, scales, list(layers)), priors, np.array(spreads),
        np.stack(coded, axis=1) if coded else np.zeros((len(spec.units), 0)), card.covariate_effect.numbers[1],
        study.settings.sampling.seed, None if model.nodes == "auto" else int(model.nodes),
    )  # fmt: skip


def make_tables(plan: MemoryPlan, study: Study) -> MemoryTables:
    """Choose nodes and columns, and tabulate every animal's past."""
    inputs, spec = _table_input(plan, study), plan.spec
    pilot: dict[int, float] = {}
    if plan.nodes is None:
        pilot = quadrature_error(_sample(plan.tracks), plan.landscape, inputs.reference, seed=plan.seed)
    count = plan.nodes or choose_count(pilot)
    cells = _surface_cells(study, spec.remembers)
    inputs, steps, proof = make_proved(inputs, count)
    for one in inputs.animals:
        if one.steps.time.size < FEWEST_STEPS:
            raise StudyError(
                f'{study.path.name}: the animal "{one.name}" has {one.steps.time.size} steps with habitable ground '
                f"within reach of their start; at least {FEWEST_STEPS} are needed: check the no-go layers, or take its "
                "fixes out."
            )
    if spec.pooled:
        return MemoryTables([_memory_data(plan, study, inputs, steps, cells)], [inputs], proof, count, pilot)
    alone = replace(plan, covariates=np.zeros((1, 0)))
    data, own = [], [inputs.only(k) for k in range(len(spec.animals))]
    for one, blocks in zip(own, split_animals(steps), strict=True):
        data.append(_memory_data(alone, study, one, blocks, cells))
    return MemoryTables(data, own, proof, count, pilot)


def specs_of(plan: MemoryPlan) -> list[MemorySpec]:
    """One specification, or one an animal where each is fitted alone."""
    if plan.spec.pooled:
        return [plan.spec]
    return [replace(plan.spec, animals=(name,), units=(name,)) for name in plan.spec.animals]


def surface_axes(study: Study) -> tuple[np.ndarray, np.ndarray]:
    """Cell centres of the recall surfaces [m]: the grid's, thinned where it is finer than needed."""
    every = max(1, int(np.ceil(np.sqrt(study.grid.inside.sum() / MOST_CELLS))))
    return study.grid.x_m[every // 2 :: every], study.grid.y_m[every // 2 :: every]


def _surface_cells(study: Study, remembers: bool) -> np.ndarray:
    x, y = surface_axes(study)
    places = np.stack([np.tile(x, y.size), np.repeat(y, x.size)], axis=1) / 1000
    return places if remembers else places[:0]


def _memory_data(plan: MemoryPlan, study: Study, inputs: TableInput, steps: Any, cells: np.ndarray) -> MemoryData:
    animals = inputs.animals
    decay, reach = steps.decay_basis, steps.range_basis
    unit = np.zeros(len(animals), np.int32)
    if plan.spec.pooled:
        for k, members in enumerate(plan.tracks.units):
            unit[members] = k
    surface = surface_table(inputs, *cells.T, decay, reach) if len(cells) else np.zeros((len(animals), 0, 0))
    units = plan.covariates.shape[0]
    return MemoryData(
        steps=jax.tree.map(np.asarray, steps),
        surface=surface.astype(np.float32),
        home=np.array([[one.track.x.mean(), one.track.y.mean()] for one in animals]),
        box=np.stack([_home_box(one) for one in animals]),
        home_eps=np.asarray(plan.scales.home_eps_m / 1000),
        unit=unit,
        least_decay=np.asarray(plan.scales.interval_h / 2),
        fixed_range=np.asarray(plan.scales.encoding_range_m / 1000),
        priors={name: np.array(prior.numbers) for name, prior in plan.priors.items()},
        spread_scale=plan.spread_scale,
        covariates=plan.covariates,
        effect_sd=np.asarray(plan.effect_sd),
        centring=np.zeros((units, plan.spread_scale.size)),
    )


def _home_box(one: AnimalTrack) -> np.ndarray:
    """Where an animal's centre may lie: the rectangle around its fixes and a tenth of its longer side more [km].

    A centre far off would be a constant direction to go in, which is another model.
    """
    x, y = one.track.x, one.track.y
    margin = HOME_MARGIN * max(np.ptp(x), np.ptp(y))
    return np.array([x.min() - margin, y.min() - margin, x.max() + margin, y.max() + margin])


def _table_input(plan: MemoryPlan, study: Study) -> TableInput:
    moved = np.concatenate([one.steps.length[~one.steps.short] for one in plan.tracks.animals])
    sizes = np.ones(len(plan.tracks.animals))
    if plan.spec.pooled:
        for members in plan.tracks.units:
            sizes[members] = len(members)
    return TableInput(
        animals=tuple(plan.tracks.animals), landscape=plan.landscape, reference=wide_reference(moved),
        shortest=plan.scales.shortest_step_m / 1000, decays=_decays(plan), ranges=plan.spec.range_limits,
        columns=COLUMNS[-1], by_day="selection" in study.settings.model.vary, home="home_pull" in plan.spec.parameters,
        weight=tuple(1 / sizes), seed=plan.seed,
    )  # fmt: skip


def _decays(plan: MemoryPlan) -> tuple[float, float] | None:
    """Shortest and longest decay time that the priors leave open, for the animal of the oddest covariates [h]."""
    if not plan.spec.remembers:
        return None
    least = plan.scales.interval_h / 2
    layout = animal_layout(plan.spec)
    farthest = np.sqrt((plan.covariates**2).sum(1)).max(initial=0.0) if layout else 0.0
    between = {
        name: float(np.hypot(plan.spread_scale[layout.rows[name]][0], plan.effect_sd * farthest)) if layout else 0.0
        for name in EXCESS.values()
    }
    return least, least + sum(upper_end(plan.priors[name], between[name]) for name in EXCESS.values())


def _estimates_range(study: Study, card: Card) -> bool:
    return study.settings.model.encoding_range_m == "estimate" and "memory" in card.terms


def _spread(card: Card, coefficient: str) -> float:
    name = {inner: outer for outer, inner in EXCESS.items()}.get(coefficient, coefficient)
    if name not in card.between:
        raise StudyError(
            f'{card.file.name}: pooling = "hierarchical" needs a prior of the spread between animals; write '
            f'[between_animals.{name}] with family = "half-normal" and a scale.'
        )
    return card.between[name].numbers[0]


def _landscape(study: Study, scales: MemoryScales, layers: list[str]) -> Landscape:
    grid = study.grid
    values = np.zeros((len(layers), *grid.shape))
    for k, name in enumerate(layers):
        scale = scales.layers[name]
        values[k] = np.where(grid.inside, (study.layers[name].values - scale.mean) / scale.sd, 0.0)
    place = (np.asarray(v / 1000) for v in (grid.west_m, grid.south_m, grid.cell_m))
    return Landscape(*place, values, np.asarray(grid.inside), np.asarray(grid.sub_cells))


def _sample(tracks: Tracks) -> Steps:
    """Every animal's steps in one, for the pilot."""
    return Steps(*(np.concatenate(columns) for columns in zip(*(one.steps for one in tracks.animals), strict=True)))
