"""Curves of how memory fades, with bands, on an axis of time that reads in hours, days and months."""

import numpy as np
from jaxtyping import Float
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import Patch
from matplotlib.ticker import FixedLocator, NullFormatter, NullLocator
from numpy.typing import NDArray

from bayesrange.report._decay import AFTER_H, ANIMAL, POPULATION, Decay, decays
from bayesrange.report._drawing import INK, Picture, our_style, picture, short
from bayesrange.report._format import percent
from bayesrange.report._read_memory import MemoryContents

_HUE = {"reference": "#0072B2", "working": "#D55E00"}
_LINE = {"reference": "solid", "working": (0, (5, 2))}
_TICKS_H = {
    0.25: "15 min", 1.0: "1 h", 3.0: "3 h", 8.0: "8 h", 24.0: "1 day", 72.0: "3 days", 168.0: "1 week",
    720.0: "30 days", 2160.0: "90 days", 8766.0: "1 year",
}  # fmt: skip
_BEYOND = "#e9eced"


def decay_figure(run: MemoryContents) -> Picture | None:
    """Population with its band and a thin line for each animal; each animal alone if there is no population."""
    found = decays(run)
    if not found:
        return None
    population = [one for one in found if one.level == POPULATION]
    times = _times(found)
    with our_style():
        made = _population(run, found, times) if population else _each_animal(run, found, times)
        figure, whose = made
        figure.legend(handles=_legend(found, bool(population), run.prob), loc="outside lower center", ncols=3)
        alt = f"Curves of the share of a visit remembered against the time since, {whose}, with bands."
        caption = (
            f"Share of a visit that is remembered against the time since, {whose}. Bands hold {percent(run.prob)} of "
            "the posterior at each time. On grey ground the time is longer than the record: there the curve is the "
            "formula’s, not seen."
        )
        return picture(figure, alt, caption)


def _times(found: list[Decay]) -> Float[NDArray, " times"]:
    """Times from before the shortest decay to well after the longest: at least 1 h to 90 days, at most a year [h]."""
    shortest, longest = min(one.median_h for one in found), max(one.median_h for one in found)
    return np.geomspace(float(np.clip(shortest / 8, 0.2, 1.0)), float(np.clip(4 * longest, 2200.0, 8800.0)), 200)


def _population(run: MemoryContents, found: list[Decay], times: NDArray) -> tuple[Figure, str]:
    figure = Figure(figsize=(11.0, 4.6), layout="constrained")
    axes = figure.subplots()
    _frame(axes, times, max(run.numerics["record_h"].values()))
    for one in found:
        if one.level == ANIMAL:
            axes.plot(times, one.shares(times, run.prob)[1], color=_HUE[one.memory], linewidth=0.7, alpha=0.6, zorder=2)
    for one in found:
        if one.level == POPULATION:
            _curve(axes, one, times, run.prob)
    axes.set_ylabel("share of a visit remembered")
    return figure, "for the population, and a thin line for each animal"


def _each_animal(run: MemoryContents, found: list[Decay], times: NDArray) -> tuple[Figure, str]:
    columns = min(3, len(run.animals))
    rows = -(-len(run.animals) // columns)
    figure = Figure(figsize=(11.0 if columns > 1 else 7.0, 2.7 * rows + 0.6), layout="constrained")
    panels = figure.subplots(rows, columns, squeeze=False, sharey=True).ravel()
    for at, (axes, animal) in enumerate(zip(panels, run.animals, strict=False)):
        _frame(axes, times, run.numerics["record_h"][animal], named=False)
        for one in found:
            if one.animal == animal:
                _curve(axes, one, times, run.prob)
        axes.set_title(short(animal))
        axes.set_ylabel("share remembered" if at % columns == 0 else "")
    for axes in panels[len(run.animals) :]:
        axes.set_visible(False)
    return figure, "animal by animal"


def _frame(axes: Axes, times: NDArray, record_h: float, named: bool = True) -> None:
    """Axis of time with round ticks, the times of the table as lines, ground beyond the record in grey."""
    axes.set_xscale("log")
    axes.set_xlim(times[0], times[-1])
    axes.set_ylim(0, 1.02)
    ticks = [tick for tick in _TICKS_H if times[0] <= tick <= times[-1]]
    ticks = ticks if named else [tick for tick in ticks if tick in (1.0, 8.0, 24.0, 168.0, 720.0)]
    axes.xaxis.set_major_locator(FixedLocator(ticks))
    axes.set_xticklabels([_TICKS_H[tick] for tick in ticks])
    axes.xaxis.set_minor_locator(NullLocator())
    axes.xaxis.set_minor_formatter(NullFormatter())
    axes.set_xlabel("time since the visit (log scale)")
    if record_h < times[-1]:
        axes.axvspan(max(record_h, times[0]), times[-1], color=_BEYOND, linewidth=0, zorder=0)
    for time in AFTER_H.values():
        axes.axvline(time, color="#8a9499", linewidth=0.7, linestyle=(0, (1, 2)), zorder=1)


def _curve(axes: Axes, one: Decay, times: NDArray, prob: float) -> None:
    lower, median, upper = one.shares(times, prob)
    axes.fill_between(times, lower, upper, color=_HUE[one.memory], alpha=0.22, linewidth=0, zorder=3)
    axes.plot(times, median, color=_HUE[one.memory], linestyle=_LINE[one.memory], linewidth=2.0, zorder=4)


def _legend(found: list[Decay], population: bool, prob: float) -> list[object]:
    kinds = [memory for memory in _HUE if any(one.memory == memory for one in found)]
    whose = "population" if population else "median"
    shown: list[object] = []
    for memory in kinds:
        how = {"color": _HUE[memory], "linestyle": _LINE[memory], "linewidth": 2.0}
        shown.append(Line2D([], [], label=f"{memory} memory, {whose}", **how))
    for memory in kinds:
        shown.append(Patch(facecolor=_HUE[memory], alpha=0.22, label=f"{memory}, {percent(prob)} interval"))
    if population:
        shown.append(Line2D([], [], color=INK, linewidth=0.7, alpha=0.6, label="single animals, median"))
    return [*shown, Patch(facecolor=_BEYOND, label="longer than the record")]
