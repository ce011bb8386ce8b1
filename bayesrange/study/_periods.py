"""Periods that are fitted one by one, and groups that are there only in some of them."""

from typing import NamedTuple

import numpy as np
import pandas as pd

from bayesrange._errors import StudyError
from bayesrange.study._moments import bound
from bayesrange.study._settings import StudySettings
from bayesrange.study._settings_file import nearest
from bayesrange.study._tables import shown


class Span(NamedTuple):
    """A period from its first moment to before its last, in UTC."""

    start: pd.Timestamp
    end: pd.Timestamp


def period_spans(settings: StudySettings, file: str) -> dict[str, Span]:
    """All periods of the study.

    Raises:
        StudyError: one that ends before it begins, two that overlap.
    """
    zone = settings.fixes.zone
    spans = {}
    for name, period in settings.periods.items():
        where = f"{file}, [periods] {name}"
        start = bound(period.start, zone, f"{where}, from", end=False)
        end = bound(period.until, zone, f"{where}, until", end=True)
        if end <= start:
            raise StudyError(f"{where}: until is not after from; mend one of them.")
        spans[name] = Span(start, end)
    ordered = sorted(spans.items(), key=lambda item: item[1])
    for (first, span), (second, later) in zip(ordered, ordered[1:], strict=False):
        if later.start < span.end:
            raise StudyError(
                f'{file}, [periods]: "{first}" and "{second}" overlap (a day as until is meant to its end); end one '
                "before the other begins."
            )
    return spans


def for_period(settings: StudySettings, period: str | None, file: str) -> tuple[StudySettings, Span | None]:
    """Settings with the layers' files of the period, and its span.

    Raises:
        StudyError: no such period, or one must be chosen.
    """
    spans = period_spans(settings, file)
    if period is None and spans:
        raise StudyError(
            f"{file}: the study has the periods {', '.join(spans)}, which are fitted one by one; choose one (in Python "
            f'read_study(STUDY, "{next(iter(spans))}")), or fit them all by bayesrange fit STUDY.'
        )
    if period is not None and period not in spans:
        close = nearest(period, list(spans))
        known = f"the study has {', '.join(spans)}" if spans else "the study file has no section [periods]"
        hint = f'did you mean "{close}"?' if close else f"{known}."
        raise StudyError(f'{file}: there is no period "{shown(period)}"; {hint}')
    layers = {}
    for name, layer in settings.layers.items():
        if layer.files is not None:
            layer = layer.model_copy(update={"file": layer.files[str(period)], "files": None})
        layers[name] = layer
    return settings.model_copy(update={"layers": layers}), spans[period] if period is not None else None


def in_period(fixes: pd.DataFrame, span: Span, period: str) -> tuple[np.ndarray, str]:
    """Which fixes are in the period, and what has to be said.

    Raises:
        StudyError: none is.
    """
    inside = ((fixes["time"] >= span.start) & (fixes["time"] < span.end)).to_numpy()
    if not inside.any():
        raise StudyError(
            f"[periods] {period}: no fix is in it; the fixes are from {fixes['time'].min():%Y-%m-%d} to "
            f"{fixes['time'].max():%Y-%m-%d}."
        )
    return inside, f'The period "{period}": {inside.sum():,} of {len(fixes):,} fixes are in it, the others set aside.'
