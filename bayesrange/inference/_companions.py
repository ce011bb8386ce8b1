"""The animals table, and which of its animals travel together and count as one."""

import numpy as np
import pandas as pd

from bayesrange._errors import StudyError
from bayesrange.study import Study

TOGETHER_M, TOGETHER_SHARE, TOGETHER_FIXES = 100.0, 0.5, 30
"""Two animals travel together if this share of their simultaneous fixes, at least so many, lie within this distance."""
SIMULTANEOUS = 0.25
"""Fixes of two animals are simultaneous if they are this share of an interval apart, or less."""


def travelling_together(study: Study, interval_h: float) -> list[tuple[str, str, float]]:
    """Pairs of animals that travel together, and the share of their simultaneous fixes within 100 m.

    Only animals of one release batch are compared where the animals table says batches.
    """
    batch = animal_column(study, "release_batch")
    fixes = study.fixes.sort_values("time", kind="stable")
    own = {str(name): part[["time", "x", "y"]] for name, part in fixes.groupby("animal", sort=True)}
    names, found, near = list(own), [], pd.Timedelta(hours=SIMULTANEOUS * interval_h)
    for i, one in enumerate(names):
        for other in names[i + 1 :]:
            if batch is not None and batch[one] != batch[other]:
                continue
            both = pd.merge_asof(
                own[one], own[other], on="time", suffixes=("", "_other"), direction="nearest", tolerance=near
            ).dropna()
            if len(both) < TOGETHER_FIXES:
                continue
            share = float((np.hypot(both["x"] - both["x_other"], both["y"] - both["y_other"]) < TOGETHER_M).mean())
            if share > TOGETHER_SHARE:
                found.append((one, other, share))
    return found


def animal_column(study: Study, column: str) -> dict[str, str] | None:
    """A column of the animals table by animal; None where the table or the column is not there.

    Raises:
        StudyError: two deployments of one animal say different things.
    """
    table = study.deployments
    if table is None or column not in table.columns:
        return None
    found: dict[str, str] = {}
    for animal, cells in table.groupby("animal")[column]:
        said = sorted({str(cell).strip() for cell in cells} - {"", "nan"})
        if len(said) > 1:
            raise StudyError(
                f'{animals_file(study)}: the animal "{animal}" has more than one {column} ({", ".join(said)}); mend it.'
            )
        found[str(animal)] = said[0] if said else ""
    return found


def animals_file(study: Study) -> str:
    """What the user calls the animals table."""
    section = study.settings.animals
    return str(section.file) if section is not None else "animals"


def units_of(names: list[str], together: list[tuple[str, str, float]]) -> list[list[int]]:
    """Clusters of animals that are linked by travelling together."""
    unit = list(range(len(names)))
    for one, other, _ in together:
        a, b = unit[names.index(one)], unit[names.index(other)]
        unit = [min(a, b) if u in (a, b) else u for u in unit]
    return [[i for i, u in enumerate(unit) if u == k] for k in sorted(set(unit))]


def said_of_together(together: list[tuple[str, str, float]], once: bool) -> list[str]:
    """Who travels with whom, and how they count."""
    if not together:
        return []
    pairs = ", ".join(f"{a} and {b} ({share:.0%})" for a, b, share in together[:5])
    more = f" and {len(together) - 5} more pairs" if len(together) > 5 else ""
    how = (
        'they count as one in population intervals; travelling_together = "counted_each" in [model] counts each.'
        if once
        else "each counts by itself, as the study file asks, so that population intervals are too narrow."
    )
    return [f"Travel together (share of simultaneous fixes within {TOGETHER_M:g} m): {pairs}{more}; {how}"]
