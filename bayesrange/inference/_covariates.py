"""Covariates of groups or animals as numbers."""

import numpy as np
import pandas as pd

from bayesrange._errors import StudyError


def code_columns(
    columns: dict[str, pd.Series], units: list[str], unit: str, where: str
) -> list[tuple[str, np.ndarray]]:
    """Covariates as (name, value per unit), each with mean 0 over the units.

    A number is standardised; a text column becomes one contrast for each level but the first in alphabetical order.

    Args:
        columns: by name, one value a unit; text that is all numbers counts as numbers.
        units: names of the groups or animals.
        unit: "group" or "animal".
        where: file and key, for the error sentence.

    Raises:
        StudyError: a column that is empty in places, not finite, or constant.
    """
    coded: list[tuple[str, np.ndarray]] = []
    for name, column in columns.items():
        if column.isna().any():
            first = units[int(np.flatnonzero(column.isna())[0])]
            raise StudyError(f"{where}: column {name!r} of the {unit}s table is empty for {unit} {first!r}.")
        if column.nunique() < 2:
            raise StudyError(f"{where}: column {name!r} of the {unit}s table has the same value for every {unit}.")
        numbers = column if column.dtype.kind in "iuf" else pd.to_numeric(column, errors="coerce")
        if column.dtype.kind in "iuf" or numbers.notna().all():
            values = numbers.to_numpy(float)
            if not np.isfinite(values).all():
                raise StudyError(f"{where}: column {name!r} of the {unit}s table holds a number that is not finite.")
            coded.append((name, (values - values.mean()) / values.std()))
            continue
        for level in sorted(column.astype(str).unique())[1:]:
            indicator = (column.astype(str) == level).to_numpy(float)
            coded.append((f"{name}={level}", indicator - indicator.mean()))
    return coded
