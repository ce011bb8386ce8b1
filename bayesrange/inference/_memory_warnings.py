"""What has to be said of a fitted memory card: where the prior speaks, where steps depend, where the numerics show."""

from typing import Any

import numpy as np
import pandas as pd
import xarray as xr
from scipy import stats

from bayesrange.inference._companions import SIMULTANEOUS
from bayesrange.inference._memory_build import MemoryPlan
from bayesrange.inference._memory_study import AnimalTrack

MOST_SHIFT = 0.1
"""Shift by the quadrature that is let pass [posterior sd]."""
NOTABLE = 0.1
"""Autocorrelation of step lengths above which intervals are said to be too narrow."""
FEWEST_PAIRS = 30


def step_autocorrelation(plan: MemoryPlan, posterior: xr.Dataset) -> dict[str, dict[str, float]]:
    """Autocorrelation, at one interval and at one day, of how long steps are for the fitted gamma law, by animal.

    Lengths become normal quantiles through the gamma law at the posterior means; only pairs of steps the stated time
    apart count. A figure that cannot be told is left out.
    """
    rhythm = np.zeros(4)
    if "step_rhythm" in posterior:
        rhythm = posterior["step_rhythm"].mean(("chain", "draw")).values
    found = {}
    for one in plan.tracks.animals:
        own = posterior.sel(animal=one.name)
        shape = float(own["step_shape"].mean())
        scale = float(own["step_scale"].mean()) / 1000
        waves = rhythm if rhythm.ndim == 1 else rhythm[:, list(plan.spec.animals).index(one.name)]
        residual = _residuals(one, shape, scale, waves, plan.scales.shortest_step_m / 1000)
        lags = {"lag_1": plan.tracks.interval_h}
        if plan.tracks.interval_h <= 6:
            lags["day"] = 24.0
        near = SIMULTANEOUS * plan.tracks.interval_h
        figures = {name: _correlation(residual, one.steps.time, lag, near) for name, lag in lags.items()}
        found[one.name] = {name: figure for name, figure in figures.items() if figure is not None}
    return found


def _residuals(one: AnimalTrack, shape: float, scale: float, waves: np.ndarray, shortest: float) -> np.ndarray:
    """Normal quantiles of step lengths; a short step counts with half its probability."""
    angle = one.hour * (2 * np.pi / 24)
    harmonics = np.stack([np.cos(angle), np.sin(angle), np.cos(2 * angle), np.sin(2 * angle)], axis=1)
    own = scale * np.exp(harmonics @ waves)
    length = np.where(one.steps.short, shortest, one.steps.length)
    share = stats.gamma.cdf(length / own, shape) * np.where(one.steps.short, 0.5, 1.0)
    return stats.norm.ppf(np.clip(share, 1e-6, 1 - 1e-6))


def _correlation(residual: np.ndarray, time: np.ndarray, lag: float, near: float) -> float | None:
    """Correlation of steps `lag` apart, give or take `near` [h]."""
    if time.size < 2:
        return None
    after = np.searchsorted(time, time + lag).clip(1, time.size - 1)
    sooner = (time + lag) - time[after - 1] < time[after] - (time + lag)
    second = np.where(sooner, after - 1, after)
    first = np.flatnonzero(np.abs(time[second] - time - lag) <= near)
    second = second[first]
    if first.size < FEWEST_PAIRS or residual[first].std() == 0 or residual[second].std() == 0:
        return None
    return float(np.corrcoef(residual[first], residual[second])[0, 1])


def said_of_memory(
    plan: MemoryPlan,
    table: pd.DataFrame,
    shifts: dict[str, float],
    autocorrelation: dict[str, dict[str, float]],
    facts: dict[str, Any],
) -> list[str]:
    """Sentences for the user."""
    return [
        *_said_of_decay(plan, table),
        *_said_of_runs(autocorrelation, plan.spec.rhythm, plan.spec.remembers),
        *_said_of_shift(shifts, facts["nodes"]),
        *_said_of_lost(plan, facts),
    ]


def _said_of_decay(plan: MemoryPlan, table: pd.DataFrame) -> list[str]:
    """A decay interval that passes the record: its upper end is the prior's."""
    said = []
    records = {one.name: one.record_h for one in plan.tracks.animals}
    rows = table[table["parameter"].str.startswith("reference_decay") & (table["unit"] == "h")]
    long = []
    for row in rows.itertuples():
        inner = str(row.parameter).removeprefix("reference_decay").strip("[]")
        record = records.get(inner, max(records.values()))
        if inner != "new animal" and row.upper > record:
            long.append((str(row.parameter), float(row.upper), record))
    if long:
        name, upper, record = long[0]
        more = f" (and {len(long) - 1} more)" if len(long) > 1 else ""
        said.append(
            f"The interval of {name}{more} reaches {upper:.0f} h, beyond the record of {record:.0f} h: its upper end "
            "is the prior speaking; read it as “at least” the lower end."
        )
    return said


def _said_of_runs(autocorrelation: dict[str, dict[str, float]], rhythm: bool, remembers: bool) -> list[str]:
    said = []
    lag = {name: figures["lag_1"] for name, figures in autocorrelation.items() if figures.get("lag_1", 0) > NOTABLE}
    if lag:
        worst = max(lag, key=lag.__getitem__)
        r = min(lag[worst], 0.95)
        memory = ", those of memory among them," if remembers else ""
        said.append(
            f"Long and short steps come in runs in {len(lag)} animal(s): lengths one interval apart correlate up to "
            f"{lag[worst]:.2f} ({worst}). The model takes them as independent, so that intervals{memory} are too "
            f"narrow, those that rest on step lengths by about {np.sqrt((1 + r) / (1 - r)):.1f} times."
        )
    day = {name: figures["day"] for name, figures in autocorrelation.items() if figures.get("day", 0) > NOTABLE}
    if day and not rhythm:
        worst = max(day, key=day.__getitem__)
        said.append(
            f"Step lengths follow the hour of the day in {len(day)} animal(s) (correlation a day apart up to "
            f'{day[worst]:.2f}, {worst}): add vary = ["step_length"] to [model].'
        )
    return said


def _said_of_shift(shifts: dict[str, float], nodes: int) -> list[str]:
    large = {name: value for name, value in shifts.items() if abs(value) >= MOST_SHIFT}
    if not large:
        return []
    worst = max(large, key=lambda name: abs(large[name]))
    return [
        f"Four times the quadrature nodes would move {len(large)} parameter(s) by {MOST_SHIFT} posterior sd or more, "
        f"most {worst} by {large[worst]:+.2f}: set nodes = {4 * nodes} in [model] and fit again."
    ]


def _said_of_lost(plan: MemoryPlan, facts: dict[str, Any]) -> list[str]:
    lost = sum(facts["without_nodes"])
    if not lost:
        return []
    return [
        f"{lost:,} step(s) were set aside because hardly any habitable ground lies within a step of their start; look "
        "at the no-go layers there."
    ]
