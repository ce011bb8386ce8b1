"""One look at a study's data: flags, rates, information, settling, rhythm, success, pairs."""

from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd

from bayesrange.screening._carrying import Evidence
from bayesrange.screening._companions import travelling_pairs
from bayesrange.screening._information import information
from bayesrange.screening._rates import Rhythm, commonest_interval_h, histogram, rhythm, usable
from bayesrange.screening._settling import Settling, settling
from bayesrange.screening._success import places_of_failed, success_by_class, success_by_hour, success_by_square
from bayesrange.study import FLAGS, BareStudy, across_m, find_flags

UNSOUND = ("duplicate", "speed", "spike", "stationary")
"""Fixes with these flags take no part in what is said beside the flags."""


@dataclass(frozen=True)
class Screening:
    """What a look at the data found. Nothing of the study is changed.

    Attributes:
        study: what was looked at.
        flags: one row a flag: fix (position in the study's fixes), flag, value, limit.
        table: the same for the user: animal, time, flag, value, limit, unit, file, row, meaning; also x, y [m].
        sound: whether each fix takes part in the rest.
        interval_h: the commonest interval.
        animals: animal, group, fixes (all), sound, failed, first, last, days, interval_h (median), longest_gap_h,
            steps, usable, step_m, error_m, crossing_time_h (with _lower_h, _upper_h), effective, verdict, settled,
            rhythm.
        groups: group, fixes, effective, across_m, cells, home.
        intervals: from_h, to_h, intervals.
        settlings: by animal.
        rhythms: by animal.
        by_hour: hour, fixes, failed, success.
        by_class: layer, class, fixes, failed, success.
        by_square: x, y [m], side_m, fixes, failed, success.
        pairs: first, second, simultaneous, near, share.
        by_period: group, then a column of fixes a period.
        folder: where it was written, if it was.
        replaced: whether an earlier screening stood there.
    """

    study: BareStudy
    flags: pd.DataFrame
    table: pd.DataFrame
    sound: np.ndarray
    interval_h: float
    animals: pd.DataFrame
    groups: pd.DataFrame
    intervals: pd.DataFrame
    settlings: dict[str, Settling]
    rhythms: dict[str, Rhythm]
    by_hour: pd.DataFrame
    by_class: pd.DataFrame
    by_square: pd.DataFrame
    pairs: pd.DataFrame
    by_period: pd.DataFrame
    folder: Path | None = None
    replaced: bool = False

    @property
    def counts(self) -> dict[str, int]:
        """How often each flag was raised, in the order of `FLAGS`; those never raised with 0."""
        found = self.flags["flag"].value_counts()
        return {name: int(found.get(name, 0)) for name in FLAGS}

    @property
    def evidence(self) -> Evidence:
        """What model cards are judged by."""
        layers = [name for name, layer in self.study.settings.layers.items() if not layer.no_go]
        loose = int((self.study.fixes["group"][self.sound] == "").sum())
        return Evidence(self.groups, self.animals, self.interval_h, self.study.area is not None, layers, loose)


def look(study: BareStudy) -> Screening:
    """Look at the fixes of a study.

    Cost: about 10 s for a million fixes of 50 animals on one core.
    """
    flags = find_flags(study.fixes, study.settings.fixes.max_speed_kmh, study.area)
    sound = np.ones(len(study.fixes), dtype=bool)
    sound[flags["fix"][flags["flag"].isin(UNSOUND)]] = False
    sound |= _without_any(study.fixes["animal"], sound, flags)
    fixes = study.fixes[sound].reset_index(drop=True)
    tolerance = study.settings.model.interval_tolerance
    between = fixes.groupby("animal")["time"].diff().dt.total_seconds().to_numpy(dtype=float) / 3600
    between = between[~np.isnan(between)]
    nominal = study.settings.model.interval_h or commonest_interval_h(between, tolerance)
    animals, settlings, rhythms = _by_animal(study, fixes, nominal, tolerance)
    failed_at = places_of_failed(fixes, study.failed)
    single = np.ones(len(study.fixes), dtype=bool)
    single[flags["fix"][flags["flag"] == "duplicate"]] = False
    return Screening(
        study=study,
        flags=flags,
        table=_for_the_user(study.fixes, flags),
        sound=sound,
        interval_h=nominal,
        animals=animals,
        groups=_groups(study, fixes, animals),
        intervals=histogram(between),
        settlings=settlings,
        rhythms=rhythms,
        by_hour=success_by_hour(study.fixes[single], study.failed, study.settings.fixes.zone),
        by_class=success_by_class(study, fixes, failed_at),
        by_square=success_by_square(fixes, failed_at),
        pairs=travelling_pairs(fixes, nominal),
        by_period=_by_period(study, fixes),
    )


def _without_any(animal: pd.Series, sound: np.ndarray, flags: pd.DataFrame) -> np.ndarray:
    """Fixes of animals without a sound one, which are looked at all the same; duplicates left out."""
    lost = ~animal.isin(animal[sound].unique()).to_numpy()
    lost[flags["fix"][flags["flag"] == "duplicate"]] = False
    return lost


def _for_the_user(fixes: pd.DataFrame, flags: pd.DataFrame) -> pd.DataFrame:
    own = fixes.iloc[flags["fix"]][["animal", "time", "x", "y", "file", "row"]].reset_index(drop=True)
    says = {name: flag.meaning for name, flag in FLAGS.items()}
    units = {name: flag.unit for name, flag in FLAGS.items()}
    meaning = flags["flag"].map(says)
    if "flag" in fixes.columns:
        doubt = fixes["flag"].iloc[flags["fix"]].reset_index(drop=True)
        meaning = meaning.where(flags["flag"] != "bearing", meaning + ": " + doubt.astype(str))
    table = own.assign(
        flag=flags["flag"], value=flags["value"], unit=flags["flag"].map(units), limit=flags["limit"],
        meaning=meaning,
    )  # fmt: skip
    return table[["animal", "time", "flag", "value", "limit", "unit", "file", "row", "meaning", "x", "y"]]


def _by_animal(
    study: BareStudy, fixes: pd.DataFrame, nominal: float, tolerance: float
) -> tuple[pd.DataFrame, dict[str, Settling], dict[str, Rhythm]]:
    """One row an animal, and what its track says of settling and rhythm."""
    told = information(fixes).set_index("animal")
    every, failed = study.fixes["animal"].value_counts(), study.failed["animal"].value_counts()
    rows, settlings, rhythms = [], {}, {}
    start = fixes["time"].min()
    for name, own in fixes.groupby("animal", sort=True):
        animal = str(name)
        hours = (own["time"] - start).dt.total_seconds().to_numpy(dtype=float) / 3600
        place, between = own[["x", "y"]].to_numpy(dtype=float) / 1000, np.diff(hours)
        regular = usable(between, nominal, tolerance)
        step = 1000 * np.hypot(*np.diff(place, axis=0).T)[regular]
        settlings[animal], rhythms[animal] = settling(own["time"], place), rhythm(hours, place, nominal, tolerance)
        groups = sorted(set(own["group"].unique()) - {""})
        rows.append(
            {
                "animal": animal, "group": ", ".join(groups), "fixes": int(every[animal]), "sound": len(own),
                "failed": int(failed.get(animal, 0)), "first": own["time"].iloc[0], "last": own["time"].iloc[-1],
                "days": (hours[-1] - hours[0]) / 24, "interval_h": _or_nan(np.median, between),
                "longest_gap_h": _or_nan(np.max, between), "steps": len(between), "usable": int(regular.sum()),
                "step_m": _or_nan(np.median, step), "error_m": float(own["error_m"].median()),
                **told.loc[animal].drop("fixes").to_dict(),
                "verdict": settlings[animal].verdict, "settled": settlings[animal].settled,
                "rhythm": rhythms[animal].verdict,
            }
        )  # fmt: skip
    return pd.DataFrame(rows), settlings, rhythms


def _or_nan(of: object, values: np.ndarray) -> float:
    return float(of(values)) if len(values) else float("nan")  # type: ignore[operator]


def _groups(study: BareStudy, fixes: pd.DataFrame, animals: pd.DataFrame) -> pd.DataFrame:
    """Every group of the table and of the fixes, with the size of its range in cells."""
    homes = {} if study.groups is None else dict(zip(study.groups["group"], study.groups["x"].notna(), strict=True))
    per_fix = (animals.set_index("animal")["effective"] / animals.set_index("animal")["sound"]).to_dict()
    own = {str(group): rows for group, rows in fixes.groupby("group") if group != ""}
    rows = []
    cell_m = study.settings.study.cell_m
    for group in dict.fromkeys([*homes, *own]):
        mine = own.get(group, fixes.iloc[:0])
        across = across_m(mine) if len(mine) >= 10 else float("nan")
        effective = float(mine["animal"].map(per_fix).astype(float).sum())
        cells = across / cell_m if cell_m != "auto" else float("nan")
        rows.append((group, len(mine), effective, across, cells, bool(homes.get(group, False))))
    return pd.DataFrame(rows, columns=["group", "fixes", "effective", "across_m", "cells", "home"]).astype(
        {"home": bool, "cells": float, "fixes": int}
    )


def _by_period(study: BareStudy, fixes: pd.DataFrame) -> pd.DataFrame:
    """Fixes by group and period; without periods by month."""
    if study.spans:
        which = pd.Series("in no period", index=fixes.index, dtype=object)
        for name, span in study.spans.items():
            which[((fixes["time"] >= span.start) & (fixes["time"] < span.end)).to_numpy()] = name
        order = [*study.spans, *(["in no period"] if (which == "in no period").any() else [])]
    else:
        month = fixes["time"].dt.year * 12 + fixes["time"].dt.month - 1
        which = month.map({m: f"{m // 12}-{m % 12 + 1:02d}" for m in month.unique()})
        order = sorted(set(which.unique()))
    group = fixes["group"].astype(object).where(fixes["group"] != "", "(no group)")
    return pd.crosstab(group, which).reindex(columns=order, fill_value=0).rename_axis(index="group", columns=None)
