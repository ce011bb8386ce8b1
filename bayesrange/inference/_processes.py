"""The parent's side of a fit: start worker processes, listen to them, stop them."""

import json
import os
import queue
import subprocess
import sys
import threading
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import bayesrange

Message = dict[str, Any]


class WorkerError(RuntimeError):
    """A worker process ended before its work was done; the text holds the end of what it said."""


def cache_folder() -> Path:
    """Folder of compiled programs, shared by all runs of this user."""
    base = os.environ.get("XDG_CACHE_HOME") or Path.home() / ".cache"
    return Path(base) / "bayesrange" / "compiled"


def worker_environment() -> dict[str, str]:
    """Environment of a worker: one thread, CPU, and a cache of compiled programs that outlives it."""
    own = str(Path(bayesrange.__file__).resolve().parent.parent)
    before = os.environ.get("PYTHONPATH")
    settings = {
        "JAX_PLATFORMS": "cpu",
        "JAX_COMPILATION_CACHE_DIR": str(cache_folder()),
        "JAX_PERSISTENT_CACHE_MIN_COMPILE_TIME_SECS": "0.2",
        "JAX_PERSISTENT_CACHE_MIN_ENTRY_SIZE_BYTES": "0",
        "JAX_ENABLE_X64": "1",
        "XLA_FLAGS": "--xla_cpu_multi_thread_eigen=false intra_op_parallelism_threads=1",
        "OMP_NUM_THREADS": "1",
        "OPENBLAS_NUM_THREADS": "1",
        "TF_CPP_MIN_LOG_LEVEL": "3",
        "PYTHONUNBUFFERED": "1",
        "PYTHONPATH": own + (os.pathsep + before if before else ""),
    }
    return {**os.environ, **settings}


def cores() -> int:
    """Processors that this process may use."""
    return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1


def run_workers(jobs: list[list[str]], at_once: int, tell: Callable[[Message], None], log: Path) -> None:
    """Run worker processes, at most `at_once` at a time, and pass on what they say.

    Args:
        jobs: arguments of each worker: its checkpoint folder, and what to do.
        at_once: number of processes that may run together.
        tell: called with each message, in this thread.
        log: file that collects what workers write on standard error.

    Raises:
        WorkerError: a worker failed; the others are stopped.
        KeyboardInterrupt: passed on after the workers were stopped.
    """
    heard: queue.Queue[tuple[int, Message | None]] = queue.Queue()
    waiting, running = list(enumerate(jobs)), {}
    with log.open("ab") as errors:
        try:
            while waiting or running:
                while waiting and len(running) < at_once:
                    number, arguments = waiting.pop(0)
                    running[number] = _launch(arguments, errors)
                    threading.Thread(target=_listen, args=(number, running[number], heard), daemon=True).start()
                number, message = heard.get()
                if message is not None:
                    tell(message)
                    continue
                status = running.pop(number).wait()
                if status != 0:
                    raise WorkerError(
                        f"worker `{' '.join(jobs[number][1:])}` ended with status {status}: {_last_words(log)}"
                    )
        finally:
            for process in running.values():
                process.terminate()
            for process in running.values():
                process.wait()


def _launch(arguments: list[str], errors: Any) -> subprocess.Popen[str]:
    # -P: a file of the user's called resource.py or numpy.py, where they work, must not be taken for the module
    command = [sys.executable, "-P", "-m", "bayesrange.inference._worker", *arguments]
    return subprocess.Popen(
        command, env=worker_environment(), stdin=subprocess.DEVNULL, stdout=subprocess.PIPE, stderr=errors, text=True
    )


def _listen(number: int, process: subprocess.Popen[str], heard: "queue.Queue[tuple[int, Message | None]]") -> None:
    for message in _messages(process):
        heard.put((number, message))
    heard.put((number, None))


def _messages(process: subprocess.Popen[str]) -> Iterator[Message]:
    assert process.stdout is not None
    with process.stdout as lines:
        for line in lines:
            try:
                yield json.loads(line)
            except json.JSONDecodeError:
                continue  # a library printed something of its own


def _last_words(log: Path) -> str:
    lines = [line for line in log.read_text(errors="replace").splitlines() if line.strip()]
    return lines[-1] if lines else "it said nothing"
