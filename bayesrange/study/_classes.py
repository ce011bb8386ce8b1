"""Layers of integer classes (land cover): the commonest class of each cell, as contrasts with a reference class.

A contrast is 1 where its class takes most of the cell and 0 elsewhere, never standardised, so that its parameter
compares use of that class with use of the reference.
"""

import numpy as np
from jaxtyping import Float
from numpy.typing import NDArray

from bayesrange._errors import StudyError
from bayesrange.study._grid import Frame, Grid
from bayesrange.study._layer_keys import class_names
from bayesrange.study._raster import Raster, commonest_in_cells
from bayesrange.study._tables import counted, first_few

_AT_ONCE = 1_000_000  # pixels


def classes_on_cells(
    raster: Raster, classes: dict[str, str], grid: Grid, where: str
) -> tuple[Float[NDArray, "ny nx"], str | None]:
    """Position in `class_names` of the commonest class of each cell, and a sentence on numbers that have no name.

    Numbers of one name count together. NaN where the raster has no data, or where a number without a name is the
    commonest. The raster's own values are used up, so that a large one is not in memory twice.

    Raises:
        StudyError: values that are no whole numbers.
    """
    names = class_names(classes)
    position = {int(code): float(names.index(name)) for code, name in classes.items()}
    nameless: dict[int, float] = {}
    for rows in np.array_split(raster.values, max(raster.values.size // _AT_ONCE, 1)):  # views, changed in place
        found, at = np.unique(rows, return_inverse=True)
        known = found[~np.isnan(found)]
        if (known != np.round(known)).any():
            raise StudyError(
                f"{where}: the raster holds {known[known != np.round(known)][0]:g}, which is no whole number and so no "
                "class; take classes out of the study file, or name the raster of classes."
            )
        for code in known.astype(int).tolist():
            if code not in position:
                nameless.setdefault(code, -1.0 - len(nameless))
        numbers = position | nameless
        coded = np.array([np.nan if np.isnan(code) else numbers[int(code)] for code in found])
        rows[:] = coded[at].reshape(rows.shape)
    frame = Frame(grid.west_m, grid.south_m, grid.cell_m, *grid.shape)
    cells = commonest_in_cells(raster, frame, grid.crs)
    return np.where(cells < 0, np.nan, cells), _nameless(cells[grid.inside], nameless, where)


def _nameless(cells: Float[NDArray, " n"], nameless: dict[int, float], where: str) -> str | None:
    """A sentence on numbers that no class names and that are the commonest in cells inside the area."""
    counts = {code: int((cells == position).sum()) for code, position in nameless.items()}
    told = [f"{code} in {counted(n, 'cell', 'cells')}" for code, n in sorted(counts.items(), key=lambda c: -c[1]) if n]
    if not told:
        return None
    return (
        f"{where}: the raster holds classes that are not among those in the study file: {first_few(told)}; "
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
