"""Differences between periods, drawn: medians and intervals, one panel a unit."""

import pandas as pd
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D

from bayesrange.report._drawing import HUES, INK, Picture, our_style, picture
from bayesrange.report._format import percent

MOST_ROWS = 60
_LONGEST = 34
_MARKERS = "osD^vP"


def differences_figure(table: pd.DataFrame) -> Picture:
    """Median and interval of each row, a panel for each unit, zero dashed; pairs of periods by colour and marker.

    Args:
        table: rows to draw, columns as in differences.csv.
    """
    names = table["quantity"].drop_duplicates().tolist()
    left = max(len(names) - MOST_ROWS, 0)
    table = table[table["quantity"].isin(names[:MOST_ROWS])]
    units = [(unit, own) for unit, own in table.groupby("unit", sort=False)]
    heights = [own["quantity"].nunique() for _, own in units]
    pairs = table[["first", "second"]].drop_duplicates().to_records(index=False).tolist()
    with our_style():
        tall = 0.3 * sum(heights) + 0.62 * len(units) + 0.5
        figure = Figure(figsize=(9.0, tall), layout="constrained")
        ratios = {"height_ratios": [height + 0.5 for height in heights]}
        panels = figure.subplots(len(units), 1, squeeze=False, gridspec_kw=ratios)
        for axes, (unit, own) in zip(panels[:, 0], units, strict=True):
            _panel(axes, own, str(unit), pairs)
        handles = [
            Line2D([], [], color=_hue(at), marker=_MARKERS[at % 6], markersize=5, label=f"{second} minus {first}")
            for at, (first, second) in enumerate(pairs)
        ]
        figure.legend(handles=handles, loc="outside lower center", ncols=min(len(handles), 3))
        alt = f"Differences between periods: medians and intervals of {table['quantity'].nunique()} quantities."
        caption = (
            f"Median and {percent(float(table['prob'].iloc[0]))} interval of each difference, one axis a unit; "
            "the dashed line is no difference."
        )
        caption += f" {left} more quantities are in the tables." if left else ""
        return picture(figure, alt, caption)


def _hue(at: int) -> str:
    return HUES[at % len(HUES)]


def _panel(axes: Axes, own: pd.DataFrame, unit: str, pairs: list[tuple[str, str]]) -> None:
    names = own["quantity"].drop_duplicates().tolist()
    for row in own.itertuples():
        at = pairs.index((row.first, row.second))
        y = names.index(row.quantity) + 0.7 / len(pairs) * (at - (len(pairs) - 1) / 2)
        axes.plot([row.lower, row.upper], [y, y], color=_hue(at), linewidth=2.2, zorder=3)
        axes.plot(row.median, y, color=_hue(at), marker=_MARKERS[at % 6], markersize=5.5, zorder=4)
    axes.axvline(0, color=INK, linewidth=0.8, linestyle=(0, (4, 3)), zorder=1)
    axes.set_yticks(range(len(names)), [_short(name) for name in names])
    axes.set_ylim(len(names) - 0.5, -0.5)
    axes.tick_params(axis="y", length=0)
    axes.set_xlabel("difference" if unit in ("", "1") else f"difference [{unit}]")


def _short(name: str) -> str:
    name = " ".join(name.split())
    return name if len(name) <= _LONGEST else name[: _LONGEST - 1] + "…"
