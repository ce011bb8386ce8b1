r"""How memory fades: the share of a visit that is left after a time, $e^{-t/\tau}$.

The share falls with time and grows with τ, so its quantiles are those of τ, put through the formula. Population and
animals are read from the draws; a new animal's τ stands in tables/parameters.csv only, as quantiles.
"""

from dataclasses import dataclass

import numpy as np
import pandas as pd
from jaxtyping import Float
from numpy.typing import NDArray

from bayesrange.report._parameters import split_name
from bayesrange.report._read_memory import NEW, MemoryContents

AFTER_H = {"1 day": 24.0, "1 week": 168.0, "1 month": 720.0}
"""The times of the table; a month has 30 days [h]."""

MEMORIES = {"reference": "reference_decay", "working": "working_decay"}
POPULATION, ANIMAL = "population", "animal"


@dataclass(frozen=True)
class Decay:
    """One decay time: which memory, whose, and the quantiles of τ [h]."""

    memory: str
    level: str
    animal: str
    lower_h: float
    median_h: float
    upper_h: float
    draws: Float[NDArray, " draws"] | None = None

    def shares(self, elapsed_h: Float[NDArray, " times"], prob: float) -> Float[NDArray, "3 times"]:
        """Lower end, median and upper end of the share that is left after each time."""
        tail = (1 - prob) / 2
        if self.draws is None:
            ends = np.array([self.lower_h, self.median_h, self.upper_h])
            return np.exp(-elapsed_h / ends[:, None])
        return np.quantile(np.exp(-elapsed_h / self.draws[:, None]), [tail, 0.5, 1 - tail], axis=0)


def decays(run: MemoryContents) -> list[Decay]:
    """Every decay time of a run: by memory, then population, new animal, each animal."""
    found = []
    for memory, name in MEMORIES.items():
        if f"{name}_population" in run.posterior:
            found.append(_of_draws(run, memory, POPULATION, "", run.posterior[f"{name}_population"].values))
        found += _new_animal(run, memory, name)
        if name in run.posterior:
            for animal in run.animals:
                values = run.posterior[name].sel(animal=animal).values
                found.append(_of_draws(run, memory, ANIMAL, animal, values))
    return found


def _of_draws(run: MemoryContents, memory: str, level: str, animal: str, values: NDArray) -> Decay:
    tail = (1 - run.prob) / 2
    draws = np.asarray(values, dtype=float).ravel()
    lower, median, upper = np.quantile(draws, [tail, 0.5, 1 - tail]).tolist()
    return Decay(memory, level, animal, lower, median, upper, draws)


def _new_animal(run: MemoryContents, memory: str, name: str) -> list[Decay]:
    rows = run.parameters[run.parameters["parameter"] == f"{name}[{NEW}]"]
    return [Decay(memory, NEW, "", row.lower, row.median, row.upper) for row in rows.itertuples()]


def decay_table(run: MemoryContents) -> pd.DataFrame:
    """One row a memory, level, animal and time.

    Columns: memory (reference or working), level (population, new animal or animal), animal (empty but for animals),
    elapsed_h [h], share_median, share_lower, share_upper (0 to 1), prob.
    """
    times = np.array(list(AFTER_H.values()))
    rows = []
    for one in decays(run):
        for elapsed, lower, median, upper in zip(times, *one.shares(times, run.prob), strict=True):
            rows.append((one.memory, one.level, one.animal, elapsed, median, lower, upper, run.prob))
    names = ["memory", "level", "animal", "elapsed_h", "share_median", "share_lower", "share_upper", "prob"]
    return pd.DataFrame(rows, columns=names)


def beyond_record(run: MemoryContents) -> dict[str, tuple[str, str, float, float]]:
    """Decay times whose interval passes the record, by their name in the table.

    Returns:
        Parameter, whose (empty for the population), upper end and record [h]. The population and a new animal are held
        against the longest record, an animal against its own.
    """
    records = {str(name): float(value) for name, value in run.numerics["record_h"].items()}
    found: dict[str, tuple[str, str, float, float]] = {}
    for row in run.parameters.itertuples():
        name = str(row.parameter)
        base, inner = split_name(name)
        if base not in MEMORIES.values() or name not in (base, f"{base}[{inner}]"):
            continue
        record = records.get(inner, max(records.values()))
        if float(row.upper) > record:
            found[name] = (base, inner, float(row.upper), record)
    return found
