"""Maps for the page: all groups on one map beside the layer, further layers, and a panel for each group."""

import geopandas
import numpy as np
from matplotlib.axes import Axes
from matplotlib.cm import ScalarMappable
from matplotlib.colors import Normalize, PowerNorm
from matplotlib.figure import Figure

from bayesrange.report._drawing import (
    DENSITY,
    HUES,
    INK,
    LAYER,
    NOT_HABITABLE,
    Picture,
    emptiest_corner,
    extent_km,
    image,
    map_axes,
    our_style,
    picture,
    scale_bar,
    shape,
    short,
)
from bayesrange.report._homes import Home, homes
from bayesrange.report._isopleths import AS_LIKELY_AS_NOT
from bayesrange.report._labels import place_labels
from bayesrange.report._map_parts import (
    common_side_km,
    draw_home,
    draw_isopleths,
    fix_alpha,
    label_points,
    legend,
    middle_km,
    tint,
)
from bayesrange.report._read import Contents

_WIDTH_IN = 11.0
_BAND = "#E69F00"
_LINE_ON_BLUE = "#8f3d00"
NAMES_UP_TO = 9  # more groups are numbered on the overview


def group_hues(run: Contents) -> list[str]:
    """A colour for each group, so that groups that overlap differ as long as the colours last."""
    overlap = run.space_use["overlap"].mean(("chain", "draw")).transpose("group", "neighbour").values
    hues: list[int] = []
    for group in range(len(run.groups)):
        cost = np.zeros(len(HUES))
        for earlier, hue in enumerate(hues):
            cost[hue] += float(overlap[group, earlier])
        used = np.bincount(hues, minlength=len(HUES))
        hues.append(int(np.lexsort((np.arange(len(HUES)), used, np.round(cost, 2)))[0]))
    return [HUES[hue] for hue in hues]


def overview(run: Contents, outlines: geopandas.GeoDataFrame) -> Picture:
    """Every group's UD, isopleths, fixes and home on one map, and the first layer beside it."""
    layers = run.layers
    with our_style():
        west, east, south, north = extent_km(run)
        columns = 2 if layers else 1
        width = _WIDTH_IN if layers else 0.68 * _WIDTH_IN
        tall = min(max((width / columns - 0.7) * (north - south) / (east - west), 2.0), 9.0)
        figure = Figure(figsize=(width, tall + 1.6), layout="constrained")
        panels = figure.subplots(1, columns, squeeze=False)[0]
        _all_groups(panels[0], run, outlines)
        if layers:
            _one_layer(figure, panels[1], run, layers[0], outlines)
        figure.legend(
            handles=legend(run, "#555555", "#555555"),
            loc="outside lower center",
            ncols=4 if layers else 3,
            fontsize=8,
        )
        numbered = len(run.groups) > NAMES_UP_TO
        texts = [str(at) if numbered else short(name) for at, name in enumerate(run.groups, 1)]
        place_labels(panels[0], label_points(run), texts)
        names = ", ".join(f"{at}: {name}" for at, name in enumerate(run.groups, 1))
        beside = f" The layer {layers[0]} is mapped beside it." if layers else ""
        keyed = f" Numbers stand for groups: {names}." if numbered else ""
        alt = f"Map of the ranges of {len(run.groups)} groups with isopleths, fixes and homes. Groups: {names}.{beside}"
        caption = (
            "All groups. Shade: posterior mean of the utilisation distribution, each group to its own peak "
            f"(square-root scale; densities in 1/km² stand in the next figure).{keyed}{beside}"
        )
        return picture(figure, alt, caption)


def further_layers(run: Contents, outlines: geopandas.GeoDataFrame) -> Picture | None:
    """The second and later layers, three in a row; None if there is one at most."""
    layers = run.layers[1:]
    if not layers:
        return None
    with our_style():
        west, east, south, north = extent_km(run)
        columns = min(3, len(layers))
        rows = -(-len(layers) // columns)
        panel = _WIDTH_IN / 3
        tall = min(max(panel * (north - south) / (east - west), 1.5), 5.0) + 0.9
        figure = Figure(figsize=(panel * columns, tall * rows), layout="constrained")
        panels = figure.subplots(rows, columns, squeeze=False).ravel()
        for axes, name in zip(panels, layers, strict=False):
            _one_layer(figure, axes, run, name, outlines)
        for axes in panels[len(layers) :]:
            axes.set_visible(False)
        alt = f"Maps of further layers with the isopleths of all groups: {', '.join(layers)}."
        return picture(figure, alt, "Further layers of the study.")


def each_group(run: Contents, outlines: geopandas.GeoDataFrame) -> Picture:
    """One panel a group: UD in 1/km², isopleths with bands, its fixes; all to one scale and one colour bar."""
    with our_style():
        columns = min(4 if len(run.groups) > 6 else 3, len(run.groups))
        rows = -(-len(run.groups) // columns)
        width = _WIDTH_IN if columns > 2 else 4.2 * columns
        figure = Figure(figsize=(width, (width / columns + 0.1) * rows + 1.1), layout="constrained")
        panels = figure.subplots(rows, columns, squeeze=False)
        mean = run.space_use["density_mean"].transpose("group", "y", "x").values
        top = float(np.nanmax(np.where(run.inside, mean, np.nan)))
        norm = PowerNorm(0.5, vmin=0.0, vmax=top or 1.0)
        side = common_side_km(run, outlines)
        centres = homes(run)
        for at, (axes, name) in enumerate(zip(panels.ravel(), run.groups, strict=False)):
            _one_group(axes, run, at, outlines[outlines["group"] == name], norm, side, centres[name])
            axes.set_xlabel("easting [km]" if at + columns >= len(run.groups) else "")
            axes.set_ylabel("northing [km]" if at % columns == 0 else "")
        for axes in panels.ravel()[len(run.groups) :]:
            axes.set_visible(False)
        bar = figure.colorbar(ScalarMappable(norm, DENSITY), ax=panels, location="top", shrink=0.5, aspect=45, pad=0.02)
        bar.set_label("utilisation distribution, posterior mean [1/km²], square-root scale")
        figure.legend(
            handles=legend(run, _LINE_ON_BLUE, _BAND),
            loc="outside lower center",
            ncols=5,
            fontsize=8,
        )
        alt = f"One map for each of the {len(run.groups)} groups: density, isopleths with bands, fixes and home centre."
        caption = (
            "Each group by itself, all to one scale and one colour bar. The line is where a place is as likely as not "
            "inside the isopleth; the band runs from possible (5 %) to nearly sure (95 %)."
        )
        return picture(figure, alt, caption)


def _all_groups(axes: Axes, run: Contents, outlines: geopandas.GeoDataFrame) -> None:
    map_axes(axes, run)
    hues, centres = group_hues(run), homes(run)
    fix_group = run.constant["group_of_fix"].values.astype(str)
    x_km, y_km = run.observed["x"].values / 1e3, run.observed["y"].values / 1e3
    mean = run.space_use["density_mean"].transpose("group", "y", "x").values
    for at, name in enumerate(run.groups):
        image(axes, run, tint(np.where(run.inside, mean[at], 0.0), hues[at]), interpolation="nearest")
        draw_isopleths(axes, outlines[outlines["group"] == name], run.isopleths, hues[at], hues[at], wide=1.5)
        mine = fix_group == name
        axes.plot(x_km[mine], y_km[mine], ".", color=INK, markersize=1.6, alpha=fix_alpha(run), zorder=4)
    for name in run.groups:
        draw_home(axes, centres[name])
    loose = ~np.isin(fix_group, run.groups)
    axes.plot(x_km[loose], y_km[loose], ".", color=INK, markersize=1.6, alpha=fix_alpha(run), zorder=4)
    axes.set_title("Ranges of all groups")
    scale_bar(axes, emptiest_corner((mean / np.nanmax(mean, axis=(1, 2), keepdims=True)).max(axis=0)))


def _one_layer(figure: Figure, axes: Axes, run: Contents, name: str, outlines: geopandas.GeoDataFrame) -> None:
    map_axes(axes, run, northing=False)
    values = np.where(run.inside, run.constant["layer_value"].sel(layer=name).transpose("y", "x").values, np.nan)
    drawn = image(axes, run, values, cmap=LAYER, interpolation="nearest")
    widest = outlines[(outlines["isopleth"] == run.isopleths[-1]) & (outlines["probability"] == AS_LIKELY_AS_NOT)]
    for geometry in widest.geometry:
        shape(axes, geometry, facecolor="none", edgecolor="black", linewidth=2.4, zorder=3)
        shape(axes, geometry, facecolor="none", edgecolor="white", linewidth=1.1, zorder=3)
    unit = run.facts["scales"]["layers"].get(name, {}).get("unit") or "no unit given"
    figure.colorbar(drawn, ax=axes, location="bottom", shrink=0.8, aspect=35, pad=0.02, label=f"{short(name)} [{unit}]")
    axes.set_title(f"Layer {short(name)} with {run.isopleths[-1]} % isopleths")


def _one_group(
    axes: Axes,
    run: Contents,
    at: int,
    mine: geopandas.GeoDataFrame,
    norm: Normalize,
    side_km: float,
    home: Home | None,
) -> None:
    name = run.groups[at]
    map_axes(axes, run)
    mean = run.space_use["density_mean"].sel(group=name).transpose("y", "x").values
    image(axes, run, np.where(run.inside, mean, np.nan), cmap=DENSITY, norm=norm, interpolation="nearest")
    draw_isopleths(axes, mine, run.isopleths, _LINE_ON_BLUE, _BAND, wide=1.2)
    here = run.constant["group_of_fix"].values.astype(str) == name
    x_km, y_km = run.observed["x"].values[here] / 1e3, run.observed["y"].values[here] / 1e3
    axes.plot(x_km, y_km, ".", color=INK, markersize=1.6, alpha=fix_alpha(run), zorder=4)
    draw_home(axes, home)
    middle = middle_km(run, mine, mean)
    axes.set_xlim(middle[0] - side_km / 2, middle[0] + side_km / 2)
    axes.set_ylim(middle[1] - side_km / 2, middle[1] + side_km / 2)
    axes.set_facecolor(NOT_HABITABLE)
    axes.set_title(f"{at + 1}  {short(name)}")
    scale_bar(axes)
