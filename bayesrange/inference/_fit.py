"""`fit`: from a study to a run folder."""

import contextlib
import ctypes
import json
import shutil
from collections.abc import Callable
from pathlib import Path

import numpy as np

from bayesrange._errors import StudyError
from bayesrange.inference._folder import choose_folder, held, make_folder, write_json
from bayesrange.inference._prepare import Prepared, prepare
from bayesrange.inference._processes import Message, cores, run_workers
from bayesrange.inference._run import Run
from bayesrange.inference._task import chain_folder, save_task, task_folders
from bayesrange.inference._write_run import write_run
from bayesrange.study import Study, read_study

LEAPFROGS, LEAPFROGS_HIERARCHICAL = 7, 35
"""Gradients a transition that the cost estimate reckons with: seen with the metric from the mode."""


def fit(
    study: str | Path | Study,
    out: str | Path | None = None,
    again: bool = False,
    tell: Callable[[Message], None] | None = None,
    processes: int | None = None,
) -> Run:
    """Sample the posterior of a study and write a run folder.

    A fit that was interrupted goes on where it stopped when called again with the same study. Call `report` on the
    run's folder for tables of ranges, maps and the page (the command `bayesrange fit` does). A study with periods is
    fitted one period at a time, `fit(read_study(study, period))`, or all of them by `fit_periods`.

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
    folder = choose_folder(study.path.parent, name, out, again, prepared.fingerprint)
    checkpoints = folder / "checkpoints"
    refuse_changes(checkpoints, prepared)
    make_folder(checkpoints)
    with held(checkpoints):
        tell({"stage": "read", "folder": str(folder), "prepared": prepared})
        seconds, gib = _sample(checkpoints, prepared, tell, processes)
        tell({"stage": "writing"})
        write_run(folder, prepared, seconds, gib)
        shutil.rmtree(checkpoints)
    return Run(folder)


def _sample(
    checkpoints: Path, prepared: Prepared, tell: Callable[[Message], None], processes: int | None
) -> tuple[float, float]:
    """Run what is left to do of the worker processes.

    Returns:
        Seconds a gradient, and GiB a worker.
    """
    folders = task_folders(checkpoints, prepared.labels)
    if not (checkpoints / "inputs.json").exists():
        tell({"stage": "tables", "kind": prepared.card.kind})
        _save_tasks(checkpoints, prepared, folders)
        _give_memory_back()
    log = checkpoints / "workers.log"
    sampling = prepared.study.settings.sampling
    at_once = min(processes or cores(), sampling.chains * len(folders))
    unstarted = [folder for folder in folders if not (folder / "start.npz").exists()]
    if folders[0] in unstarted:  # alone, so that what it compiles is there for all others
        run_workers([[str(folders[0]), "start"]], 1, tell, log)
    run_workers([[str(folder), "start"] for folder in unstarted if folder != folders[0]], at_once, tell, log)
    seconds, gib = 0.0, 0.0
    for folder in folders:
        with np.load(folder / "start.npz") as start:
            seconds = max(seconds, float(start["seconds_per_gradient"]))
            gib = max(gib, float(start["peak_gib"]))
    tell({"stage": "cost", **_cost(prepared, seconds, gib, at_once)})
    todo = [
        [str(folder), "chain", str(k)]
        for folder in folders
        for k in range(1, sampling.chains + 1)
        if not (chain_folder(folder, k) / "derived.npz").exists()
    ]
    run_workers(todo, at_once, tell, log)
    return seconds, gib


def _give_memory_back() -> None:
    """Let the system have what tables took while they were made: glibc keeps it, though this process only waits now."""
    with contextlib.suppress(OSError, AttributeError):  # not glibc
        ctypes.CDLL(None).malloc_trim(0)


def _save_tasks(checkpoints: Path, prepared: Prepared, folders: list[Path]) -> None:
    """Write the workers' tasks, then what they were made from; tables are large and not kept in memory."""
    try:
        tasks, facts = prepared.make_tasks()
    except StudyError:  # found out late; what the user was told of as wrong leaves nothing behind
        shutil.rmtree(checkpoints)
        with contextlib.suppress(OSError):
            checkpoints.parent.rmdir()
        raise
    for folder, task in zip(folders, tasks, strict=True):
        folder.mkdir(exist_ok=True)
        save_task(folder, task)
    inputs = {"fingerprint": prepared.fingerprint, "inputs": prepared.decisive, "facts": facts}
    write_json(checkpoints / "inputs.json", inputs)


def refuse_changes(checkpoints: Path, prepared: Prepared) -> None:
    """An unfinished run goes on only with the very same input.

    Raises:
        StudyError: names what changed.
    """
    file = checkpoints / "inputs.json"
    if not file.exists():
        return
    before = json.loads(file.read_text(encoding="utf-8"))
    if before["fingerprint"] == prepared.fingerprint:
        return
    old, new = before["inputs"], prepared.decisive
    changed = sorted(name for name in old.keys() | new.keys() if old.get(name) != new.get(name))
    raise StudyError(
        f"{checkpoints.parent}: an unfinished run is here, and since it began {', '.join(changed)} changed; undo the "
        "change to go on with it, delete the folder, or use --again for a new one."
    )


def _cost(prepared: Prepared, seconds: float, gib: float, at_once: int) -> dict[str, float]:
    """What sampling will take: minutes on this machine and GiB of memory."""
    sampling = prepared.study.settings.sampling
    rounds = -(-sampling.chains * len(prepared.labels) // at_once)
    pooled = getattr(prepared.specs[0], "pooled", False) or bool(getattr(prepared.specs[0], "varying", ()))
    gradients = (sampling.warmup + sampling.draws) * (LEAPFROGS_HIERARCHICAL if pooled else LEAPFROGS)
    return {
        "minutes": rounds * (gradients * seconds + sampling.draws * seconds + 15) / 60,
        "gib": at_once * gib,
        "at_once": at_once,
    }
