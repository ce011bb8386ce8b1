"""From the workers' arrays to the run folder of a memory card: posterior, table of parameters, facts and warnings."""

from typing import Any

import numpy as np
import pandas as pd
import xarray as xr

from bayesrange.inference._diagnostics import Diagnostics, diagnose
from bayesrange.inference._gather import Derived, Sites, numbered, sampler_dataset
from bayesrange.inference._memory_build import MemoryPlan, surface_axes
from bayesrange.inference._memory_data import EXCESS, MemorySpec
from bayesrange.inference._memory_nodes import shift
from bayesrange.inference._memory_rows import memory_rows
from bayesrange.inference._memory_tables import TRACE_LIMIT
from bayesrange.inference._memory_warnings import said_of_memory, step_autocorrelation
from bayesrange.inference._prepare import Prepared
from bayesrange.inference._summary import Row, parameter_table
from bayesrange.inference._task import Task
from bayesrange.study import Study

UNITS = {
    "step_shape": "1", "step_scale": "m", "turn_concentration": "1", "step_rhythm": "log scale", "selection": "per sd",
    "reference_strength": "1", "reference_decay": "h", "working_strength": "1", "working_decay": "h",
    "recall_half": "h", "encoding_range": "m", "home_pull": "1/km", "home_x": "m", "home_y": "m",
}  # fmt: skip
"""Unit of each parameter in posterior.nc and the tables."""

IN_METRES = ("step_scale", "encoding_range", "home_x", "home_y")
HARMONICS = ("cos 24 h", "sin 24 h", "cos 12 h", "sin 12 h")


def memory_results(
    prepared: Prepared, tasks: list[Task], derived: list[Derived], prior: Sites, facts: dict[str, Any]
) -> tuple[xr.DataTree, pd.DataFrame, Diagnostics, dict[str, Any]]:
    """Posterior, table of parameters, diagnostics, and what run.json says of a memory card."""
    plan: MemoryPlan = prepared.plan
    spec, study = plan.spec, prepared.study
    least = plan.scales.interval_h / 2
    posterior = parameter_dataset(spec, _joined(derived, spec), least)
    before = parameter_dataset(spec, _spread_out(prior, spec), least)
    tree = _tree(study, plan, tasks, derived, posterior, before)
    found = memory_rows(spec, plan.scales, posterior, before, least, tasks[0].seed)
    table = parameter_table(found)
    diagnostics = diagnose(table, found, [one.stats for one in derived], sum(one.failed_solves for one in derived), 0)
    shifts = quadrature_shifts(found, spec, derived)
    autocorrelation = step_autocorrelation(plan, posterior)
    warnings = prepared.warnings + said_of_memory(plan, table, shifts, autocorrelation, facts)
    own = {
        "card": _card(prepared, plan),
        "memory": _memory_facts(plan, facts, shifts, autocorrelation),
        "warnings": warnings,
    }
    return tree, table, diagnostics, own


def parameter_dataset(spec: MemorySpec, sites: Sites, least_decay: float) -> xr.Dataset:
    """Parameters as named variables in the units of the tables.

    Args:
        spec: the model, of all animals.
        sites: constrained values by site, leading (chain, draw).
        least_decay: shortest decay time [h].
    """
    values = dict(sites)
    if spec.remembers and spec.pooled:
        values["working_decay_population"] = least_decay + values["working_excess_population"]
        values["reference_decay_population"] = (
            values["working_decay_population"] + values["reference_excess_population"]
        )
    outer = {inner: name for name, inner in EXCESS.items()}
    variables: dict[str, tuple[tuple[str, ...], np.ndarray, dict[str, str]]] = {}
    for site, value in values.items():
        base, part = split_site(site)
        if site.startswith("animal_place_") or site == "log_encoding_range" or (base in outer and part in _SAMPLED):
            continue
        if site == "animal_correlation":  # sampled as its Cholesky factor
            correlation = value @ np.swapaxes(value, -1, -2)
            variables[site] = (("coefficient", "coefficient_2"), correlation, {"units": "1"})
            continue
        name = outer.get(base, base)
        scaled = value * 1000 if name in IN_METRES and part in ("", "population") else value
        dims, shaped = _dims(spec, name, part, scaled)
        unit = UNITS[name] if part in ("", "population") else "1"
        variables[f"{name}_{part}" if part else name] = (dims, shaped, {"units": unit})
    known = {
        "layer": list(spec.layers), "animal": list(spec.animals), "covariate": list(spec.covariates),
        "harmonic": list(HARMONICS), "coefficient": _coefficients(spec), "coefficient_2": _coefficients(spec),
    }  # fmt: skip
    used = {dim for dims, _, _ in variables.values() for dim in dims}
    return xr.Dataset(
        {name: (("chain", "draw", *dims), value, attrs) for name, (dims, value, attrs) in variables.items()},
        {dim: known[dim] for dim in used},
    )


_SAMPLED = ("", "population")
_PARTS = ("population", "spread", "effect")


def split_site(site: str) -> tuple[str, str]:
    """Parameter and part of a site: `selection_spread` is (selection, spread)."""
    base, _, part = site.rpartition("_")
    return (base, part) if part in _PARTS else (site, "")


def quadrature_shifts(found: list[Row], spec: MemorySpec, derived: list[Derived]) -> dict[str, float]:
    """Shift of each row's posterior mean that four times the nodes imply [posterior sd]; draws of new animals apart."""
    shifts: dict[str, float] = {}
    for row in found:
        if "new animal" in row.name or row.name.endswith(" raw"):
            continue
        one = derived[0] if spec.pooled else derived[spec.animals.index(row.animal)]
        chosen, difference = (one.extras[f"more_nodes_{name}"] for name in ("draw", "difference"))
        draws = np.concatenate([own[at] for own, at in zip(row.draws, chosen, strict=True)])
        shifts[row.name] = shift(draws, difference.ravel())
    return shifts


_ONE_A_FIT = ("step_rhythm", "encoding_range", "log_encoding_range")
"""Sites without an axis of animals."""


def _joined(derived: list[Derived], spec: MemorySpec) -> Sites:
    """Sites of every task, animals side by side on the last axis."""
    if spec.pooled:
        return derived[0].sites
    sites = {}
    for name in derived[0].sites:
        parts = [one.sites[name] for one in derived]
        sites[name] = np.stack(parts, axis=-1) if name in _ONE_A_FIT else np.concatenate(parts, axis=-1)
    return sites


def _spread_out(prior: Sites, spec: MemorySpec) -> Sites:
    """Prior draws with a chain axis, the same for every animal where each is fitted alone."""
    if spec.pooled:
        return {name: value[None] for name, value in prior.items()}
    own = {name: value[..., None] if name in _ONE_A_FIT else value for name, value in prior.items()}
    return {name: np.repeat(value[None], len(spec.animals), axis=-1) for name, value in own.items()}


def _dims(spec: MemorySpec, name: str, part: str, value: np.ndarray) -> tuple[tuple[str, ...], np.ndarray]:
    by_animal = () if spec.pooled else ("animal",)
    if name == "step_rhythm":
        return ("harmonic", *by_animal), value
    if name in ("recall_half", "encoding_range"):
        return by_animal, value
    layered = ("layer",) if name == "selection" else ()
    own: dict[str, tuple[str, ...]] = {"": ("animal",), "population": (), "spread": (), "effect": ("covariate",)}
    if not layered and part in ("spread", "effect"):
        value = value[:, :, 0]
    return layered + own[part], value


def _coefficients(spec: MemorySpec) -> list[str]:
    """Names of the correlated coefficients, in their order."""
    from bayesrange.inference._memory_model import animal_layout

    layout = animal_layout(spec)
    if layout is None:
        return []
    outer = {inner: name for name, inner in EXCESS.items()}
    names: list[str] = []
    for name, _, count in layout.coefficients:
        names += (
            [f"{name}[{layer}]" for layer in spec.layers] if name == "selection" else [outer.get(name, name)] * count
        )
    return names[layout.independent :]


def _tree(
    study: Study, plan: MemoryPlan, tasks: list[Task], derived: list[Derived], posterior: xr.Dataset, prior: xr.Dataset
) -> xr.DataTree:
    """Everything that posterior.nc holds."""
    spec = plan.spec
    animals = [one for task in tasks for one in task.extra["inputs"].animals]
    terms = [_of_steps(task, one.kept["log_likelihood"]) for task, one in zip(tasks, derived, strict=True)]
    stats = [sampler_dataset(one.stats) for one in derived]
    groups = {
        "posterior": posterior, "prior": prior,
        "sample_stats": stats[0] if spec.pooled else xr.concat(stats, pd.Index(spec.animals, name="animal")).transpose(
            "chain", "draw", "animal"
        ),
        "log_likelihood": xr.Dataset({"steps": (("chain", "draw", "step"), np.concatenate(terms, axis=-1))}),
        "observed_data": xr.Dataset({
            "x": ("step", np.concatenate([one.steps.end_x for one in animals]) * 1000),
            "y": ("step", np.concatenate([one.steps.end_y for one in animals]) * 1000),
        }),
        "constant_data": _constant(study, plan, animals),
    }  # fmt: skip
    if spec.remembers:
        groups["memory_use"] = _memory_use(study, spec, derived)
    return xr.DataTree.from_dict({name: numbered(dataset) for name, dataset in groups.items()})


def _of_steps(task: Task, terms: np.ndarray) -> np.ndarray:
    """Log-likelihood of the steps that count, animals in their order: (chain, draw, step)."""
    counted = np.asarray(task.data.steps.counted)
    return terms[..., counted]


def _constant(study: Study, plan: MemoryPlan, animals: list[Any]) -> xr.Dataset:
    spec, fixes, grid = plan.spec, study.fixes, study.grid
    origin = fixes["time"].min().tz_localize(None)

    def joined(get: Any) -> np.ndarray:
        return np.concatenate([np.asarray(get(one)) for one in animals])

    turn_known = joined(lambda one: one.steps.turn_known & ~one.steps.short)
    short = joined(lambda one: one.steps.short)
    kind = np.where(short, "short", np.where(turn_known, "full", "turn unknown"))
    hours = joined(lambda one: one.steps.time)
    layers = list(study.model_layers) if "selection" in spec.parameters else []
    values = np.array([study.layers[name].values for name in layers]).reshape(-1, *grid.shape)
    sizes = {plan.tracks.animals[i].name: len(unit) for unit in plan.tracks.units for i in unit}
    return xr.Dataset(
        {
            "animal_of_step": ("step", joined(lambda one: [one.name] * one.steps.time.size).astype(str)),
            "time": ("step", origin.to_datetime64() + np.rint(hours * 3600e9).astype("timedelta64[ns]")),
            "length_m": ("step", joined(lambda one: one.steps.length) * 1000),
            "turn": ("step", np.where(turn_known, joined(lambda one: one.steps.turn), np.nan)),
            "kind": ("step", kind.astype(str)),
            "start_x": ("step", joined(lambda one: one.steps.x) * 1000),
            "start_y": ("step", joined(lambda one: one.steps.y) * 1000),
            "fix_x": ("fix", fixes["x"].to_numpy(float)), "fix_y": ("fix", fixes["y"].to_numpy(float)),
            "fix_animal": ("fix", fixes["animal"].to_numpy(object).astype(str)),
            "fix_time": ("fix", fixes["time"].dt.tz_convert("UTC").dt.tz_localize(None).to_numpy("datetime64[ns]")),
            "habitable": (("y", "x"), grid.habitable), "layer_value": (("layer", "y", "x"), values),
            "weight": ("animal", [1 / sizes[name] if spec.pooled else 1.0 for name in spec.animals]),
            "memory_start": ("animal", ["learned" if one.learned else "naive" for one in plan.tracks.animals]),
        },
        {"animal": list(spec.animals), "layer": layers, "x": grid.x_m, "y": grid.y_m},
    )  # fmt: skip


def _memory_use(study: Study, spec: MemorySpec, derived: list[Derived]) -> xr.Dataset:
    x, y = surface_axes(study)

    def laid_out(value: np.ndarray) -> np.ndarray:
        return value.reshape(-1, y.size, x.size)

    mean = np.concatenate([laid_out(one.means["recall"]) for one in derived])
    sd = np.concatenate([laid_out(one.spread("recall")) for one in derived])
    working = np.concatenate([laid_out(one.means["working"]) for one in derived])
    where = ("animal", "y", "x")
    return xr.Dataset(
        {name: (where, value, {"units": "1"}) for name, value in
         (("recall_mean", mean), ("recall_sd", sd), ("working_mean", working))},
        {"animal": list(spec.animals), "x": x, "y": y},
    )  # fmt: skip


def _card(prepared: Prepared, plan: MemoryPlan) -> dict[str, Any]:
    from bayesrange.inference._write_run import card_facts

    card, spec = prepared.card, plan.spec
    words, reasons = {}, {}
    for name in spec.parameters:
        prior = plan.priors[EXCESS.get(name, name)]
        shown = prior.times(1000) if name in IN_METRES else prior
        beyond = {"working_decay": "half an interval + ", "reference_decay": "working_decay + "}.get(name, "")
        words[name] = beyond + shown.in_words(UNITS[name] if UNITS[name] in ("m", "h", "1/km") else "")
        reasons[name] = card.priors[name].reason
    if spec.pooled:
        varying = [name for name in spec.parameters if name in card.between]
        words |= {f"{name} spread": card.between[name].in_words() for name in varying}
        reasons |= {f"{name} spread": card.between[name].reason for name in varying}
    if spec.covariates:
        words["covariate"], reasons["covariate"] = card.covariate_effect.in_words(), card.covariate_effect.reason
    return card_facts(prepared, "hierarchical" if spec.pooled else "individual", words, reasons)


def _memory_facts(
    plan: MemoryPlan, facts: dict[str, Any], shifts: dict[str, float], autocorrelation: dict[str, dict[str, float]]
) -> dict[str, Any]:
    tracks, spec = plan.tracks, plan.spec
    steps = {one.name: one.counts for one in tracks.animals}
    for name, without in zip(spec.animals, facts["without_nodes"], strict=True):
        steps[name] = steps[name] | {"steps": steps[name]["steps"] - without, "without_nodes": without}
    return {
        "interval_h": tracks.interval_h, "shortest_step_m": tracks.shortest_m,
        "encoding_range_m": None if spec.estimated_range or not spec.remembers else plan.scales.encoding_range_m,
        "nodes": facts["nodes"], "pilot_error": facts["pilot"], "columns": facts["columns"][0],
        "range_columns": facts["columns"][1],
        "trace_error": max(facts["trace_errors"]), "trace_errors": dict(zip(spec.animals, facts["trace_errors"])),
        "trace_error_limit": TRACE_LIMIT, "quadrature_shift": shifts, "step_autocorrelation": autocorrelation,
        "together": [[one, other, share] for one, other, share in tracks.together],
        "units": list(spec.units), "record_h": {one.name: one.record_h for one in tracks.animals}, "steps": steps,
    }  # fmt: skip
