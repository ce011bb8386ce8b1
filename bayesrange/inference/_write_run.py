"""What a finished fit leaves in its run folder: posterior.nc, tables/parameters.csv and, last, run.json."""

import json
from datetime import UTC, datetime
from importlib.metadata import version
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import xarray as xr

import bayesrange
from bayesrange.inference._diagnostics import Diagnostics, diagnose
from bayesrange.inference._folder import FORMAT, write_atomically, write_json
from bayesrange.inference._gather import Derived, Sites, gather
from bayesrange.inference._prepare import Prepared
from bayesrange.inference._summary import parameter_table
from bayesrange.inference._task import Task, load_task, task_folders

PRIOR_DRAWS = 4000

LIBRARIES = ("jax", "numpyro", "arviz", "numpy", "scipy", "pandas", "xarray", "rasterio", "geopandas")


def write_run(folder: Path, prepared: Prepared, seconds: float, gib: float) -> None:
    """Write a run's files.

    Args:
        folder: the run folder, with its checkpoints.
        prepared: what was fitted.
        seconds: seconds a gradient.
        gib: largest memory of a worker [GiB].
    """
    checkpoints = folder / "checkpoints"
    chains = prepared.study.settings.sampling.chains
    folders = task_folders(checkpoints, prepared.labels)
    derived = [gather(place, chains) for place in folders]
    tasks = [load_task(place) for place in folders]
    facts = json.loads((checkpoints / "inputs.json").read_text(encoding="utf-8")).get("facts", {})
    prior = prior_draws(tasks[0])
    tree, table, diagnostics, own = _results(prepared, tasks, derived, prior, facts)
    tree.attrs.update(
        study=prepared.study.settings.study.name, card=prepared.card.name, crs=prepared.study.crs.to_string(),
        bayesrange=bayesrange.__version__,
    )  # fmt: skip
    (folder / "tables").mkdir(exist_ok=True)
    write_atomically(folder / "tables" / "parameters.csv", table.to_csv(index=False).encode())
    partial = checkpoints / "posterior.nc"
    tree.to_netcdf(partial, engine="h5netcdf")
    partial.replace(folder / "posterior.nc")
    sampling = sum(sum(one.seconds) for one in derived)
    times = {"sampling_s": round(sampling, 1), "gradient_s": round(seconds, 5)}
    common = _common(prepared, diagnostics, times, round(gib, 2))
    write_json(folder / "run.json", common | own)


def prior_draws(task: Task, count: int = PRIOR_DRAWS) -> Sites:
    """Draws from the prior by site, leading (draw)."""
    import jax

    from bayesrange.inference._program import Program, as_arrays

    data = as_arrays(task.data)
    program = Program(task.spec, data, task.warmup, task.target_accept, 1)
    keys = jax.random.split(jax.random.key(task.seed), count)
    return {name: np.asarray(value) for name, value in program.prior_draws(keys, data).items()}


def _results(
    prepared: Prepared, tasks: list[Task], derived: list[Derived], prior: Sites, facts: dict[str, Any]
) -> tuple[xr.DataTree, pd.DataFrame, Diagnostics, dict[str, Any]]:
    """Posterior, table of parameters, diagnostics, and what run.json says of this kind of card."""
    if prepared.card.kind == "memory":
        from bayesrange.inference._memory_results import memory_results

        return memory_results(prepared, tasks, derived, prior, facts)
    from bayesrange.inference._assemble import build_tree
    from bayesrange.inference._summary import rows

    study, task, one, spec = prepared.study, tasks[0], derived[0], prepared.specs[0]
    weight = task.data.weight[: len(study.fixes)]
    tree = build_tree(study, spec, one, prior, weight)
    found = rows(spec, prepared.scales, tree["posterior"].dataset, tree["prior"].dataset, task.seed)
    table = parameter_table(found)
    diagnostics = diagnose(table, found, one.stats, one.failed_solves, one.two_states)
    return tree, table, diagnostics, _range_facts(prepared, float(task.data.weight.sum()))


def _range_facts(prepared: Prepared, effective: float) -> dict[str, Any]:
    study, card, spec, weights = prepared.study, prepared.card, prepared.specs[0], prepared.weights
    animals = [] if weights is None else json.loads(weights.table.to_json(orient="records"))
    priors = dict(card.priors)
    if spec.varying:
        priors |= {f"{name} spread": card.between[name] for name in spec.varying}
    if spec.covariates:
        priors["covariate"] = card.covariate_effect
    count = len(study.fixes)
    sentence = (
        weights.sentence if weights else f"{count:,} fixes are taken as independent, because autocorrelation is ignored"
    )
    words = {name: prior.scaled(prepared.scales.home_length_km).in_words() for name, prior in priors.items()}
    reasons = {name: prior.reason for name, prior in priors.items()}
    return {
        "card": card_facts(prepared, study.settings.model.pooling or "shared", words, reasons),
        "reading": study.settings.model.reading, "detection": study.settings.fixes.detection,
        "epochs": [] if study.epochs is None else study.epochs.as_json(list(study.groups["group"])),
        "effective": {
            "fixes": count, "effective": effective, "sentence": sentence, "animals": animals,
            "autocorrelation": study.settings.model.autocorrelation,
        },
    }  # fmt: skip


def card_facts(prepared: Prepared, pooling: str, priors: dict[str, str], reasons: dict[str, str]) -> dict[str, Any]:
    """What run.json says of the card."""
    card = prepared.card
    return {
        "name": card.name, "kind": card.kind, "title": card.title, "terms": list(card.terms), "solver": card.solver,
        "says": card.says, "use_when": card.use_when, "not_when": card.not_when, "pooling": pooling, "priors": priors,
        "prior_reasons": reasons, "changed_priors": list(card.changed), "references": list(card.references),
    }  # fmt: skip


def _common(prepared: Prepared, diagnostics: Diagnostics, times: dict[str, float], worker_gib: float) -> dict[str, Any]:
    """What run.json says of every run."""
    study = prepared.study
    settings, sampling = study.settings, study.settings.sampling
    return {
        "format": FORMAT, "name": settings.study.name,
        "study": {"file": study.path.name, "name": settings.study.name, "sha256": prepared.inputs[study.path.name]},
        "files": prepared.inputs, "crs": study.crs.to_string(), "cell_m": study.grid.cell_m,
        "card": {}, "scales": prepared.scales.as_json(), "reading": "bilinear",
        "sampling": {
            "chains": sampling.chains, "warmup": sampling.warmup, "draws": sampling.draws, "seed": sampling.seed,
            "target_accept": sampling.target_accept,
        },
        "versions": {"bayesrange": bayesrange.__version__, **{name: version(name) for name in LIBRARIES}},
        "finished": datetime.now(UTC).isoformat(timespec="seconds"), "times": times, "worker_gib": worker_gib,
        "counts": study.counts, "effective": None, "diagnostics": diagnostics.as_json(),
        "converged": diagnostics.converged, "warnings": prepared.warnings, "period": study.period,
        "sensitive": settings.study.sensitive,
    }  # fmt: skip
