"""Figure and words of selection with and without memory."""

from itertools import cycle
from typing import Any

from matplotlib.figure import Figure
from matplotlib.lines import Line2D

from bayesrange.report._beside import Estimate, Null, Pair, find_nulls, pairs, times_as_large
from bayesrange.report._drawing import INK, Picture, our_style, picture, short
from bayesrange.report._format import interval, known_to, listed, number, percent
from bayesrange.report._memory_sentences import UNMAPPED
from bayesrange.report._read_memory import MemoryContents

_HERE = {"color": "#0072B2", "marker": "o", "markerfacecolor": "#0072B2"}
_THERE = (
    {"color": "#D55E00", "marker": "s", "markerfacecolor": "white"},
    {"color": "#4d4d4d", "marker": "D", "markerfacecolor": "white"},
    {"color": "#CC79A7", "marker": "v", "markerfacecolor": "white"},
)


def beside(run: MemoryContents) -> dict[str, Any]:
    """What the section on selection says: the figure, the rows and the sentences; no rows if there is no null run."""
    nulls = find_nulls(run) if run.has_memory else []
    found = pairs(run, nulls)
    if not found:
        return {"rows": [], "cards": [], "figure": None, "sentences": [_how_to(run)]}
    cards = [null.card for null in nulls]
    not_yet = [null.card for null in nulls if not null.converged]
    sentences = [_difference(pair, cards) for pair in _leading(run, found)] + [_what_it_means()]
    if not_yet:
        sentences.append(f"Not converged: {listed(not_yet)}; its numbers are not yet results.")
    return {
        "rows": [_row(pair) for pair in found],
        "cards": [_titled(null) for null in nulls],
        "figure": _figure(run, found, cards),
        "sentences": sentences,
    }


def _titled(null: Null) -> str:
    """A card, and the folder of its run where that is called otherwise."""
    return null.card if null.folder.name == null.card else f"{null.card} ({null.folder.name})"


def _how_to(run: MemoryContents) -> str:
    if not run.has_memory:
        return (
            "This card has no memory: where animals return to places they know, a card without memory takes the return "
            "for selection, which then comes out too large. Fit the study with a memory card too, in the same folder "
            "of runs: its report sets the two side by side."
        )
    return (
        "No finished run without memory on the same files stands beside this one, so nothing can be compared here. Set "
        'card = "steps-resources" in the study file, fit again (the run goes beside this one), and write this report '
        f"anew: bayesrange report {run.folder.name}"
    )


def _leading(run: MemoryContents, found: list[Pair]) -> list[Pair]:
    """The rows to say in words: the population's, or those of an only animal; of several the table speaks."""
    return [pair for pair in found if pair.animal is None or run.lone]


def _difference(pair: Pair, cards: list[str]) -> str:
    parts = []
    for card, other in zip(cards, pair.there, strict=True):
        if other is None:
            continue
        times = times_as_large(pair.here, other)
        more = f", {number(times, times)} times as large" if times is not None else ""
        parts.append(f"{_said(other)} without memory ({card}){more}")
    return f"Selection of {pair.response} is {_said(pair.here)} with memory, and {listed(parts)}."


def _what_it_means() -> str:
    return (
        "A card without memory takes every return to known ground for a preference for what grows there; the "
        f"difference is what memory accounts for instead. {UNMAPPED}"
    )


def _said(one: Estimate) -> str:
    known = known_to(one.lower, one.median, one.upper)
    return f"{number(one.median, known)} ({interval(one.lower, one.upper, known)})"


def _cell(one: Estimate | None) -> dict[str, str]:
    if one is None:
        return {"median": "–", "interval": "–"}
    known = known_to(one.lower, one.median, one.upper)
    return {"median": number(one.median, known), "interval": interval(one.lower, one.upper, known)}


def _row(pair: Pair) -> dict[str, Any]:
    cells = [_cell(one) for one in (pair.here, *pair.there)]
    return {"response": pair.response, "whose": pair.animal or "population", "unit": pair.unit, "cells": cells}


def _figure(run: MemoryContents, found: list[Pair], cards: list[str]) -> Picture:
    """Median and interval of each row, with memory and without, all on one axis."""
    with our_style():
        figure = Figure(figsize=(9.0, 0.36 * len(found) + 1.3), layout="constrained")
        axes = figure.subplots()
        for at, pair in enumerate(found):
            drawn = [(pair.here, _HERE), *zip(pair.there, cycle(_THERE), strict=False)]
            for order, (one, how) in enumerate(drawn):
                if one is None:
                    continue
                y = at + 0.22 * (order - (len(drawn) - 1) / 2)
                wide = 2.4 if pair.animal is None else 1.1
                axes.plot([one.lower, one.upper], [y, y], color=how["color"], linewidth=wide, zorder=3)
                axes.plot(one.median, y, markersize=6 if pair.animal is None else 4.5, zorder=4, **how)
            if at and found[at - 1].response != pair.response:
                axes.axhline(at - 0.5, color="#8a9499", linewidth=0.7)
        axes.axvline(0, color=INK, linewidth=0.8, linestyle=(0, (4, 3)), zorder=1)
        axes.set_yticks(range(len(found)), [_label(pair) for pair in found])
        axes.set_ylim(len(found) - 0.4, -0.6)
        axes.tick_params(axis="y", length=0)
        axes.set_xlabel("selection, per sd of the layer (classes: against the reference class)")
        handles = [Line2D([], [], label=f"with memory ({run.facts['card']['name']})", **_HERE)]
        for card, how in zip(cards, cycle(_THERE), strict=False):
            handles.append(Line2D([], [], label=f"without memory ({card})", **how))
        figure.legend(handles=handles, loc="outside lower center", ncols=len(handles))
        alt = f"Selection with memory and without ({', '.join(cards)}): medians and intervals of {len(found)} rows."
        caption = f"Median and {percent(run.prob)} interval of selection, with memory and without, on one axis."
        return picture(figure, alt, caption)


def _label(pair: Pair) -> str:
    return f"{short(pair.response)}, {'population' if pair.animal is None else short(pair.animal)}"
