"""A run folder, read back into memory.

Grid arrays are (ny, nx) with row 0 in the SOUTH and column 0 in the WEST, as in posterior.nc; only the writers of
north-up rasters flip rows. Coordinates are metres in the study CRS.
"""

import json
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
_PARTS = ("posterior", "sample_stats", "observed_data", "constant_data", "space_use")
_TEXT_COLUMNS = ("parameter", "unit")


@dataclass(frozen=True)
class Contents:
    """What a run folder holds, without the parts that no report needs (prior draws, log-likelihood)."""

    folder: Path
    facts: dict[str, Any]
    parameters: pd.DataFrame
    posterior: xr.Dataset
    sample_stats: xr.Dataset
    observed: xr.Dataset
    constant: xr.Dataset
    space_use: xr.Dataset

    @cached_property
    def groups(self) -> list[str]:
        """Group names in the order of posterior.nc."""
        return [str(name) for name in self.space_use["group"].values]

    @cached_property
    def layers(self) -> list[str]:
        """Layer names in the order of posterior.nc."""
        return [str(name) for name in self.constant["layer"].values] if "layer_value" in self.constant else []

    @cached_property
    def isopleths(self) -> list[int]:
        """Isopleths in percent, ascending."""
        return sorted(int(value) for value in self.space_use["isopleth"].values)

    @cached_property
    def x_m(self) -> Float[NDArray, " nx"]:
        """Cell centres, west to east [m]."""
        return np.asarray(self.space_use["x"].values, dtype=float)

    @cached_property
    def y_m(self) -> Float[NDArray, " ny"]:
        """Cell centres, south to north [m]."""
        return np.asarray(self.space_use["y"].values, dtype=float)

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


def read_contents(folder: Path) -> Contents:
    """Read a run folder.

    Args:
        folder: holds posterior.nc, run.json and tables/parameters.csv.

    Raises:
        StudyError: a file is missing, of another format, or does not fit the others.
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
    parts = _read_posterior(folder / "posterior.nc")
    run = Contents(folder, facts, _read_parameters(folder / "tables" / "parameters.csv"), *parts)
    _check_grid(run)
    return run


def _read_posterior(file: Path) -> list[xr.Dataset]:
    with xr.open_datatree(file, engine="h5netcdf") as tree:
        missing = [part for part in _PARTS if part not in tree.children]
        if missing:
            raise StudyError(f"{file} has no group {missing[0]}, expected {', '.join(_PARTS)}: fit again.")
        return [tree[part].to_dataset().load() for part in _PARTS]


def _read_parameters(file: Path) -> pd.DataFrame:
    """The table with text kept as text: a group named NA is a name, a unit of 1 is no number."""
    table = pd.read_csv(file, dtype={name: str for name in _TEXT_COLUMNS}, keep_default_na=False, encoding="utf-8")
    for name in table.columns.difference(list(_TEXT_COLUMNS)):
        table[name] = pd.to_numeric(table[name].replace("", np.nan))
    return table


def _check_grid(run: Contents) -> None:
    file = run.folder / "posterior.nc"
    for name, centres in (("x", run.x_m), ("y", run.y_m)):
        if centres.size > 1 and not np.allclose(np.diff(centres), run.cell_m, rtol=1e-6):
            raise StudyError(
                f"{file}: space_use/{name} must ascend in steps of cell_m = {run.cell_m:g} m (run.json), "
                f"got first steps {np.diff(centres)[:3].tolist()}: the two files are not of one fit; fit again."
            )
    if run.habitable.shape != (run.y_m.size, run.x_m.size):
        raise StudyError(
            f"{file}: constant_data/habitable has shape {run.habitable.shape}, expected "
            f"{(run.y_m.size, run.x_m.size)} as in space_use: fit again."
        )
