"""`fit`: from a study to a run folder."""

import hashlib
import json
import shutil
from collections.abc import Callable
from dataclasses import dataclass, field
from datetime import UTC, datetime
from importlib.metadata import version
from pathlib import Path
from typing import Any

import numpy as np

import bayesrange
from bayesrange._errors import StudyError
from bayesrange.inference._cards import Card, find_card, read_card
from bayesrange.inference._folder import FORMAT, choose_folder, held, make_folder, write_atomically, write_json
from bayesrange.inference._processes import Message, cores, run_workers
from bayesrange.inference._range_build import make_data, make_spec
from bayesrange.inference._range_data import RangeSpec
from bayesrange.inference._run import Run
from bayesrange.inference._scales import Scales, make_scales
from bayesrange.inference._task import Task, chain_folder, save_task
from bayesrange.study import Study, Weights, autocorrelation_weights, read_study

LEAPFROGS, LEAPFROGS_HIERARCHICAL = 7, 35
"""Gradients a transition that the cost estimate reckons with: seen with the metric from the mode."""

PRIOR_DRAWS = 4000

LIBRARIES = ("jax", "numpyro", "arviz", "numpy", "scipy", "pandas", "xarray", "rasterio", "geopandas")


@dataclass
class Prepared:
    """A study made ready to be fitted."""

    study: Study
    card: Card
    spec: RangeSpec
    scales: Scales
    weights: Weights | None
    task: Task
    inputs: dict[str, str]
    warnings: list[str] = field(default_factory=list)


def fit(
    study: str | Path | Study,
    out: str | Path | None = None,
    again: bool = False,
    tell: Callable[[Message], None] | None = None,
    processes: int | None = None,
) -> Run:
    """Sample the posterior of a study and write a run folder.

    A fit that was interrupted goes on where it stopped when called again with the same study. Call `report` on the
    run's folder for tables of ranges, maps and the page (the command `bayesrange fit` does).

    Args:
        study: study file, its folder, or a study that was read (one period of it, where there are some).
        out: run folder; default `runs/<card>`, or `runs/<card>-<period>` of a study with periods, beside the study.
        again: make a new folder where a finished run stands.
        tell: called with progress messages (dictionaries with a `stage`).
        processes: chains that run at the same time; default one a processor.

    Returns:
        The finished run; its `converged` says whether every gate was passed.

    Raises:
        StudyError: the input is wrong, or the folder is taken; nothing was written.
        WorkerError: a sampling process failed.
    """
    tell = tell or (lambda message: None)
    if processes is not None and processes < 1:
        raise ValueError(f"`processes` is a number of chains and must be at least 1, got {processes}.")
    study = study if isinstance(study, Study) else read_study(Path(study))
    prepared = prepare(study)
    out = Path(out) if out else None
    name = prepared.card.name if study.period is None else f"{prepared.card.name}-{study.period}"
    folder = choose_folder(study.path.parent, name, out, again, prepared.task.fingerprint)
    checkpoints = folder / "checkpoints"
    _refuse_changes(checkpoints, prepared)
    make_folder(checkpoints)
    with held(checkpoints):
        tell({"stage": "read", "folder": str(folder), "prepared": prepared})
        seconds, gib = _sample(checkpoints, prepared, tell, processes)
        tell({"stage": "writing"})
        _write(folder, prepared, seconds, gib)
        shutil.rmtree(checkpoints)
    return Run(folder)


def _sample(
    checkpoints: Path, prepared: Prepared, tell: Callable[[Message], None], processes: int | None
) -> tuple[float, float]:
    """Run what is left to do of the worker processes.

    Returns:
        Seconds a gradient, and GiB a worker.
    """
    task = prepared.task
    if not (checkpoints / "inputs.json").exists():
        save_task(checkpoints, task)
        inputs = {"fingerprint": task.fingerprint, "inputs": _decisive(prepared.inputs, prepared.study.period)}
        write_json(checkpoints / "inputs.json", inputs)
    log = checkpoints / "workers.log"
    at_once = min(processes or cores(), task.chains)
    if not (checkpoints / "start.npz").exists():
        run_workers(checkpoints, [["start"]], 1, tell, log)
    with np.load(checkpoints / "start.npz") as start:
        seconds, gib = float(start["seconds_per_gradient"]), float(start["peak_gib"])
    tell({"stage": "cost", **_cost(task, seconds, gib, at_once)})
    todo = [k for k in range(1, task.chains + 1) if not (chain_folder(checkpoints, k) / "derived.npz").exists()]
    run_workers(checkpoints, [["chain", str(k)] for k in todo], at_once, tell, log)
    return seconds, gib


def prepare(study: Study) -> Prepared:
    """Card, scales, weights and arrays of a study.

    Raises:
        StudyError: card and study do not fit together.
    """
    model, sampling = study.settings.model, study.settings.sampling
    card = read_card(find_card(model.card, study.path.parent)).with_priors(model.priors, study.path.name)
    spec = make_spec(study, card)
    scales = make_scales(study, list(spec.layers))
    weights = None if model.autocorrelation == "ignored" else autocorrelation_weights(study.fixes)
    weight = np.ones(len(study.fixes)) if weights is None else weights.weight
    data = make_data(study, card, spec, scales, weight)
    inputs = dict(study.hashes)
    own_card = card.file.parent == study.path.parent
    card_name = card.file.name if own_card else f"models/{card.file.name}"  # a study file may be called like a card
    inputs[card_name] = hashlib.sha256(card.file.read_bytes()).hexdigest()
    fingerprint = hashlib.sha256(json.dumps(_decisive(inputs, study.period), sort_keys=True).encode()).hexdigest()
    task = Task(
        spec, data, sampling.chains, sampling.warmup, sampling.draws, sampling.seed, sampling.target_accept, fingerprint
    )
    warnings = list(study.warnings) + (list(weights.warnings) if weights else [])
    if weights is None:
        warnings.append(
            "Autocorrelation is ignored, as the study file asks: intervals are too narrow where fixes follow one "
            "another quickly."
        )
    return Prepared(study, card, spec, scales, weights, task, inputs, warnings)


def _decisive(inputs: dict[str, str], period: str | None) -> dict[str, str]:
    """Everything that a run is only gone on with unchanged: input files and the versions that make the draws."""
    versions = {"bayesrange": bayesrange.__version__, **{name: version(name) for name in ("jax", "numpyro")}}
    chosen = {} if period is None else {"the period": period}
    return inputs | chosen | {f"the version of {name}": number for name, number in versions.items()}


def _refuse_changes(checkpoints: Path, prepared: Prepared) -> None:
    """An unfinished run goes on only with the very same input.

    Raises:
        StudyError: names what changed.
    """
    file = checkpoints / "inputs.json"
    if not file.exists():
        return
    before = json.loads(file.read_text(encoding="utf-8"))
    if before["fingerprint"] == prepared.task.fingerprint:
        return
    old, new = before["inputs"], _decisive(prepared.inputs, prepared.study.period)
    changed = sorted(name for name in old.keys() | new.keys() if old.get(name) != new.get(name))
    raise StudyError(
        f"{checkpoints.parent}: an unfinished run is here, and since it began {', '.join(changed)} changed; undo the "
        "change to go on with it, delete the folder, or use --again for a new one."
    )


def _cost(task: Task, seconds: float, gib: float, at_once: int) -> dict[str, float]:
    """What sampling will take: minutes on this machine and GiB of memory."""
    rounds = -(-task.chains // at_once)
    gradients = (task.warmup + task.draws) * (LEAPFROGS_HIERARCHICAL if task.spec.varying else LEAPFROGS)
    return {
        "minutes": rounds * (gradients * seconds + task.draws * seconds + 15) / 60,
        "gib": at_once * gib,
        "at_once": at_once,
    }


def _write(folder: Path, prepared: Prepared, seconds: float, gib: float) -> None:
    """Write posterior.nc, tables/parameters.csv and, last, run.json."""
    from bayesrange.inference._assemble import build_tree, gather
    from bayesrange.inference._diagnostics import diagnose
    from bayesrange.inference._summary import parameter_table, rows

    study, spec, task = prepared.study, prepared.spec, prepared.task
    derived = gather(folder / "checkpoints", task.chains)
    prior = _prior_draws(task)
    weight = task.data.weight[: len(study.fixes)]
    attrs = {
        "study": study.settings.study.name,
        "card": prepared.card.name,
        "crs": study.crs.to_string(),
        "bayesrange": bayesrange.__version__,
    }
    tree = build_tree(study, spec, derived, prior, weight, attrs)
    found = rows(spec, prepared.scales, tree["posterior"].dataset, tree["prior"].dataset, task.seed)
    table = parameter_table(found)
    diagnostics = diagnose(table, found, derived.stats, derived.failed_solves, derived.two_states)
    (folder / "tables").mkdir(exist_ok=True)
    write_atomically(folder / "tables" / "parameters.csv", table.to_csv(index=False).encode())
    partial = folder / "checkpoints" / "posterior.nc"
    tree.to_netcdf(partial, engine="h5netcdf")
    partial.replace(folder / "posterior.nc")
    times = {"sampling_s": round(sum(derived.seconds), 1), "gradient_s": round(seconds, 5)}
    write_json(folder / "run.json", _describe(prepared, diagnostics, times, round(gib, 2)))


def _prior_draws(task: Task) -> dict[str, np.ndarray]:
    import jax

    from bayesrange.inference._program import Program, as_arrays

    data = as_arrays(task.data)
    program = Program(task.spec, data, task.warmup, task.target_accept, 1)
    keys = jax.random.split(jax.random.key(task.seed), PRIOR_DRAWS)
    return {name: np.asarray(value) for name, value in program.prior_draws(keys, data).items()}


def _describe(prepared: Prepared, diagnostics: Any, times: dict[str, float], worker_gib: float) -> dict[str, Any]:
    """run.json."""
    study, card, task = prepared.study, prepared.card, prepared.task
    settings, weights, home_length = study.settings, prepared.weights, prepared.scales.home_length_km
    animals = [] if weights is None else json.loads(weights.table.to_json(orient="records"))
    priors = dict(card.priors)
    if prepared.spec.varying:
        priors |= {f"{name} spread": card.between_groups[name] for name in prepared.spec.varying}
    if prepared.spec.covariates:
        priors["covariate"] = card.covariate_effect
    count = len(study.fixes)
    sentence = (
        weights.sentence if weights else f"{count:,} fixes are taken as independent, because autocorrelation is ignored"
    )
    return {
        "format": FORMAT, "name": settings.study.name,
        "study": {"file": study.path.name, "name": settings.study.name, "sha256": prepared.inputs[study.path.name]},
        "files": prepared.inputs, "crs": study.crs.to_string(), "cell_m": study.grid.cell_m,
        "card": {
            "name": card.name, "title": card.title, "terms": list(card.terms), "solver": card.solver, "says": card.says,
            "use_when": card.use_when, "not_when": card.not_when, "pooling": settings.model.pooling,
            "priors": {name: prior.scaled(home_length).in_words() for name, prior in priors.items()},
            "prior_reasons": {name: prior.reason for name, prior in priors.items()},
            "changed_priors": list(card.changed), "references": list(card.references),
        },
        "scales": prepared.scales.as_json(), "reading": settings.model.reading,
        "sampling": {
            "chains": task.chains, "warmup": task.warmup, "draws": task.draws, "seed": task.seed,
            "target_accept": task.target_accept,
        },
        "versions": {"bayesrange": bayesrange.__version__, **{name: version(name) for name in LIBRARIES}},
        "finished": datetime.now(UTC).isoformat(timespec="seconds"), "times": times, "worker_gib": worker_gib,
        "counts": study.counts,
        "effective": {
            "fixes": count, "effective": float(task.data.weight.sum()), "sentence": sentence, "animals": animals,
            "autocorrelation": settings.model.autocorrelation,
        },
        "diagnostics": diagnostics.as_json(), "converged": diagnostics.converged, "warnings": prepared.warnings,
        "period": study.period, "sensitive": settings.study.sensitive,
    }  # fmt: skip
