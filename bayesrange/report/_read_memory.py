"""A run folder of a memory card, or of one of its nulls without memory, read back into memory."""

from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import xarray as xr

from bayesrange.report._contents import RunContents, check_grid, read_facts, read_groups, read_parameters

NEW = "new animal"
_PARTS = ("posterior", "sample_stats", "observed_data", "constant_data")


@dataclass(frozen=True)
class MemoryContents(RunContents):
    """What the run folder of a memory card holds; `memory_use` is None for a card without memory."""

    memory_use: xr.Dataset | None

    @property
    def grid(self) -> xr.Dataset:
        """The constant data, whose x and y are the cell centres."""
        return self.constant

    @cached_property
    def animals(self) -> list[str]:
        """Animals in the order of posterior.nc."""
        return [str(name) for name in self.constant["animal"].values]

    @cached_property
    def responses(self) -> list[str]:
        """What selection is estimated for: the layers, or each layer by part of the day ("forage, night")."""
        return [str(name) for name in self.posterior["layer"].values] if "selection" in self.posterior else []

    @cached_property
    def harmonics(self) -> list[str]:
        """Waves of the daily rhythm of step length, if it has one."""
        return [str(name) for name in self.posterior["harmonic"].values] if "harmonic" in self.posterior else []

    @property
    def numerics(self) -> dict[str, Any]:
        """What run.json says of steps, quadrature and traces."""
        return self.facts["memory"]

    @property
    def has_memory(self) -> bool:
        """Whether the card has memory: its nulls have none."""
        return "reference_decay" in self.posterior or "working_decay" in self.posterior

    @property
    def hierarchical(self) -> bool:
        """Whether animals come from one population; otherwise each was fitted alone."""
        return self.facts["card"].get("pooling") == "hierarchical"

    @property
    def lone(self) -> bool:
        """Whether there is one animal only, fitted alone: its parameters then need no table for each."""
        return len(self.animals) == 1 and not self.hierarchical

    @cached_property
    def fixes(self) -> pd.DataFrame:
        """All fixes in the order of time: animal, time, x_km, y_km."""
        given = self.constant
        table = pd.DataFrame(
            {
                "animal": given["fix_animal"].values.astype(str),
                "time": pd.to_datetime(given["fix_time"].values),
                "x_km": np.asarray(given["fix_x"].values, dtype=float) / 1e3,
                "y_km": np.asarray(given["fix_y"].values, dtype=float) / 1e3,
            }
        )
        return table.sort_values("time", kind="stable", ignore_index=True)

    def whose(self, base: str, inner: str) -> tuple[str, str | None]:
        """The parameter and the animal: `step_shape[A1]` is one animal's, `selection[forage]` none's.

        Names of layers and animals are looked up, not split at the comma, which may be part of a name.
        """
        if self.lone:
            return base, None
        parts = {"selection": self.responses, "step_rhythm": self.harmonics}.get(base, [])
        if not inner or inner in parts:
            return base, None
        for part in parts:
            one = inner.removeprefix(part + ", ")
            if one != inner and self._is_animal(one):
                return f"{base}[{part}]", one
        return (base, inner) if self._is_animal(inner) else (base, None)

    def _is_animal(self, name: str) -> bool:
        return name in self.animals or name == NEW


def read_memory(folder: Path, facts: dict[str, Any] | None = None) -> MemoryContents:
    """Read the run folder of a memory card.

    Args:
        folder: holds posterior.nc, run.json and tables/parameters.csv.
        facts: run.json, if it has been read already.

    Raises:
        StudyError: a file is missing, of another format, or does not fit the others.
    """
    facts = read_facts(folder) if facts is None else facts
    parts = read_groups(folder / "posterior.nc", _PARTS, optional=("memory_use",))
    run = MemoryContents(folder, facts, read_parameters(folder / "tables" / "parameters.csv"), *parts)
    check_grid(run, "constant_data")
    return run
