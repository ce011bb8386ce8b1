"""How long does a fit wait for the compiler: the first time, for each chain after it, and in the next run?

    python benchmarks/compile_time.py

Each is a worker process of its own, as in a fit, on the bundled study with a compile cache that is empty at first.
Seconds are of whole processes; the import of the libraries is in them and given apart.
"""

import json
import os
import subprocess
import sys
import tempfile
import time
from pathlib import Path

from _case import machine, say

from bayesrange._resources import demo_folder
from bayesrange.inference._fit import prepare
from bayesrange.inference._processes import worker_environment
from bayesrange.inference._task import save_task
from bayesrange.study import read_study


def seconds(command: list[str], environment: dict[str, str]) -> tuple[float, list[dict]]:
    begun = time.perf_counter()
    done = subprocess.run(command, env=environment, capture_output=True, text=True, check=True)
    return time.perf_counter() - begun, [json.loads(line) for line in done.stdout.splitlines()]


def main() -> None:
    say(**machine())
    prepared = prepare(read_study(demo_folder()))
    with tempfile.TemporaryDirectory() as folder:
        save_task(Path(folder), prepared.task)
        environment = worker_environment() | {"JAX_COMPILATION_CACHE_DIR": os.path.join(folder, "cache")}
        imports = "import jax, numpyro, bayesrange.spaceuse"
        loading, _ = seconds([sys.executable, "-c", imports], environment)
        loading, _ = seconds([sys.executable, "-c", imports], environment)
        worker = [sys.executable, "-m", "bayesrange.inference._worker", folder, "start"]
        first, _ = seconds(worker, environment)
        second, _ = seconds(worker, environment)
        say(
            imports_s=round(loading, 1), first_run_s=round(first, 1), next_run_s=round(second, 1),
            compile_s=round(first - second, 1),
        )  # fmt: skip


if __name__ == "__main__":
    main()
