"""Surfaces of what each animal remembers, and their GeoTIFFs: one an animal.

A surface may be coarser than the grid of the layers where that is fine; its cells then span several of the grid's.
"""

from dataclasses import dataclass

import numpy as np
from affine import Affine
from jaxtyping import Bool, Float
from numpy.typing import NDArray

from bayesrange.report._raster import safe_names, write_raster
from bayesrange.report._read_memory import MemoryContents

BANDS = ("recall of the long memory, posterior mean", "recall of the long memory, posterior sd")
UNIT = "1"


@dataclass(frozen=True)
class Surface:
    """Cells of the recall surfaces: centres [m], edge [m], and where they hold habitable ground."""

    x_m: Float[NDArray, " nx"]
    y_m: Float[NDArray, " ny"]
    cell_m: float
    inside: Bool[NDArray, "ny nx"]

    @property
    def north_up(self) -> Affine:
        """Transform of a raster whose first row is the northernmost [m]."""
        half = self.cell_m / 2
        return Affine(self.cell_m, 0.0, self.x_m[0] - half, 0.0, -self.cell_m, self.y_m[-1] + half)

    @property
    def extent_km(self) -> tuple[float, float, float, float]:
        """West, east, south, north [km]."""
        half, x, y = self.cell_m / 2, self.x_m, self.y_m
        return tuple(float(end) / 1e3 for end in (x[0] - half, x[-1] + half, y[0] - half, y[-1] + half))


def surface(run: MemoryContents) -> Surface | None:
    """The cells of the recall surfaces; None for a card without memory."""
    if run.memory_use is None or "recall_mean" not in run.memory_use:
        return None
    x, y = (np.asarray(run.memory_use[axis].values, dtype=float) for axis in ("x", "y"))
    cell = float(np.diff(x)[0]) if x.size > 1 else float(np.diff(y)[0]) if y.size > 1 else run.cell_m
    inside = np.zeros((y.size, x.size), dtype=bool)
    row, column = np.nonzero(run.inside)
    down = np.floor((run.y_m[row] - (y[0] - cell / 2)) / cell).astype(int)
    across = np.floor((run.x_m[column] - (x[0] - cell / 2)) / cell).astype(int)
    within = (down >= 0) & (down < y.size) & (across >= 0) & (across < x.size)
    inside[down[within], across[within]] = True
    return Surface(x, y, cell, inside)


def recall(run: MemoryContents, cells: Surface, animal: str, part: str) -> Float[NDArray, "ny nx"]:
    """`recall_mean` or `recall_sd` of an animal, NaN where there is no habitable ground."""
    values = run.memory_use[part].sel(animal=animal).transpose("y", "x").values
    return np.where(cells.inside, values, np.nan)


def recall_files(run: MemoryContents) -> dict[str, str]:
    """The GeoTIFF of each animal, relative to the run folder; none for a card without memory."""
    if surface(run) is None:
        return {}
    return {name: f"maps/recall_{stem}.tif" for name, stem in zip(run.animals, safe_names(run.animals), strict=True)}


def write_recall(run: MemoryContents) -> None:
    """Write each animal's recall at its last fix, 0 to 1: band 1 the posterior mean, band 2 the posterior sd."""
    cells = surface(run)
    for animal, name in recall_files(run).items():
        bands = [recall(run, cells, animal, part) for part in ("recall_mean", "recall_sd")]
        write_raster(run, run.folder / name, np.stack(bands), BANDS, UNIT, {"animal": animal}, cells.north_up)
