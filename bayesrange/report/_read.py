"""A run folder of a range card, read back into memory."""

from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import Any

import xarray as xr

from bayesrange.report._contents import RunContents, check_grid, read_facts, read_groups, read_parameters

_PARTS = ("posterior", "sample_stats", "observed_data", "constant_data", "space_use")


@dataclass(frozen=True)
class Contents(RunContents):
    """What the run folder of a range card holds."""

    space_use: xr.Dataset

    @property
    def grid(self) -> xr.Dataset:
        """The space use, whose x and y are the cell centres."""
        return self.space_use

    @cached_property
    def groups(self) -> list[str]:
        """Group names in the order of posterior.nc."""
        return [str(name) for name in self.space_use["group"].values]

    @cached_property
    def isopleths(self) -> list[int]:
        """Isopleths in percent, ascending."""
        return sorted(int(value) for value in self.space_use["isopleth"].values)

    def whose(self, base: str, inner: str) -> tuple[str, str | None]:
        """The parameter and the group: `localising[North]` is one group's, `resource[earthworms]` none's.

        A layer's name is looked up, not split at the comma, which may be part of a name.
        """
        if not inner or (base == "resource" and inner in self.layers):
            return base, None
        for layer in self.layers if base == "resource" else ():
            if inner.startswith(layer + ", "):
                return f"{base}[{layer}]", inner.removeprefix(layer + ", ")
        return base, inner


def read_contents(folder: Path, facts: dict[str, Any] | None = None) -> Contents:
    """Read the run folder of a range card.

    Args:
        folder: holds posterior.nc, run.json and tables/parameters.csv.
        facts: run.json, if it has been read already.

    Raises:
        StudyError: a file is missing, of another format, or does not fit the others.
    """
    facts = read_facts(folder) if facts is None else facts
    parts = read_groups(folder / "posterior.nc", _PARTS)
    run = Contents(folder, facts, read_parameters(folder / "tables" / "parameters.csv"), *parts)
    check_grid(run, "space_use")
    return run
