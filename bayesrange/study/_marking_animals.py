"""How many animals of a group mark: a whole number, or a range such as `3-5` where it is not known better."""

import numpy as np
import pandas as pd

from bayesrange._errors import StudyError
from bayesrange.study._tables import numbers, shown

_RANGE = r"(\d+)\s*[-–]\s*(\d+)"
_DATE = r"\d{1,2}[-. ]+[^\W\d_]{3,}\.?|[^\W\d_]{3,}[-. ]+\d{1,4}|\d+[./-]\d+[./-]\d+"  # what spreadsheets make of 3-5

MOST_ANIMALS = 10_000
"""Marking animals of one group at the most; a larger number is a coordinate or a date in the wrong column."""

ANIMALS = ("animals", "animals_low", "animals_high")
"""Columns of `count_animals`; the last two are there where some number is uncertain."""


def count_animals(table: pd.DataFrame, name: str) -> tuple[dict[str, np.ndarray], list[str]]:
    """Marking animals of each group, and what has to be said.

    Args:
        table: groups as text; without a column animals, or where it is blank, a group counts one.
        name: what the user calls the file.

    Returns:
        `animals`, whole numbers; where some group has a range, floats (the middle of a range), with its ends in
        `animals_low` and `animals_high`, which are equal where the number is known.

    Raises:
        StudyError: neither a whole number of at least 1 nor a range of two.
    """
    if "animals" not in table.columns:
        one = np.ones(len(table), dtype=np.int64)
        return {"animals": one}, [f"{name}: no column animals; each group counts 1 animal."]
    texts = table["animals"]
    blank = table["group"][(texts == "").to_numpy()]
    said = [f"{name}: the number of animals is blank and counts 1 for {', '.join(blank)}."] if len(blank) else []
    ends = texts.str.extract(f"^{_RANGE}$")
    is_range = ends[0].notna().to_numpy()
    known = _whole(texts[~is_range], name)
    low, high = np.ones(len(texts)), np.ones(len(texts))
    low[~is_range] = high[~is_range] = known
    low[is_range], high[is_range] = (ends[side][is_range].astype(float) for side in (0, 1))
    wrong = (low < 1) | (high < low)
    if wrong.any():
        _refuse(texts, wrong, name)
    if (high > MOST_ANIMALS).any():
        line, text = texts.index[high > MOST_ANIMALS][0], texts[high > MOST_ANIMALS].iloc[0]
        raise StudyError(
            f'{name}, line {line}, column "animals": {shown(text)} animals are more than one group holds; expected at '
            f"most {MOST_ANIMALS:,}."
        )
    if (low == high).all():
        return {"animals": low.astype(np.int64)}, said
    for column in ANIMALS[1:]:
        if column in table.columns:
            raise StudyError(
                f'{name}: there is a column "{column}", a name that is needed where animals is a range; rename it.'
            )
    return dict(zip(ANIMALS, ((low + high) / 2, low, high), strict=True)), said


def _whole(texts: pd.Series, name: str) -> np.ndarray:
    odd = texts.str.contains(r"\d.*[-–]|[-–].*\d", regex=True) | texts.str.fullmatch(_DATE)
    if odd.any():
        _refuse(texts, odd.to_numpy(), name)
    counts = numbers(texts, name, blank=1.0)
    wrong = (counts < 1) | (counts != np.round(counts))
    if wrong.any():
        _refuse(texts, wrong, name)
    return counts


def _refuse(texts: pd.Series, wrong: np.ndarray, name: str) -> None:
    text = texts[wrong].iloc[0]
    dated = bool(pd.Series([text]).str.fullmatch(_DATE).iloc[0])
    hint = " (a spreadsheet may have made a date of it: format the column as text)" if dated else ""
    raise StudyError(
        f'{name}, line {texts.index[wrong][0]}, column "animals": expected a whole number of at least 1, got '
        f'"{shown(text)}"; a number that is uncertain is written as a range such as 3-5{hint}.'
    )
