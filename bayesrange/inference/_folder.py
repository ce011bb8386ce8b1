"""Run folders: where a run goes, what lies in it, and that nothing finished is overwritten."""

import json
import os
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

try:
    import fcntl
except ImportError:  # not a POSIX system: nothing guards against a second fit there
    fcntl = None  # type: ignore[assignment]

from bayesrange._errors import StudyError

FORMAT = 1
"""Number of the run folder's format; it changes when a table or a key changes its meaning."""


def choose_folder(study_folder: Path, card: str, out: Path | None, again: bool, fingerprint: str = "") -> Path:
    """Folder of a run: `runs/<card>` beside the study, or `out`.

    Args:
        study_folder: where the study file is.
        card: name of the model card.
        out: folder that the user asked for.
        again: make a new folder (`-2`, `-3`, …) where a finished run, or an unfinished one of other input, stands.
        fingerprint: of the input; an unfinished run with it is gone on with.

    Raises:
        StudyError: a finished run, or something that is no run, is there already.
    """
    folder = out or study_folder / "runs" / card
    if again:
        number, base = 1, folder
        while folder.exists() and not _goes_on(folder, fingerprint):
            number += 1
            folder = base.with_name(f"{base.name}-{number}")
        return folder
    if (folder / "run.json").exists():
        raise StudyError(
            f"{folder}: a finished run is here and is never overwritten; add --again for a new one, or --out with "
            "another folder."
        )
    if folder.exists() and not folder.is_dir():
        raise StudyError(
            f"{folder}: expected a folder to write the run into, and a file is there; choose another with --out."
        )
    if folder.exists() and any(folder.iterdir()) and not (folder / "checkpoints").is_dir():
        raise StudyError(f"{folder}: this folder holds other things than a run; choose another with --out.")
    return folder


def _goes_on(folder: Path, fingerprint: str) -> bool:
    inputs = folder / "checkpoints" / "inputs.json"
    if (folder / "run.json").exists() or not inputs.is_file():
        return False
    return json.loads(inputs.read_text(encoding="utf-8"))["fingerprint"] == fingerprint


def make_folder(folder: Path) -> None:
    """Make a folder and those above it.

    Raises:
        StudyError: the system does not let us.
    """
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise StudyError(
            f"{folder}: this folder cannot be made ({error.strerror}); choose another with --out."
        ) from error


@contextmanager
def held(checkpoints: Path) -> Iterator[None]:
    """Keep a second process from writing the same run; the system lets go when this one ends, however it ends.

    Raises:
        StudyError: another process holds it.
    """
    with (checkpoints / "lock").open("w") as file:
        if fcntl is not None:
            try:
                fcntl.flock(file, fcntl.LOCK_EX | fcntl.LOCK_NB)
            except BlockingIOError as error:
                raise StudyError(
                    f"{checkpoints.parent}: another fit is writing this run right now; wait for it, or choose another "
                    "folder with --out."
                ) from error
        yield


def write_atomically(path: Path, content: bytes) -> None:
    """Write a file so that it is there whole or not at all."""
    partial = path.with_name(f".{path.name}.{os.getpid()}")
    try:
        with partial.open("wb") as file:
            file.write(content)
            file.flush()
            os.fsync(file.fileno())
        os.replace(partial, path)
    except BaseException:
        partial.unlink(missing_ok=True)
        raise


def write_json(path: Path, content: dict[str, Any]) -> None:
    """Write JSON, readable and whole."""
    text = json.dumps(content, indent=2, ensure_ascii=False, allow_nan=False)
    write_atomically(path, (text + "\n").encode())
