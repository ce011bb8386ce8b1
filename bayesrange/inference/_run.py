"""A finished run: its folder, read lazily."""

import json
from functools import cached_property
from pathlib import Path
from typing import Any

import pandas as pd
import xarray as xr

from bayesrange._errors import StudyError


class Run:
    """A run folder.

    Args:
        folder: what `fit` wrote.

    Attributes:
        folder: the folder.
    """

    def __init__(self, folder: Path) -> None:
        self.folder = folder

    @cached_property
    def info(self) -> dict[str, Any]:
        """run.json."""
        return json.loads((self.folder / "run.json").read_text(encoding="utf-8"))

    @property
    def converged(self) -> bool:
        """Whether every convergence gate was passed."""
        return bool(self.info["converged"])

    @cached_property
    def posterior(self) -> xr.DataTree:
        """posterior.nc: an ArviZ DataTree with posterior, prior, sample_stats, log_likelihood and more."""
        return xr.open_datatree(self.folder / "posterior.nc", engine="h5netcdf")

    @cached_property
    def parameters(self) -> pd.DataFrame:
        """tables/parameters.csv."""
        return pd.read_csv(self.folder / "tables" / "parameters.csv")

    def __repr__(self) -> str:
        return f"Run({str(self.folder)!r})"


def open_run(folder: str | Path) -> Run:
    """Open a run folder.

    Raises:
        StudyError: the folder holds no finished run.
    """
    folder = Path(folder)
    if not (folder / "run.json").is_file():
        unfinished = (folder / "checkpoints").is_dir()
        hint = (
            "it is unfinished; `bayesrange fit` with the same study goes on with it"
            if unfinished
            else "give the folder that `bayesrange fit` wrote"
        )
        raise StudyError(f"{folder}: no finished run here; {hint}.")
    return Run(folder)
