"""A whole fit of memory: 20 animals × 2,000 fixes, hierarchical, or one animal alone; minutes, memory, compiling.

    python benchmarks/memory_fit.py [--animals 20] [--fixes 2000] [--nodes 64]
    python benchmarks/memory_fit.py --animals 1 --fixes 1500

From the study file to parameters.csv and report, in a process of its own with a compile cache that is empty at first;
with --again the same once more, now with the cache. Two chains of 300 + 500.
"""

import argparse
import json
import os
import resource
import subprocess
import sys
import tempfile
import time
from pathlib import Path

from _case import machine, say
from _tracks import TRUTH, write_tracks

SEED = 5


def main() -> None:
    options = argparse.ArgumentParser()
    for name, default in (("animals", 20), ("fixes", 2000), ("nodes", 64)):
        options.add_argument(f"--{name}", type=int, default=default)
    options.add_argument("--again", action="store_true")
    given = options.parse_args()
    say(**machine())
    with tempfile.TemporaryDirectory() as folder:
        study, alone = Path(folder) / "study", given.animals < 3
        write_tracks(
            study, given.animals, given.fixes, spread=0.0 if alone else 1.0, seed=SEED, nodes=given.nodes,
            pooling="individual" if alone else "hierarchical",
        )  # fmt: skip
        environment = {**os.environ, "XDG_CACHE_HOME": os.path.join(folder, "cache")}
        for turn in range(2 if given.again else 1):
            out = Path(folder) / f"run-{turn}"
            command = [sys.executable, "-m", "bayesrange", "fit", str(study), "--out", str(out)]
            begun = time.perf_counter()
            status = subprocess.run(command, env=environment, stdout=subprocess.DEVNULL).returncode
            _tell(out, status, (time.perf_counter() - begun) / 60, turn)


def _tell(out: Path, status: int, minutes: float, turn: int) -> None:
    info = json.loads((out / "run.json").read_text())
    found = info["diagnostics"]
    parent_gib = resource.getrusage(resource.RUSAGE_CHILDREN).ru_maxrss / 2**20
    transitions = 2 * info["sampling"]["draws"]
    say(
        cache="empty" if turn == 0 else "filled", status=status, minutes=minutes, converged=info["converged"],
        worker_gib=info["worker_gib"], largest_process_gib=parent_gib, gradient_s=info["times"]["gradient_s"],
        gradients_per_draw=found["gradients"] / transitions, divergences=found["divergences"],
        max_rhat=found["max_rhat"], min_ess=min(found["min_ess_bulk"], found["min_ess_tail"]),
        columns=info["memory"]["columns"], nodes=info["memory"]["nodes"], trace_error=info["memory"]["trace_error"],
        largest_quadrature_shift=max(map(abs, info["memory"]["quadrature_shift"].values())),
    )  # fmt: skip
    if info["card"]["pooling"] == "hierarchical":
        import pandas as pd

        table = pd.read_csv(out / "tables" / "parameters.csv").set_index("parameter")
        z = {name: (table.loc[name, "mean"] - truth) / table.loc[name, "sd"] for name, truth in TRUTH.items()}
        say(population_z={name: round(float(value), 2) for name, value in z.items()})


if __name__ == "__main__":
    main()
