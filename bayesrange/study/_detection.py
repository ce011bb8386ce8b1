"""The chance that a fix succeeds at a place, as a layer: fixes fail underground and under closed canopy."""

import numpy as np

from bayesrange._errors import StudyError
from bayesrange.study._grid import Grid
from bayesrange.study._layers import Layer
from bayesrange.study._settings import StudySettings
from bayesrange.study._tables import counted


def refuse_for_tracks(settings: StudySettings, file: str) -> None:
    """Refuse a detection layer for a card of tracks.

    Raises:
        StudyError: there is one.
    """
    if settings.fixes.detection is not None:
        raise StudyError(
            f"{file}, [fixes] detection: it is for range cards, and {settings.model.card} is for tracks, whose steps "
            "over failed fixes are set aside; take it out."
        )


def check_detection(layer: Layer, grid: Grid, said: list[str]) -> list[str]:
    """What has to be said of a detection layer that is as it should be.

    Args:
        layer: the layer.
        grid: the study's grid.
        said: of the layer, when it was read: last, which cells have no value.

    Raises:
        StudyError: cells inside without a value, or with one that is no chance.
    """
    inside = layer.values[grid.inside]
    if np.isnan(inside).any():
        raise StudyError(said[-1])
    wrong = ~((inside > 0) & (inside <= 1))
    where = f"[layers.{layer.name}] {layer.file}"
    if wrong.any():
        first = inside[wrong][0]
        verb = "has" if wrong.sum() == 1 else "have"
        hint = "; are these percent? Divide them by 100" if 1 < np.nanmax(inside) <= 100 and inside.min() > 0 else ""
        raise StudyError(
            f"{where}: [fixes] detection needs the chance that a fix succeeds, above 0 and at most 1, but "
            f"{counted(int(wrong.sum()), 'cell', 'cells')} inside the area {verb} another value, such as {first:g}"
            f"{hint}; mend the layer."
        )
    return [
        f"{where}: fixes are taken to succeed by place, with chances from {inside.min():.2g} to {inside.max():.2g}; "
        "ranges are of where animals are, not of where they were seen."
    ]
