"""Is any parameter of the memory card biased? 20 simulated animals, each fitted alone, against their true values.

    python benchmarks/memory_bias.py [--animals 20] [--fixes 1500] [--seed 11]

Each animal is a data set of its own with the same true values; the seed is fixed before the fit. For each parameter:
mean of (posterior mean − truth) / posterior sd over the animals with its standard error, and how many 90 % intervals
hold the truth. A shift can be the prior's: compare the rows with the prior's own pull (a decay time longer than the
record is pulled to its prior). Calibration with parameters drawn from the prior settles it; this is a first look.
"""

import argparse
import tempfile
from pathlib import Path

import numpy as np
from _case import machine, say
from _tracks import TRUTH, write_tracks
from scipy.stats import binom

import bayesrange


def main() -> None:
    options = argparse.ArgumentParser()
    for name, default in (("animals", 20), ("fixes", 1500), ("seed", 11)):
        options.add_argument(f"--{name}", type=int, default=default)
    given = options.parse_args()
    say(**machine())
    with tempfile.TemporaryDirectory() as folder:
        write_tracks(Path(folder), given.animals, given.fixes, seed=given.seed)
        run = bayesrange.fit(folder)
        table = run.parameters.set_index("parameter")
        say(converged=run.converged, divergences=run.info["diagnostics"]["divergences"], **run.info["times"])
    low, high = binom.interval(0.95, given.animals, 0.9)
    for name, truth in TRUTH.items():
        rows = [table.loc[_of(name, f"A{k + 1}")] for k in range(given.animals)]
        z = np.array([(row["mean"] - truth) / row["sd"] for row in rows])
        middle = np.array([(row["median"] / truth) for row in rows])
        inside = sum(row["lower"] <= truth <= row["upper"] for row in rows)
        say(
            parameter=name, truth=truth, mean_z=float(z.mean()), standard_error=float(z.std(ddof=1) / np.sqrt(z.size)),
            largest_z=float(np.abs(z).max()), median_over_truth=float(np.median(middle)),
            inside=f"{inside} of {given.animals}", by_chance=f"{int(low)} to {int(high)}",
        )  # fmt: skip


def _of(name: str, animal: str) -> str:
    return f"{name[:-1]}, {animal}]" if name.endswith("]") else f"{name}[{animal}]"


if __name__ == "__main__":
    main()
