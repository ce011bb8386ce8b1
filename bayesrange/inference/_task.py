"""What a worker process needs to know, and the files through which it answers.

    checkpoints/animal-N/           the following once for each animal, where each is fitted alone
    checkpoints/task.pkl            the model and its data, written once by the parent
    checkpoints/start.npz           mode, curvature and cost, written by the first worker
    checkpoints/chain-K/part-N.pkl  one chunk: draws so far of that chunk and the sampler's state after it
    checkpoints/chain-K/derived.npz log-likelihoods, areas and sums of densities over the chain's draws

A file appears whole or not at all; the parts that are there decide where a chain goes on.
"""

import io
import pickle
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from bayesrange.inference._folder import write_atomically
from bayesrange.inference._models import Data, Spec

CHUNK = 50
"""Most transitions between two checkpoints."""


@dataclass(frozen=True)
class Task:
    """A fit as its workers see it.

    Attributes:
        spec: static part of the model.
        data: numbers of the model (NumPy leaves); None once a worker has taken them.
        chains: number of chains.
        warmup: adaptation steps of each chain.
        draws: kept draws of each chain.
        seed: seed of the run; chain k uses (seed, k).
        target_accept: target of the step size adaptation.
        fingerprint: hash of everything that decides the draws.
        label: what this task fits, where a run has several: the name of an animal.
        extra: what the model's kind needs at the end of a chain.
    """

    spec: Spec
    data: Data | None
    chains: int
    warmup: int
    draws: int
    seed: int
    target_accept: float
    fingerprint: str
    label: str = ""
    extra: Any = None


def task_folders(checkpoints: Path, labels: list[str]) -> list[Path]:
    """Folder of each task: the checkpoint folder itself, or one an animal in it."""
    if labels == [""]:
        return [checkpoints]
    return [checkpoints / f"animal-{k + 1}" for k in range(len(labels))]


def save_task(folder: Path, task: Task) -> None:
    """Write the task into a checkpoint folder."""
    write_atomically(folder / "task.pkl", pickle.dumps(task))


def load_task(folder: Path) -> Task:
    """Read the task back."""
    with (folder / "task.pkl").open("rb") as file:
        return pickle.load(file)


def save_arrays(path: Path, **arrays: np.ndarray) -> None:
    """Write named arrays, whole or not at all."""
    buffer = io.BytesIO()
    np.savez(buffer, **arrays)  # type: ignore[arg-type]
    write_atomically(path, buffer.getvalue())


def chain_folder(folder: Path, chain: int) -> Path:
    """Folder of one chain's files."""
    return folder / f"chain-{chain}"


def save_part(folder: Path, number: int, part: dict[str, Any]) -> None:
    """Write one chunk of a chain."""
    write_atomically(folder / f"part-{number:04d}.pkl", pickle.dumps(part))


def load_parts(folder: Path) -> list[dict[str, Any]]:
    """Chunks of a chain in order, as far as they are there without a gap and can be read."""
    parts: list[dict[str, Any]] = []
    while (file := folder / f"part-{len(parts):04d}.pkl").exists():
        try:
            parts.append(pickle.loads(file.read_bytes()))
        except (pickle.UnpicklingError, EOFError):
            break
    return parts
