"""Map layers on the grid: rasters averaged, classes as contrasts, distances to features; and no-go ground.

No-data pixels count neither in an average nor as no-go. A layer has a value in every cell inside the area, or the
user has said from how far one may be borrowed.
"""

from dataclasses import dataclass
from pathlib import Path
from typing import NamedTuple

import numpy as np
import pyproj
from jaxtyping import Bool, Float
from numpy.typing import NDArray
from rasterio.warp import Resampling

from bayesrange._errors import StudyError
from bayesrange.study._classes import absent_class, classes_on_cells, contrasts
from bayesrange.study._distance import distance_to_features
from bayesrange.study._grid import SUB, Frame, Grid
from bayesrange.study._missing import fill_nearest, missing_cells
from bayesrange.study._raster import onto_cells, read_raster, warp
from bayesrange.study._settings import LayerSection
from bayesrange.study._tables import counted


@dataclass(frozen=True)
class Layer:
    """A map layer on the grid.

    Attributes:
        name: as in the study file; a contrast of classes is called `cover=wood`.
        values: mean over the cell in raw units; NaN where the cell is not inside. Of a contrast 1 where its class
            takes most of the cell, else 0.
        unit: as in the study file; "m" of a distance.
        file: as in the study file.
        section: the name of the section in the study file that it comes from.
        reference: the class that a contrast compares with; "" of other layers.
    """

    name: str
    values: Float[NDArray, "ny nx"]
    unit: str
    file: str
    section: str = ""
    reference: str = ""


class Reading(NamedTuple):
    """What a section of the study file gives: layers by name, what has to be said, and how many cells were filled."""

    layers: dict[str, Layer]
    said: list[str]
    filled: int


def read_layer(folder: Path, name: str, entry: LayerSection, grid: Grid, wanted: bool) -> Reading:
    """The layer or contrasts of one section `[layers.NAME]` on the grid.

    Pixels smaller than a cell are averaged over the cell (classes: the commonest is taken), others are read
    bilinearly at its centre (classes: the nearest): a raster on exactly the grid's cells passes unchanged.

    Args:
        folder: where the study file is.
        name: the section's name.
        entry: its keys.
        grid: the study's grid.
        wanted: whether the model uses it; then missing cells and a constant layer are errors, else remarks.

    Raises:
        StudyError: unreadable, no reference system, no overlap, and what `wanted` adds.
    """
    file = entry.distance or entry.file or ""
    where = f"[layers.{name}] {file}"
    values, problem, said = _values(folder, file, entry, grid, where)
    filled, count = None, 0
    if entry.fill is not None and entry.fill_within_m is not None:
        filled, count, farthest_m = fill_nearest(values, grid, entry.fill_within_m)
        if count:
            said.append(
                f"{where}: {counted(count, 'cell', 'cells')} inside the area had no value and took that of the "
                f"nearest cell, at most {farthest_m:.0f} m away."
            )
    missing = missing_cells(values, grid, filled)
    values = values if filled is None else filled
    problem = problem or (f"{where}: {missing}" if missing else None) or _nothing_to_learn(values, grid, entry, where)
    if problem and wanted:
        raise StudyError(problem)
    values = np.where(grid.inside, values, np.nan)
    return Reading(_as_layers(name, values, file, entry), said + ([problem] if problem else []), count)


def no_go_sub_cells(path: Path, entry: LayerSection, frame: Frame, crs: pyproj.CRS) -> Bool[NDArray, "rows columns"]:
    """Sub-cells (row 0 south) whose nearest pixel is above 0; ground off the raster is not no-go.

    Raises:
        StudyError: unreadable, no reference system, no overlap.
    """
    raster = read_raster(path, entry.file or "", frame, crs, entry.band)
    values = warp(raster, frame, crs, SUB, Resampling.nearest)
    return np.nan_to_num(values, nan=0.0) > 0


def _values(
    folder: Path, file: str, entry: LayerSection, grid: Grid, where: str
) -> tuple[Float[NDArray, "ny nx"], str | None, list[str]]:
    """Values on every cell of the grid, inside or not (of classes their positions), what is wrong, and remarks."""
    frame = Frame(grid.west_m, grid.south_m, grid.cell_m, *grid.shape)
    if entry.distance is not None:
        distance, said = distance_to_features(folder / file, file, entry.table, frame, grid.crs, entry.cap_m)
        return distance, None, said
    raster = read_raster(folder / file, file, frame, grid.crs, entry.band)
    if entry.classes is None:
        return onto_cells(raster, frame, grid.crs), None, []
    return *classes_on_cells(raster, entry.classes, grid, where), []


def _nothing_to_learn(values: Float[NDArray, "ny nx"], grid: Grid, entry: LayerSection, where: str) -> str | None:
    found = values[grid.inside]
    if entry.classes is not None:
        absent = absent_class(values, grid.inside, entry.classes)
        if absent is None:
            return None
        return (
            f'{where}: the class "{absent}" takes most of no cell inside the area, so nothing can be learnt about it; '
            "take it out of classes, or give it and another class one name."
        )
    if np.ptp(found) > 1e-9 * np.abs(found).max():
        return None
    return (
        f"{where}: every cell inside the area has the value {found[0]:g}, so nothing can be learnt from it; "
        "take it out of [model] layers."
    )


def _as_layers(name: str, values: Float[NDArray, "ny nx"], file: str, entry: LayerSection) -> dict[str, Layer]:
    if entry.classes is None or entry.reference is None:
        unit = entry.unit or ("m" if entry.distance is not None else "")
        return {name: Layer(name, values, unit, file, name)}
    parts = contrasts(values, entry.classes, entry.reference)
    return {
        f"{name}={part}": Layer(f"{name}={part}", own, "", file, name, entry.reference) for part, own in parts.items()
    }
