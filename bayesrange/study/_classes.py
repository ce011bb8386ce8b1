"""Layers of integer classes (land cover): the commonest class of each cell, as contrasts with a reference class.

A contrast is 1 where its class takes most of the cell and 0 elsewhere, never standardised, so that its parameter
compares use of that class with use of the reference.
"""

import numpy as np
import pyproj
from jaxtyping import Float
from numpy.typing import NDArray

from bayesrange._errors import StudyError
from bayesrange.study._grid import Frame
from bayesrange.study._layer_keys import class_names
from bayesrange.study._raster import Raster, commonest_in_cells
from bayesrange.study._tables import counted, first_few


def classes_on_cells(
    raster: Raster, classes: dict[str, str], frame: Frame, crs: pyproj.CRS, where: str
) -> Float[NDArray, "ny nx"]:
    """Position of the commonest class of each cell in `class_names`; −2 − k for the k-th code that has no name.

    Codes of one name count together. NaN where the raster has no data.

    Raises:
        StudyError: values that are no whole numbers.
    """
    known = ~np.isnan(raster.values)
    found, position = np.unique(raster.values[known], return_inverse=True)
    if (found != np.round(found)).any():
        broken = found[found != np.round(found)][0]
        raise StudyError(
            f"{where}: the raster holds {broken:g}, which is no whole number and so no class; "
            "take classes out of the study file, or name the raster of classes."
        )
    names = class_names(classes)
    numbers = {int(code): float(names.index(name)) for code, name in classes.items()}
    coded = np.array([numbers.get(int(code), -2.0 - k) for k, code in enumerate(found)])
    values = np.full(raster.values.shape, np.nan)
    if found.size:
        values[known] = coded[position.ravel()]
    return commonest_in_cells(raster.with_values(values), frame, crs)


def codes_without_name(
    raster: Raster, cells: Float[NDArray, "ny nx"], inside: NDArray[np.bool_], where: str
) -> str | None:
    """A sentence on codes that no class names and that are the commonest in cells inside the area."""
    own, count = np.unique(cells[inside & (cells < 0)], return_counts=True)
    if not own.size:
        return None
    found = np.unique(raster.values[~np.isnan(raster.values)])
    told = first_few(
        f"{int(found[int(-2 - k)])} in {counted(int(n), 'cell', 'cells')}" for k, n in zip(own, count, strict=True)
    )
    return (
        f"{where}: the raster holds classes that are not among those in the study file: {told}; "
        "name them in classes, or mark them as no data."
    )


def contrasts(
    cells: Float[NDArray, "ny nx"], classes: dict[str, str], reference: str
) -> dict[str, Float[NDArray, "ny nx"]]:
    """Every class but the reference, in the order of the study file: 1 where it is the commonest, else 0."""
    return {
        name: np.where(np.isnan(cells), np.nan, (cells == k).astype(float))
        for k, name in enumerate(class_names(classes))
        if name != reference
    }


def absent_class(cells: Float[NDArray, "ny nx"], inside: NDArray[np.bool_], classes: dict[str, str]) -> str | None:
    """The first class that is the commonest in no cell inside the area."""
    return next((name for k, name in enumerate(class_names(classes)) if not (cells[inside] == k).any()), None)
