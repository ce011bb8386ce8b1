"""What is doubtful about places from bearings, and what is said of them and of sets that give none."""

import numpy as np
import pandas as pd
from jaxtyping import Bool, Float
from numpy.typing import NDArray

from bayesrange.study._bearing_sd import LARGE, Sets, large_residuals
from bayesrange.study._tables import counted, first_few
from bayesrange.study._triangulation import NEAREST_M, crossing_angle, leverages, residual_cosine, residuals

NARROW = float(np.radians(20))
FLAGS = {"narrow_crossing": "narrow crossing", "behind_observer": "behind observer", "large_residual": "large residual"}
"""Count of a flag and its word in the fixes' column."""


def flags_of(
    place: Float[NDArray, "sets 2"], sets: Sets, sd: Float[NDArray, " observers"]
) -> dict[str, Bool[NDArray, " sets"]]:
    """Which places have each of the flags.

    Args:
        place: of each set [m].
        sets: their bearings.
        sd: of each observer's bearings [rad].
    """
    weight = sets.weights(sd)
    off = np.where(sets.taken, residuals(place, sets.station, sets.azimuth), 0.0)
    left = np.where(sets.taken, 1 - leverages(place, sets.station, weight), 0.0)
    return {
        "narrow_crossing": crossing_angle(sets.azimuth, weight) < NARROW,
        "behind_observer": (residual_cosine(place, sets.station, sets.azimuth, weight) < 0).any(axis=1),
        "large_residual": large_residuals(off, left, sd[sets.observer]).any(axis=1),
    }


def why_set_aside(counts: dict[str, int]) -> str:
    """What sets a set aside, in words."""
    words = {
        "single_bearings": ("has bearings from one place only", "have bearings from one place only"),
        "pairs_set_aside": ("is a pair without [bearings] sd_deg", "are pairs without [bearings] sd_deg"),
        "no_place": ("does not meet ahead of the observers", "do not meet ahead of the observers"),
    }
    return "; ".join(
        f"{counts[key]:,} {one if counts[key] == 1 else many}" for key, (one, many) in words.items() if counts.get(key)
    )


def sentences(counts: dict[str, int], lost: pd.DataFrame, fixes: pd.DataFrame, name: str) -> list[str]:
    """What is said of rows and sets set aside and of flags.

    Args:
        counts: of the study.
        lost: the first row of each set that has no place.
        fixes: with their flags.
        name: what the user calls the file.
    """
    said = []
    if counts["bearings_failed"]:
        said.append(f"{name}: {counted(counts['bearings_failed'], 'row has', 'rows have')} no bearing, set aside.")
    why = why_set_aside(counts)
    if why:
        text = f"{name}: of {counted(counts['bearing_sets'], 'set', 'sets')} some were set aside: {why}"
        if len(lost):
            text += f" or meet within {NEAREST_M:g} m of a station ({_lines(lost)})"
        said.append(text + ".")
    told = {
        "narrow_crossing": f"of bearings that cross at less than {np.degrees(NARROW):.0f}°",
        "behind_observer": "behind an observer (a bearing taken the wrong way round?)",
        "large_residual": f"with a bearing off by more than {LARGE:.0f} standard deviations",
    }
    for key, words in told.items():
        if counts[key]:
            which = fixes[fixes["flag"].str.contains(FLAGS[key], regex=False)]
            number = counted(counts[key], "place", "places")
            said.append(f"{name}: {number} {words}, flagged and used ({_lines(which)}).")
    return said


def _lines(rows: pd.DataFrame) -> str:
    return first_few(f"{file} line {row}" for file, row in zip(rows["file"], rows["row"], strict=True))
