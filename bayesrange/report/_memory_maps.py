"""Maps of a memory report: each animal's track, what it remembers at the end of its record, and the layers."""

import numpy as np
import pandas as pd
from matplotlib import colormaps
from matplotlib.axes import Axes
from matplotlib.cm import ScalarMappable
from matplotlib.colors import ListedColormap, Normalize
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import Patch

from bayesrange.report._drawing import (
    INK,
    LAYER,
    NOT_HABITABLE,
    Picture,
    extent_km,
    image,
    map_axes,
    our_style,
    picture,
    scale_bar,
    short,
)
from bayesrange.report._read_memory import MemoryContents
from bayesrange.report._recall import recall, surface

RECALL = ListedColormap(colormaps["YlGnBu"](np.linspace(0.0, 0.62, 256)), name="recall")
_WHEN = ListedColormap(colormaps["plasma"](np.linspace(0.0, 0.8, 256)), name="when")
_WIDTH_IN = 11.0
_FIRST = {"marker": "^", "color": "white", "markeredgecolor": INK, "markersize": 7, "linestyle": "none"}
_LAST = {"marker": "s", "color": INK, "markeredgecolor": "white", "markersize": 5.5, "linestyle": "none"}


def track_maps(run: MemoryContents) -> Picture:
    """One panel an animal, all to one scale: its fixes by their time, joined by lines, first and last fix marked."""
    fixes = {name: run.fixes[run.fixes["animal"] == name] for name in run.animals}
    days = {name: (mine["time"] - mine["time"].iloc[0]) / pd.Timedelta(days=1) for name, mine in fixes.items()}
    norm = Normalize(0.0, max(float(since.max()) for since in days.values()) or 1.0)
    with our_style():
        figure, panels, used = _panels(run)
        for axes, name in zip(used, run.animals, strict=True):
            mine = fixes[name]
            axes.plot(mine["x_km"], mine["y_km"], color="#8a9499", linewidth=0.45, alpha=0.7, zorder=3)
            axes.scatter(mine["x_km"], mine["y_km"], c=days[name], s=2.5, cmap=_WHEN, norm=norm, lw=0, zorder=4)
            _ends(axes, mine)
            scale_bar(axes)
        _colour_bar(figure, panels, ScalarMappable(norm, _WHEN), "days since the animal’s first fix")
        handles = [*_end_handles(run), Patch(facecolor=NOT_HABITABLE, label="outside, or not habitable")]
        figure.legend(handles=handles, loc="outside lower center", ncols=3)
        alt = f"One map for each of {len(run.animals)} animals with its track, coloured by time, first and last fix."
        caption = "Tracks, all to one scale, north up. Lines join fixes in the order of time, across gaps too."
        return picture(figure, alt, caption)


def recall_maps(run: MemoryContents) -> Picture | None:
    """One panel an animal: mean recall at its last fix, all to one scale and one colour bar; None without memory."""
    cells = surface(run)
    if cells is None:
        return None
    norm = Normalize(0.0, 1.0)
    with our_style():
        figure, panels, used = _panels(run)
        for axes, name in zip(used, run.animals, strict=True):
            mine = run.fixes[run.fixes["animal"] == name]
            where = {"extent": cells.extent_km, "origin": "lower", "interpolation": "nearest", "zorder": 0.4}
            frame = (*axes.get_xlim(), *axes.get_ylim())
            axes.imshow(recall(run, cells, name, "recall_mean"), cmap=RECALL, norm=norm, **where)
            axes.axis(frame)
            axes.plot(
                mine["x_km"], mine["y_km"], ".", color=INK, markersize=1.9, alpha=0.4, markeredgewidth=0, zorder=4
            )
            _ends(axes, mine)
            scale_bar(axes)
        _colour_bar(figure, panels, ScalarMappable(norm, RECALL), "recall at the end of the record, 0 to 1")
        fix = Line2D([], [], color=INK, marker=".", alpha=0.5, linestyle="none", markersize=4, label="fix")
        handles = [fix, *_end_handles(run), Patch(facecolor=NOT_HABITABLE, label="outside, or not habitable")]
        figure.legend(handles=handles, loc="outside lower center", ncols=4)
        alt = f"One map for each of {len(run.animals)} animals of its recall at the end of the record, 0 to 1."
        caption = (
            "What each animal remembers at its last fix: posterior mean of the long memory’s recall, 0 (nothing) to 1 "
            "(all it can), all to one scale and one colour bar. Recall is half where the remembered time at a place is "
            "recall_half."
        )
        return picture(figure, alt, caption)


def layer_maps(run: MemoryContents) -> Picture | None:
    """Every layer with all fixes, up to three in a row; None without layers."""
    if not run.layers:
        return None
    with our_style():
        west, east, south, north = extent_km(run)
        columns = min(3, len(run.layers))
        rows = -(-len(run.layers) // columns)
        panel = _WIDTH_IN / max(columns, 2)
        tall = min(max(panel * (north - south) / (east - west), 1.5), 6.0) + 0.9
        figure = Figure(figsize=(panel * columns, tall * rows), layout="constrained")
        panels = figure.subplots(rows, columns, squeeze=False).ravel()
        for axes, name in zip(panels, run.layers, strict=False):
            _one_layer(figure, axes, run, name)
        for axes in panels[len(run.layers) :]:
            axes.set_visible(False)
        alt = f"Maps of the layers with the fixes of all animals: {', '.join(run.layers)}."
        return picture(figure, alt, "The layers, with the fixes of all animals. Grey: outside, or not habitable.")


def _one_layer(figure: Figure, axes: Axes, run: MemoryContents, name: str) -> None:
    map_axes(axes, run)
    values = np.where(run.inside, run.constant["layer_value"].sel(layer=name).transpose("y", "x").values, np.nan)
    drawn = image(axes, run, values, cmap=LAYER, interpolation="nearest")
    for colour, size in (("black", 2.4), ("white", 1.2)):
        axes.plot(run.fixes["x_km"], run.fixes["y_km"], ".", color=colour, markersize=size, markeredgewidth=0, zorder=4)
    unit = run.facts["scales"].get("layers", {}).get(name, {}).get("unit") or "no unit given"
    figure.colorbar(drawn, ax=axes, location="bottom", shrink=0.8, aspect=35, pad=0.02, label=f"{short(name)} [{unit}]")
    axes.set_title(f"Layer {short(name)}")
    scale_bar(axes)


def _panels(run: MemoryContents) -> tuple[Figure, np.ndarray, list[Axes]]:
    """A figure with a map for each animal, framed on its track; all frames have one size."""
    windows = _windows(run)
    west, east, south, north = next(iter(windows.values()))
    columns = min(4, len(run.animals))
    rows = -(-len(run.animals) // columns)
    width = _WIDTH_IN if columns > 2 else 4.4 * columns
    tall = min(max((width / columns - 0.75) * (north - south) / (east - west), 1.4), 7.0) + 0.42
    figure = Figure(figsize=(width, tall * rows + 1.2), layout="constrained")
    panels = figure.subplots(rows, columns, squeeze=False)
    for at, (axes, name) in enumerate(zip(panels.ravel(), run.animals, strict=False)):
        map_axes(axes, run)
        axes.set_facecolor(NOT_HABITABLE)  # ground beyond the grid
        ground = np.where(run.inside, 1.0, np.nan)
        axes.imshow(ground, extent=extent_km(run), origin="lower", cmap=ListedColormap(["white"]), zorder=0.3)
        axes.set_xlim(windows[name][:2])
        axes.set_ylim(windows[name][2:])
        axes.set_title(short(name))
        axes.set_xlabel("easting [km]" if at + columns >= len(run.animals) else "")
        axes.set_ylabel("northing [km]" if at % columns == 0 else "")
    for axes in panels.ravel()[len(run.animals) :]:
        axes.set_visible(False)
    return figure, panels, list(panels.ravel()[: len(run.animals)])


def _windows(run: MemoryContents) -> dict[str, tuple[float, float, float, float]]:
    """West, east, south, north [km] of each animal's frame: as large as the widest track needs, inside the grid."""
    west, east, south, north = extent_km(run)
    ends = run.fixes.groupby("animal")[["x_km", "y_km"]].agg(["min", "max"]).loc[run.animals]
    least = 8 * run.cell_m / 1e3
    wide, tall = (float((ends[axis]["max"] - ends[axis]["min"]).max()) * 1.2 for axis in ("x_km", "y_km"))
    wide, tall = max(wide, tall / 2, least), max(tall, wide / 2, least)
    found = {}
    for name in run.animals:
        row = ends.loc[name]
        at_x = _slid(float(row["x_km"].mean()), wide, west, east)
        at_y = _slid(float(row["y_km"].mean()), tall, south, north)
        found[name] = (*at_x, *at_y)
    return found


def _slid(middle: float, size: float, low: float, high: float) -> tuple[float, float]:
    """An interval of a size around a middle, slid to lie between low and high as far as it fits."""
    if size >= high - low:
        middle = (low + high) / 2
    else:
        middle = min(max(middle, low + size / 2), high - size / 2)
    return middle - size / 2, middle + size / 2


def _ends(axes: Axes, mine: pd.DataFrame) -> None:
    axes.plot(mine["x_km"].iloc[:1], mine["y_km"].iloc[:1], zorder=7, **_FIRST)
    axes.plot(mine["x_km"].iloc[-1:], mine["y_km"].iloc[-1:], zorder=6, **_LAST)


def _end_handles(run: MemoryContents) -> list[object]:
    """Legend entries of first and last fix; an animal that starts naive was released at its first."""
    naive = "memory_start" in run.constant and (run.constant["memory_start"].values.astype(str) == "naive").all()
    first = "first fix (release point)" if naive else "first fix"
    return [Line2D([], [], label=first, **_FIRST), Line2D([], [], label="last fix", **_LAST)]


def _colour_bar(figure: Figure, panels: np.ndarray, of_what: ScalarMappable, label: str) -> None:
    bar = figure.colorbar(of_what, ax=panels, location="top", shrink=0.5, aspect=45, pad=0.02)
    bar.set_label(label)
