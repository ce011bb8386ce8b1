"""Figures of a look at the data: the map, when each animal was fixed, rates and rhythms, and displacement."""

import math

import numpy as np
import pandas as pd
from matplotlib.axes import Axes
from matplotlib.collections import LineCollection, PatchCollection
from matplotlib.colors import Normalize
from matplotlib.dates import AutoDateLocator, ConciseDateFormatter
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import Rectangle
from matplotlib.ticker import MaxNLocator, NullFormatter, PercentFormatter, StrMethodFormatter

from bayesrange.report._drawing import HUES, INK, LAYER, Picture, our_style, picture, scale_bar, shape, short
from bayesrange.screening import Screening, Settling

_WIDTH_IN = 11.0
_GREY = "#9aa4a9"
MARKS = {
    "outside": ("X", HUES[4], 10),
    "stationary": ("D", HUES[2], 7),
    "duplicate": ("s", HUES[5], 6.5),
    "bearing": ("P", HUES[0], 7),
    "spike": ("v", HUES[3], 7.5),
    "speed": ("^", HUES[1], 5.5),
}
"""Marker, colour and size of the flags that are drawn on the map, the lowest first."""

_FEWEST_TRIES, _FEWEST_FAILED = 10, 20
_MOST_POINTS, _MOST_LINES = 60_000, 15_000
MOST_ANIMALS, _MOST_TRACKS = 60, 24


def overview(found: Screening) -> Picture:
    """All fixes on a map, flagged ones marked; those beyond the frame stand at its edge."""
    study = found.study
    sound = study.fixes[found.sound]
    with our_style():
        west, south, east, north = _frame(found)
        wide = 0.72 * _WIDTH_IN
        tall = min(max(wide * (north - south) / (east - west), 3.0), 8.5)
        figure = Figure(figsize=(wide, tall + 0.8), layout="constrained")
        axes = figure.subplots()
        axes.set_aspect("equal")
        axes.set_xlim(west, east)
        axes.set_ylim(south, north)
        if study.area is not None:
            shape(axes, study.area, facecolor="#f6f7f7", edgecolor="#6d777c", linewidth=1.0, zorder=1)
        every = -(-len(sound) // _MOST_POINTS)
        _tracks(axes, sound) if len(sound) <= _MOST_LINES else None
        shown = sound.iloc[::every]
        axes.plot(shown["x"] / 1e3, shown["y"] / 1e3, ".", color=INK, markersize=1.8, alpha=0.4, zorder=3)
        handles = [Line2D([], [], color=INK, marker=".", linestyle="none", markersize=4, label="fix")]
        if study.groups is not None and study.groups["x"].notna().any():
            home = {"marker": "o", "color": "white", "markeredgecolor": INK, "linestyle": "none", "markersize": 6}
            axes.plot(study.groups["x"] / 1e3, study.groups["y"] / 1e3, zorder=5, **home)
            handles.append(Line2D([], [], label="home centre", **home))
        beyond = _flagged(axes, found, handles)
        axes.xaxis.set_major_locator(MaxNLocator(5, steps=[1, 2, 5, 10]))
        axes.yaxis.set_major_locator(MaxNLocator(5, steps=[1, 2, 5, 10]))
        axes.set_xlabel("easting [km]")
        axes.set_ylabel("northing [km]")
        scale_bar(axes)
        figure.legend(handles=handles, loc="outside lower center", ncols=min(len(handles), 8), fontsize=8)
        parts = ["Fixes in " + study.crs.name + "."]
        parts += ["Lines join an animal's fixes."] if len(sound) <= _MOST_LINES else []
        parts += [f"One in {every} is drawn."] if every > 1 else []
        parts += ["The outline is the study area."] if study.area is not None else []
        parts += [f"Flagged fixes beyond the frame stand at its edge ({beyond})."] if beyond else []
        return picture(figure, f"Map of {len(sound):,} fixes with the flagged ones marked.", " ".join(parts))


def _frame(found: Screening) -> tuple[float, float, float, float]:
    """West, south, east, north of the sound fixes and the area near them, with a margin [km]."""
    places = found.study.fixes.loc[found.sound if found.sound.any() else slice(None), ["x", "y"]] / 1e3
    west, south = places.min()
    east, north = places.max()
    if found.study.area is not None:
        bounds = np.array(found.study.area.bounds) / 1e3
        west, south = min(west, bounds[0]), min(south, bounds[1])
        east, north = max(east, bounds[2]), max(north, bounds[3])
    side = max(east - west, north - south, 0.2)
    middle_x, middle_y = (west + east) / 2, (south + north) / 2
    half_x = max(east - west, side / 2.5) / 2 + 0.04 * side
    half_y = max(north - south, side / 2.5) / 2 + 0.04 * side
    return middle_x - half_x, middle_y - half_y, middle_x + half_x, middle_y + half_y


def _tracks(axes: Axes, fixes: pd.DataFrame) -> None:
    for at, (_, own) in enumerate(fixes.groupby("animal", sort=True)):
        axes.plot(own["x"] / 1e3, own["y"] / 1e3, color=HUES[at % len(HUES)], linewidth=0.5, alpha=0.45, zorder=2)


def _flagged(axes: Axes, found: Screening, handles: list[Line2D]) -> int:
    """Mark flagged fixes; how many of them are beyond the frame."""
    (west, east), (south, north) = axes.get_xlim(), axes.get_ylim()
    beyond = 0
    for flag, (marker, hue, size) in MARKS.items():
        own = found.table[found.table["flag"] == flag]
        if own.empty:
            continue
        x, y = own["x"].to_numpy(dtype=float) / 1e3, own["y"].to_numpy(dtype=float) / 1e3
        beyond += int(((x < west) | (x > east) | (y < south) | (y > north)).sum())
        x, y = np.clip(x, west, east), np.clip(y, south, north)
        how = {"marker": marker, "color": hue, "markeredgecolor": "white", "markeredgewidth": 0.6, "linestyle": "none"}
        axes.plot(x, y, markersize=size, zorder=6, clip_on=False, **how)
        handles.append(Line2D([], [], markersize=size, label=f"{flag} ({len(own):,})", **how))
    return beyond


def calendar(found: Screening) -> Picture:
    """When each animal was fixed: a row an animal, gaps left white, flags marked."""
    names = found.animals["animal"].tolist()[:MOST_ANIMALS]
    with our_style():
        figure = Figure(figsize=(_WIDTH_IN, 0.9 + 0.2 * max(len(names), 3)), layout="constrained")
        axes = figure.subplots()
        own = dict(list(found.study.fixes[found.sound].groupby("animal")))
        for at, name in enumerate(names):
            axes.add_collection(LineCollection(_stretches(own[name]["time"], at), colors=HUES[0], linewidths=5))
        flags = found.table[found.table["flag"].isin(MARKS) & found.table["animal"].isin(names)]
        place = {name: at for at, name in enumerate(names)}
        for flag, (marker, hue, size) in MARKS.items():
            mine = flags[flags["flag"] == flag]
            if len(mine):
                when = mine["time"].dt.tz_localize(None).to_numpy()
                how = {
                    "markeredgecolor": "white",
                    "markeredgewidth": 0.5,
                    "linestyle": "none",
                    "markersize": 0.8 * size,
                }
                axes.plot(when, mine["animal"].map(place), marker=marker, color=hue, label=flag, zorder=4, **how)
        settled = found.animals.dropna(subset="settled")
        settled = settled[settled["animal"].isin(names)]
        if len(settled):
            when = pd.to_datetime(settled["settled"], utc=True).dt.tz_localize(None).to_numpy()
            axes.plot(
                when, settled["animal"].map(place), "|", color=INK, markersize=11, markeredgewidth=2, label="settled"
            )
        axes.set_yticks(range(len(names)), [short(name) for name in names])
        axes.set_ylim(len(names) - 0.4, -0.6)
        axes.xaxis.set_major_locator(AutoDateLocator(maxticks=10))
        axes.xaxis.set_major_formatter(ConciseDateFormatter(axes.xaxis.get_major_locator()))
        axes.autoscale_view(scaley=False)
        axes.margins(x=0.01)
        axes.tick_params(axis="y", length=0)
        for side in ("top", "right", "left"):
            axes.spines[side].set_visible(False)
        if axes.get_legend_handles_labels()[0]:
            figure.legend(loc="outside lower center", ncols=7, fontsize=8)
        left = len(found.animals) - len(names)
        more = f" The other {left} animals are in the table only." if left else ""
        caption = (
            "When each animal was fixed (UTC), a bar while fixes came at no more than three times its median "
            f"interval.{more}"
        )
        return picture(figure, f"Calendar of the fixes of {len(names)} animals.", caption)


def _stretches(time: pd.Series, at: int) -> list[list[tuple[float, float]]]:
    """Stretches in which fixes follow each other by at most three median intervals [days since 1970]."""
    day = time.dt.tz_localize(None).astype("datetime64[ns]").astype("int64").to_numpy(dtype=float) / 86_400e9
    between = np.diff(day)
    usual = float(np.median(between)) if len(between) else 0.0
    cut = np.flatnonzero(between > 3 * usual) + 1
    return [[(part[0], at), (part[-1] + usual / 3, at)] for part in np.split(day, cut) if len(part)]


def rates(found: Screening) -> Picture:
    """Intervals between fixes, fix success by hour where fixes failed, and the autocorrelation of step lengths."""
    with our_style():
        failed = int(found.by_hour["failed"].sum()) > 0
        told = {name: one for name, one in found.rhythms.items() if len(one.lag_h)}
        panels = 1 + failed + bool(told)
        figure = Figure(figsize=(_WIDTH_IN * panels / 3 + (0.8 if panels < 3 else 0), 3.1), layout="constrained")
        row = list(figure.subplots(1, panels, squeeze=False)[0])
        _intervals(row.pop(0), found)
        if failed:
            _success(row.pop(0), found)
        if told:
            _rhythms(row.pop(0), found)
        parts = [f"Intervals between an animal's fixes; the commonest is {_hours(found.interval_h)}."]
        if failed:
            zone = found.study.settings.fixes.zone or "UTC"
            parts.append(f"Share of attempts that gave a position, by hour ({zone}).")
        if told:
            parts.append(
                "Autocorrelation of log step lengths, one line an animal, those with a 24-hour rhythm in orange: a "
                "peak at 24 hours means rests or trips at fixed hours."
            )
        return picture(figure, "Histogram of fix intervals, fix success by hour, rhythm of steps.", " ".join(parts))


def _intervals(axes: Axes, found: Screening) -> None:
    table = found.intervals
    at = range(len(table))
    axes.bar(at, table["intervals"], width=0.9, color=HUES[0])
    labels = [
        f"{_hours(a)}–{_hours(b)}"
        if 0 < a and math.isfinite(b)
        else f"over {_hours(a)}"
        if 0 < a
        else f"to {_hours(b)}"
        for a, b in zip(table["from_h"], table["to_h"], strict=True)
    ]
    axes.set_xticks(list(at), labels, rotation=40, ha="right", rotation_mode="anchor", fontsize=7.5)
    axes.set_ylabel("intervals")
    axes.set_yscale("log")
    axes.set_ylim(bottom=0.7)
    axes.yaxis.set_major_formatter(StrMethodFormatter("{x:,.0f}"))
    axes.yaxis.set_minor_formatter(NullFormatter())
    axes.set_title("Time between fixes")


def _success(axes: Axes, found: Screening) -> None:
    table = found.by_hour
    axes.bar(table["hour"] + 0.5, table["success"], width=0.9, color=HUES[0])
    axes.set_xlim(0, 24)
    axes.set_xticks([0, 6, 12, 18, 24])
    axes.set_ylim(0, 1)
    axes.yaxis.set_major_formatter(PercentFormatter(1.0))
    axes.set_xlabel("hour of day")
    axes.set_title("Fix success")


def _rhythms(axes: Axes, found: Screening) -> None:
    axes.axhline(0, color="#8a9499", linewidth=0.7)
    axes.axvline(24, color="#8a9499", linewidth=0.7, linestyle=(0, (4, 2)))
    for one in sorted(found.rhythms.values(), key=lambda r: r.verdict == "24-hour rhythm"):
        if len(one.lag_h):
            has = one.verdict == "24-hour rhythm"
            axes.plot(
                one.lag_h, one.correlation, color=HUES[1] if has else _GREY, linewidth=1.1 if has else 0.7, alpha=0.8
            )
    axes.set_xlim(0, 48)
    axes.set_xticks([0, 12, 24, 36, 48])
    axes.set_xlabel("lag [h]")
    axes.set_ylabel("autocorrelation")
    axes.set_title("Rhythm of step lengths")


def success_map(found: Screening) -> Picture | None:
    """Where fixes fail: share of attempts that gave a position, by squares; None where hardly any failed."""
    table = found.by_square[found.by_square["fixes"] + found.by_square["failed"] >= _FEWEST_TRIES]
    if int(table["failed"].sum()) < _FEWEST_FAILED:
        return None
    side = float(table["side_m"].iloc[0]) / 1e3
    with our_style():
        west, south, east, north = _frame(found)
        wide = 0.5 * _WIDTH_IN
        tall = min(max((wide - 1.2) * (north - south) / (east - west), 2.2), 6.5)
        figure = Figure(figsize=(wide, tall + 0.6), layout="constrained")
        axes = figure.subplots()
        axes.set_aspect("equal")
        axes.set_xlim(west, east)
        axes.set_ylim(south, north)
        if found.study.area is not None:
            shape(axes, found.study.area, facecolor="#f6f7f7", edgecolor="#6d777c", linewidth=1.0, zorder=1)
        low = max(0.0, np.floor(10 * float(table["success"].min())) / 10)
        squares = [
            Rectangle((x / 1e3 - side / 2, y / 1e3 - side / 2), side, side) for x, y in zip(table["x"], table["y"])
        ]
        drawn = PatchCollection(squares, cmap=LAYER, norm=Normalize(min(low, 0.9), 1.0), linewidths=0, zorder=2)
        drawn.set_array(table["success"].to_numpy(dtype=float))
        axes.add_collection(drawn)
        bar = figure.colorbar(drawn, ax=axes, shrink=0.8, format=PercentFormatter(1.0))
        bar.set_label("fix success")
        axes.xaxis.set_major_locator(MaxNLocator(4, steps=[1, 2, 5, 10]))
        axes.yaxis.set_major_locator(MaxNLocator(4, steps=[1, 2, 5, 10]))
        axes.set_xlabel("easting [km]")
        axes.set_ylabel("northing [km]")
        axes.set_title("Where fixes fail")
        caption = (
            f"Share of attempts that gave a position, in squares of {side:g} km with at least {_FEWEST_TRIES} attempts"
            ". Failed fixes are put on the line between the fixes before and after them."
        )
        return picture(figure, f"Map of fix success in {len(table)} squares.", caption)


def _hours(hours: float) -> str:
    """A time in the unit that suits it."""
    for unit, size in (("d", 24.0), ("h", 1.0), ("min", 1 / 60)):
        if hours >= size * (2 if unit == "d" else 1):
            return f"{hours / size:.3g} {unit}"
    return f"{hours * 3600:.3g} s"


def displacements(found: Screening) -> Picture | None:
    """Net squared displacement of each animal with the shape taken for it; those not settled first."""
    told = {name: one for name, one in found.settlings.items() if one.verdict != "too few fixes"}
    if not told:
        return None
    order = {"not settled": 0, "migrating": 1, "settled": 2}
    names = sorted(told, key=lambda n: (order[told[n].verdict], told[n].settled is None, n))[:_MOST_TRACKS]
    with our_style():
        columns = min(6, len(names))
        rows = -(-len(names) // columns)
        figure = Figure(figsize=(_WIDTH_IN * max(columns, 3) / 6, 1.65 * rows + 0.3), layout="constrained")
        panels = figure.subplots(rows, columns, squeeze=False).ravel()
        for at, (axes, name) in enumerate(zip(panels, names, strict=False)):
            start = found.animals.set_index("animal")["first"][name]
            _displacement(axes, told[name], name, start)
            axes.set_xlabel("days" if at + columns >= len(names) else "")
            axes.set_ylabel("km²" if at % columns == 0 else "")
        for axes in panels[len(names) :]:
            axes.set_visible(False)
        left = len(told) - len(names)
        caption = (
            "Net squared displacement from the first place (dots: means over equal times; line: the shape taken for "
            "it; dashed: settled from here on). Rising to a plateau: settled; still rising: not settled; a late "
            f"plateau, or out and back: migrating.{f' {left} more animals are in the table only.' if left else ''}"
        )
        return picture(figure, f"Net squared displacement of {len(names)} animals.", caption)


def _displacement(axes: Axes, one: Settling, name: str, start: pd.Timestamp) -> None:
    hue = {"settled": HUES[0], "not settled": HUES[1], "migrating": HUES[3]}[one.verdict]
    axes.plot(one.days, one.nsd_km2, ".", color=_GREY, markersize=2.5)
    axes.plot(one.days, one.shape_km2, color=hue, linewidth=1.4)
    if one.settled is not None:
        axes.axvline((one.settled - start) / pd.Timedelta(days=1), color=INK, linewidth=0.8, linestyle=(0, (4, 2)))
    axes.set_ylim(bottom=0)
    axes.set_xlim(left=0)
    axes.xaxis.set_major_locator(MaxNLocator(3))
    axes.yaxis.set_major_locator(MaxNLocator(3))
    axes.set_title(f"{short(name)}: {one.verdict}", fontsize=8)
