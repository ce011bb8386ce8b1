"""What every run folder holds, whatever its card, and how its files are read.

Grid arrays are (ny, nx) with row 0 in the SOUTH and column 0 in the WEST, as in posterior.nc; only the writers of
north-up rasters flip rows. Coordinates are metres in the study CRS.
"""

import json
from abc import ABC, abstractmethod
from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pyproj
import xarray as xr
from affine import Affine
from jaxtyping import Bool, Float
from numpy.typing import NDArray

from bayesrange._errors import StudyError

FORMAT = 1
_TEXT_COLUMNS = ("parameter", "unit")


@dataclass(frozen=True)
class RunContents(ABC):
    """What a run folder holds, without the parts that no report needs (prior draws, log-likelihood)."""

    folder: Path
    facts: dict[str, Any]
    parameters: pd.DataFrame
    posterior: xr.Dataset
    sample_stats: xr.Dataset
    observed: xr.Dataset
    constant: xr.Dataset

    @property
    @abstractmethod
    def grid(self) -> xr.Dataset:
        """The group of posterior.nc whose x and y are the cell centres."""

    @abstractmethod
    def whose(self, base: str, inner: str) -> tuple[str, str | None]:
        """What a table's name `base[inner]` is a parameter of: the parameter, and the group or animal, or None."""

    @cached_property
    def layers(self) -> list[str]:
        """Names of the mapped layers in the order of posterior.nc."""
        return [str(name) for name in self.constant["layer"].values] if "layer_value" in self.constant else []

    @cached_property
    def x_m(self) -> Float[NDArray, " nx"]:
        """Cell centres, west to east [m]."""
        return np.asarray(self.grid["x"].values, dtype=float)

    @cached_property
    def y_m(self) -> Float[NDArray, " ny"]:
        """Cell centres, south to north [m]."""
        return np.asarray(self.grid["y"].values, dtype=float)

    @property
    def cell_m(self) -> float:
        """Cell edge [m]."""
        return float(self.facts["cell_m"])

    @property
    def crs(self) -> pyproj.CRS:
        """The study's CRS, in metres."""
        return pyproj.CRS.from_user_input(self.facts["crs"])

    @cached_property
    def habitable(self) -> Float[NDArray, "ny nx"]:
        """Share of each cell that animals can use, 0 to 1."""
        return np.nan_to_num(np.asarray(self.constant["habitable"].values, dtype=float))

    @property
    def inside(self) -> Bool[NDArray, "ny nx"]:
        """True where a cell holds any habitable ground."""
        return self.habitable > 0

    @property
    def north_up(self) -> Affine:
        """Transform of a raster whose first row is the northernmost [m]."""
        half = self.cell_m / 2
        return Affine(self.cell_m, 0.0, self.x_m[0] - half, 0.0, -self.cell_m, self.y_m[-1] + half)

    @cached_property
    def prob(self) -> float:
        """Share of the posterior that every interval holds, equal tails."""
        given = self.parameters["prob"].dropna() if "prob" in self.parameters else pd.Series(dtype=float)
        return float(given.iloc[0]) if len(given) else 0.9


def read_facts(folder: Path) -> dict[str, Any]:
    """run.json of a finished run.

    Raises:
        StudyError: a file of the run is missing, or it is of another format.
    """
    for name in ("run.json", "posterior.nc", "tables/parameters.csv"):
        if not (folder / name).is_file():
            raise StudyError(
                f"{folder} has no {name}: a report needs a run folder that `bayesrange fit` has finished; "
                "run the same fit again and it resumes."
            )
    facts = json.loads((folder / "run.json").read_text(encoding="utf-8"))
    if facts.get("format") != FORMAT:
        raise StudyError(
            f"{folder / 'run.json'} has format {facts.get('format')!r}, expected {FORMAT}: make the report with the "
            "version of bayesrange that made the fit, or fit again."
        )
    return facts


def is_memory(facts: dict[str, Any]) -> bool:
    """Whether a run is of a memory card (its nulls included), and not of a range card."""
    return facts["card"].get("kind", "range") == "memory"


def read_groups(file: Path, wanted: Sequence[str], optional: Sequence[str] = ()) -> list[xr.Dataset | None]:
    """Groups of posterior.nc, None for an optional one that is not there.

    Raises:
        StudyError: a wanted group is missing.
    """
    with xr.open_datatree(file, engine="h5netcdf") as tree:
        missing = [part for part in wanted if part not in tree.children]
        if missing:
            raise StudyError(f"{file} has no group {missing[0]}, expected {', '.join(wanted)}: fit again.")
        parts = (*wanted, *optional)
        return [tree[part].to_dataset().load() if part in tree.children else None for part in parts]


def read_parameters(file: Path) -> pd.DataFrame:
    """The table with text kept as text: a group named NA is a name, a unit of 1 is no number."""
    table = pd.read_csv(file, dtype={name: str for name in _TEXT_COLUMNS}, keep_default_na=False, encoding="utf-8")
    for name in table.columns.difference(list(_TEXT_COLUMNS)):
        table[name] = pd.to_numeric(table[name].replace("", np.nan))
    return table


def check_grid(run: RunContents, part: str) -> None:
    """Cell centres must be those of run.json's cell edge, and the habitable ground on the same grid.

    Args:
        run: what was read.
        part: name of the group that `run.grid` is, for the error sentence.

    Raises:
        StudyError: they are not.
    """
    file = run.folder / "posterior.nc"
    for name, centres in (("x", run.x_m), ("y", run.y_m)):
        if centres.size > 1 and not np.allclose(np.diff(centres), run.cell_m, rtol=1e-6):
            raise StudyError(
                f"{file}: {part}/{name} must ascend in steps of cell_m = {run.cell_m:g} m (run.json), "
                f"got first steps {np.diff(centres)[:3].tolist()}: the two files are not of one fit; fit again."
            )
    if run.habitable.shape != (run.y_m.size, run.x_m.size):
        raise StudyError(
            f"{file}: constant_data/habitable has shape {run.habitable.shape}, expected "
            f"{(run.y_m.size, run.x_m.size)} as in {part}: fit again."
        )
