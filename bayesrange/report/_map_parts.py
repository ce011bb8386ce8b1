"""Parts of a map of ranges: isopleths with their bands, homes, washes of density, windows and legends."""

import geopandas
import numpy as np
from jaxtyping import Float
from matplotlib.axes import Axes
from matplotlib.colors import to_rgb
from matplotlib.lines import Line2D
from matplotlib.patches import Patch
from numpy.typing import NDArray
from shapely.geometry.base import BaseGeometry

from bayesrange.report._drawing import INK, NOT_HABITABLE, shape
from bayesrange.report._homes import Home, homes
from bayesrange.report._isopleths import AS_LIKELY_AS_NOT, NEARLY_SURE, POSSIBLE
from bayesrange.report._read import Contents

BAND_ALPHA = 0.38
_LINES = ("solid", (0, (4, 2)), (0, (1, 1.5)))


def draw_isopleths(
    axes: Axes, mine: geopandas.GeoDataFrame, isopleths: list[int], line: str, band: str, wide: float
) -> None:
    """The as-likely-as-not line of each isopleth over the band from possible to nearly sure; innermost solid."""
    for order, isopleth in enumerate(isopleths):
        rows = mine[mine["isopleth"] == isopleth]
        at: dict[float, BaseGeometry] = dict(zip(rows["probability"], rows.geometry, strict=True))
        shape(axes, at[POSSIBLE].difference(at[NEARLY_SURE]), facecolor=band, alpha=BAND_ALPHA, linewidth=0, zorder=2)
        drawn = {"edgecolor": line, "linewidth": wide, "linestyle": _line(order)}
        shape(axes, at[AS_LIKELY_AS_NOT], facecolor="none", zorder=3, **drawn)


def _line(order: int) -> object:
    return _LINES[min(order, len(_LINES) - 1)]


def draw_home(axes: Axes, home: Home | None) -> None:
    """A known home as a filled triangle, an estimated one as an open diamond with its 90 % (or other) interval."""
    if home is None:
        return
    if home.known:
        axes.plot(home.x_km, home.y_km, "^", color=INK, markersize=6, markeredgecolor="white", zorder=7)
        return
    axes.plot(home.x_interval_km, (home.y_km, home.y_km), color=INK, linewidth=1.2, zorder=7)
    axes.plot((home.x_km, home.x_km), home.y_interval_km, color=INK, linewidth=1.2, zorder=7)
    axes.plot(home.x_km, home.y_km, "D", color="white", markersize=5, markeredgecolor=INK, zorder=7)


def tint(density: Float[NDArray, "ny nx"], hue: str) -> Float[NDArray, "ny nx 4"]:
    """One group's density as a wash of its hue: the deeper, the denser."""
    top = float(np.nanmax(density)) or 1.0
    wash = np.empty((*density.shape, 4))
    wash[..., :3] = to_rgb(hue)
    wash[..., 3] = 0.6 * np.sqrt(np.clip(np.nan_to_num(density) / top, 0.0, 1.0))
    return wash


def fix_alpha(run: Contents) -> float:
    """Opacity of a fix: fainter where there are many."""
    return 0.55 if run.observed["x"].size < 3000 else 0.3


def label_points(run: Contents) -> list[tuple[float, float]]:
    """Where a group's label belongs: its home, or the peak of its density [km]."""
    points = []
    for name, home in homes(run).items():
        mean = run.space_use["density_mean"].sel(group=name).transpose("y", "x").values
        points.append((home.x_km, home.y_km) if home is not None else _peak_km(run, mean))
    return points


def _peak_km(run: Contents, density: Float[NDArray, "ny nx"]) -> tuple[float, float]:
    row, column = np.unravel_index(int(np.nanargmax(np.where(run.inside, density, -np.inf))), density.shape)
    return float(run.x_m[column]) / 1e3, float(run.y_m[row]) / 1e3


def middle_km(run: Contents, mine: geopandas.GeoDataFrame, mean: Float[NDArray, "ny nx"]) -> tuple[float, float]:
    """The middle of all that is drawn of a group [km]."""
    widest = mine.geometry.union_all()
    if widest.is_empty:
        return _peak_km(run, mean)
    west, south, east, north = widest.bounds
    return (west + east) / 2e3, (south + north) / 2e3


def common_side_km(run: Contents, outlines: geopandas.GeoDataFrame) -> float:
    """Side of the square window that holds the widest group with a margin [km]."""
    sides = [4 * run.cell_m]
    for name in run.groups:
        widest = outlines[outlines["group"] == name].geometry.union_all()
        if not widest.is_empty:
            west, south, east, north = widest.bounds
            sides += [east - west, north - south]
    return 1.25 * max(sides) / 1e3


def legend(run: Contents, line: str, band: str) -> list[object]:
    """Entries for the isopleths in the given colours and for what else the map shows."""
    lines = [
        Line2D([], [], color=line, linewidth=1.4, linestyle=_line(order), label=f"{isopleth} % isopleth")
        for order, isopleth in enumerate(run.isopleths)
    ]
    shade = Patch(facecolor=band, alpha=BAND_ALPHA, label="possible to nearly sure")
    return [*lines, shade, *_places(run), Patch(facecolor=NOT_HABITABLE, label="outside, or not habitable")]


def _places(run: Contents) -> list[object]:
    """Legend entries of the points that are there."""
    shown = [Line2D([], [], color=INK, marker=".", linestyle="none", markersize=4, label="fix")]
    kinds = {home.known for home in homes(run).values() if home is not None}
    if True in kinds:
        shown.append(Line2D([], [], color=INK, marker="^", linestyle="none", markersize=6, label="home centre, given"))
    if False in kinds:
        how = {"color": "white", "markeredgecolor": INK, "marker": "D", "linestyle": "none"}
        shown.append(Line2D([], [], label="home centre, estimated", **how))
    return shown
