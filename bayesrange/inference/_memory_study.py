"""From a study to tracks that a memory card can read: interval, steps, starts of memory, who travels with whom.

Everything that is set aside is counted, and what cannot work is one sentence. Metres in, kilometres and hours out.
"""

from dataclasses import dataclass, field, replace

import numpy as np
import pandas as pd

from bayesrange._errors import StudyError
from bayesrange.inference._companions import (
    animal_column,
    animals_file,
    said_of_together,
    travelling_together,
    units_of,
)
from bayesrange.memory import Stays, Steps, Track, make_stays, make_steps
from bayesrange.study import Study, solar_clock

FEWEST_STEPS = 50


@dataclass(frozen=True)
class AnimalTrack:
    """One animal's record [km, h].

    Attributes:
        name: of the animal.
        track: its fixes.
        stays: where its time was spent.
        steps: the steps that count.
        hour: solar hour at the start of each step.
        day: whether the sun was up then.
        counts: fixes, steps and what was set aside.
        learned: whether it knew its range when its record began.
        crossing: steps whose straight line crosses ground that is not habitable.
    """

    name: str
    track: Track
    stays: Stays
    steps: Steps
    hour: np.ndarray
    day: np.ndarray
    counts: dict[str, int]
    learned: bool
    crossing: int

    def keep(self, kept: np.ndarray) -> "AnimalTrack":
        """The same with only some of its steps."""
        steps = Steps(*(column[kept] for column in self.steps))
        return replace(self, steps=steps, hour=self.hour[kept], day=self.day[kept])

    @property
    def record_h(self) -> float:
        """From the first fix to the last [h]."""
        return float(self.track.time[-1] - self.track.time[0])


@dataclass(frozen=True)
class Tracks:
    """All animals of a study, ready for a memory card.

    Attributes:
        animals: in the order of their names.
        interval_h: nominal sampling interval.
        shortest_m: steps below it count as rest.
        median_step_m: median length of the steps that are not short.
        units: which animals count as one in a population, by index; each animal is in one.
        together: pairs that travel together, with the share of their simultaneous fixes within 100 m.
        warnings: sentences for the user.
    """

    animals: list[AnimalTrack]
    interval_h: float
    shortest_m: float
    median_step_m: float
    units: list[list[int]]
    together: list[tuple[str, str, float]]
    warnings: list[str] = field(default_factory=list)


def make_tracks(study: Study) -> Tracks:
    """The tracks of a study.

    Raises:
        StudyError: no usable interval, an animal with too few steps, a start of memory that is not known.
    """
    model, fixes = study.settings.model, study.fixes
    warnings: list[str] = []
    interval = nominal_interval(study)
    shortest = _shortest(study)
    starts = _memory_starts(study)
    hour, day = solar_clock(fixes, study.crs)
    animals = []
    for name, own in fixes.groupby("animal", sort=True):
        learning = 24 * float(model.learning_days or 0) if starts[str(name)] == "learned" else 0.0
        where = own.index.to_numpy()
        animals.append(_animal_track(study, str(name), own, hour[where], day[where], interval, shortest, learning))
    _refuse_few(study, animals, interval)
    moved = np.concatenate([one.steps.length[~one.steps.short] for one in animals]) * 1000
    median = float(np.median(moved))
    warnings += _said_of_steps(animals, interval, shortest, model.interval_tolerance)
    warnings += _said_of_error(fixes, median)
    together = travelling_together(study, interval)
    once = model.travelling_together == "counted_once"
    units = units_of([one.name for one in animals], together if once else [])
    warnings += said_of_together(together, once)
    return Tracks(animals, interval, shortest, median, units, together, warnings)


def nominal_interval(study: Study) -> float:
    """The study's sampling interval [h]: as given, else the commonest, to the minute.

    Raises:
        StudyError: no two fixes are so far apart in time.
    """
    model = study.settings.model
    minutes = study.fixes.groupby("animal")["time"].diff().dt.total_seconds().dropna().to_numpy(float) / 60
    if not minutes.size:
        raise StudyError(f"{study.path.name}: no animal has two fixes, so there is no step to fit.")
    rounded = np.sort(np.round(minutes).clip(min=1))
    candidates = np.unique(rounded)
    wide = model.interval_tolerance * candidates + 0.5  # half a minute for the rounding
    counts = np.searchsorted(rounded, candidates + wide, "right") - np.searchsorted(rounded, candidates - wide, "left")
    best = candidates[np.argmax(counts)]
    near = minutes[np.abs(minutes - best) <= model.interval_tolerance * best + 0.5]
    commonest = float(np.round(np.median(near)).clip(min=1))
    if model.interval_h is None:
        return commonest / 60
    given = 60 * model.interval_h
    if not (np.abs(minutes - given) <= model.interval_tolerance * given).any():
        raise StudyError(
            f"{study.path.name}, [model] interval_h: no two successive fixes of an animal are {model.interval_h:g} h "
            f"apart; the commonest interval is {commonest / 60:.3g} h: write that, or take the key out."
        )
    return model.interval_h


def _memory_starts(study: Study) -> dict[str, str]:
    model = study.settings.model
    column = animal_column(study, "memory_start") or {}
    starts = {}
    for animal in study.fixes["animal"].unique():
        own = column.get(str(animal), "") or model.memory_start
        if own not in ("naive", "learned"):
            raise StudyError(
                f'{animals_file(study)}: memory_start of "{animal}" is "{own}"; expected naive, learned or blank.'
            )
        starts[str(animal)] = own
    if "learned" in starts.values() and model.learning_days is None:
        raise StudyError(
            f'{study.path.name}, [model] learning_days: animals whose memory_start is "learned" need it: the days at '
            "the beginning of a record that only build memory, such as learning_days = 30."
        )
    if "learned" not in starts.values() and model.learning_days is not None:
        raise StudyError(
            f'{study.path.name}, [model] learning_days: it has no use unless memory_start = "learned", here or in the '
            "animals table; add that, or take it out."
        )
    return starts


def _shortest(study: Study) -> float:
    """Length below which a step counts as rest [m]."""
    if study.settings.model.shortest_step_m is not None:
        return study.settings.model.shortest_step_m
    return max(study.rounding_m, float(study.fixes["error_m"].median()), 1e-3)


def _animal_track(
    study: Study, name: str, own: pd.DataFrame, hour: np.ndarray, day: np.ndarray, interval: float, shortest: float,
    learning: float,
) -> AnimalTrack:  # fmt: skip
    x, y = own["x"].to_numpy(float), own["y"].to_numpy(float)
    time = (own["time"] - study.fixes["time"].min()).dt.total_seconds().to_numpy(float) / 3600
    track = Track(time, x / 1000, y / 1000)
    stays = make_stays(track, interval)
    ground = np.asarray(study.grid.habitable_at(x, y))
    tolerance = study.settings.model.interval_tolerance
    steps, counts = make_steps(track, interval, tolerance, shortest / 1000, ground, learning)
    counts = {"fixes": len(own), **counts}
    crossing = _crossing(study, steps)
    return AnimalTrack(
        name, track, stays, steps, hour[steps.fix], day[steps.fix], counts, learning > 0, crossing
    )  # fmt: skip


def _crossing(study: Study, steps: Steps) -> int:
    """Steps whose straight line meets ground that is not habitable, looked at every half cell."""
    if not steps.length.size:
        return 0
    pieces = int(min(np.ceil(steps.length.max() * 1000 / study.grid.cell_m * 2), 200)) + 1
    share = np.linspace(0, 1, pieces + 1)[None, 1:-1]
    x = (steps.x[:, None] + share * (steps.end_x - steps.x)[:, None]) * 1000
    y = (steps.y[:, None] + share * (steps.end_y - steps.y)[:, None]) * 1000
    on_ground = np.asarray(study.grid.habitable_at(x.ravel(), y.ravel())).reshape(x.shape)
    return int((~on_ground).any(axis=1).sum())


def _refuse_few(study: Study, animals: list[AnimalTrack], interval: float) -> None:
    for one in animals:
        if one.counts["steps"] < FEWEST_STEPS:
            why = ", ".join(
                f"{one.counts[key]:,} {words}"
                for key, words in (
                    ("not_nominal", f"not {interval:.3g} h apart"),
                    ("off_ground", "with an end off habitable ground"),
                    ("learning", "in the learning days"),
                )
                if one.counts[key]
            )
            raise StudyError(
                f'{study.path.name}: the animal "{one.name}" has {one.counts["steps"]} usable steps of '
                f"{one.counts['intervals']} intervals{f' ({why})' if why else ''}; at least {FEWEST_STEPS} are needed: "
                "set another interval_h or interval_tolerance in [model], or take its fixes out."
            )
        if one.crossing == one.counts["steps"]:
            raise StudyError(
                f'{study.path.name}: every step of the animal "{one.name}" crosses ground that is not habitable; check '
                "the no-go layers and the area against its fixes."
            )


def _said_of_steps(animals: list[AnimalTrack], interval: float, shortest: float, tolerance: float) -> list[str]:
    total = {key: sum(one.counts[key] for one in animals) for key in animals[0].counts}
    said = [
        f"{total['steps']:,} steps of {interval:.3g} h ± {tolerance:.0%} count, of {total['intervals']:,} intervals: "
        f"{total['not_nominal']:,} are of another length (their time still counts as memory), {total['off_ground']:,} "
        f"end off habitable ground, {total['learning']:,} fall into learning days; of the steps "
        f"{total['turn_unknown']:,} have no known turn, and {total['short']:,} are shorter than {shortest:.3g} m and "
        "count as rest."
    ]
    crossing = sum(one.crossing for one in animals)
    if crossing:
        said.append(
            f"{crossing:,} steps cross, in a straight line, ground that is not habitable: the model lets animals jump "
            "such a strip, so it may be a bridge, a wrong layer, or a strip that is narrower than a step."
        )
    return said


def _said_of_error(fixes: pd.DataFrame, median_step_m: float) -> list[str]:
    error = float(fixes["error_m"].median())
    if not error:
        return []
    said = f"Location error (median sd {error:.3g} m an axis) is not used by memory cards beyond the shortest step."
    if error > median_step_m / 4:
        said += (
            f" It passes a quarter of the median step of {median_step_m:.3g} m: steps are largely noise, turns look "
            "reversed and step_shape is biased; keep fewer fixes, at a longer interval."
        )
    return [said]
