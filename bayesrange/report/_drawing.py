"""What all figures share: colours that hold for colour-blind readers, axes in km, shapes as paths, PNG out.

Figures are drawn without a global state (no pyplot) and read names literally: `$` in a name starts no formula.
"""

import io
import struct
from base64 import b64encode
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass

import matplotlib
import numpy as np
import shapely
from jaxtyping import Float
from matplotlib.axes import Axes
from matplotlib.colors import ListedColormap
from matplotlib.figure import Figure
from matplotlib.patches import PathPatch
from matplotlib.path import Path as Outline
from matplotlib.ticker import MaxNLocator
from numpy.typing import NDArray
from shapely.geometry.base import BaseGeometry

from bayesrange.report._contents import RunContents

# Okabe & Ito (2008), Color Universal Design; without yellow and black, which are lost on white and among text.
HUES = ("#0072B2", "#D55E00", "#009E73", "#CC79A7", "#E69F00", "#56B4E9")
INK = "#1f2a30"
NOT_HABITABLE = "#d9dcdd"
DENSITY = ListedColormap(matplotlib.colormaps["Blues"](np.linspace(0.0, 0.9, 256)), name="density")
LAYER = matplotlib.colormaps["cividis"]
DOTS_PER_INCH = 150
PAGE_DOTS_PER_INCH = 100
LONGEST_NAME = 22

_STYLE = {
    "font.family": "DejaVu Sans",
    "font.size": 8.5,
    "axes.titlesize": 9.5,
    "axes.titleweight": "bold",
    "axes.edgecolor": "#8a9499",
    "axes.labelcolor": INK,
    "axes.linewidth": 0.7,
    "text.color": INK,
    "text.parse_math": False,
    "axes.formatter.use_mathtext": False,
    "axes.formatter.useoffset": False,
    "xtick.color": INK,
    "ytick.color": INK,
    "xtick.major.size": 3,
    "ytick.major.size": 3,
    "legend.frameon": False,
}


@dataclass(frozen=True)
class Picture:
    """A figure for the page: PNG as a data URI, its width on the page, words for who cannot see it, and its caption."""

    uri: str
    width_px: int
    alt: str
    caption: str


@contextmanager
def our_style() -> Iterator[None]:
    """Draw with our settings only, whatever the user's matplotlib configuration says."""
    with matplotlib.rc_context():
        matplotlib.rcdefaults()
        matplotlib.rcParams.update(_STYLE)
        yield


def picture(figure: Figure, alt: str, caption: str) -> Picture:
    """Render a figure. The file names no software version: the same run gives the same bytes."""
    out = io.BytesIO()
    how = {"metadata": {"Software": None}, "bbox_inches": "tight", "pad_inches": 0.05}
    figure.savefig(out, format="png", dpi=DOTS_PER_INCH, **how)
    png = out.getvalue()
    (pixels,) = struct.unpack(">I", png[16:20])  # the width in the header of a PNG
    uri = "data:image/png;base64," + b64encode(png).decode("ascii")
    return Picture(uri, round(pixels * PAGE_DOTS_PER_INCH / DOTS_PER_INCH), alt, caption)


def short(name: str) -> str:
    """A name that fits into a figure."""
    name = " ".join(name.split()) or "(no name)"
    return name if len(name) <= LONGEST_NAME else name[: LONGEST_NAME - 1] + "…"


def extent_km(run: RunContents) -> tuple[float, float, float, float]:
    """West, east, south, north of the grid [km]."""
    half = run.cell_m / 2
    west, east, south, north = run.x_m[0] - half, run.x_m[-1] + half, run.y_m[0] - half, run.y_m[-1] + half
    return float(west) / 1e3, float(east) / 1e3, float(south) / 1e3, float(north) / 1e3


def map_axes(axes: Axes, run: RunContents, northing: bool = True) -> None:
    """A map's frame: equal scales, easting and northing in km, ground that is not habitable in grey."""
    west, east, south, north = extent_km(run)
    axes.set_aspect("equal")
    axes.set_xlim(west, east)
    axes.set_ylim(south, north)
    axes.imshow(
        np.where(run.inside, np.nan, 1.0),
        extent=(west, east, south, north),
        origin="lower",
        cmap=ListedColormap([NOT_HABITABLE]),
        vmin=0,
        vmax=2,
        zorder=0.5,
    )
    axes.xaxis.set_major_locator(MaxNLocator(4, steps=[1, 2, 5, 10]))
    axes.yaxis.set_major_locator(MaxNLocator(5, steps=[1, 2, 5, 10]))
    axes.set_xlabel("easting [km]")
    if northing:
        axes.set_ylabel("northing [km]")


def image(axes: Axes, run: RunContents, values: Float[NDArray, "ny nx"] | Float[NDArray, "ny nx 4"], **how: object):
    """Draw cell values (row 0 in the south) where they belong."""
    west, east, south, north = extent_km(run)
    return axes.imshow(values, extent=(west, east, south, north), origin="lower", zorder=1, **how)


def shape(axes: Axes, geometry: BaseGeometry, **how: object) -> None:
    """Draw a polygon geometry [m] with its holes on axes in km; an empty one draws nothing."""
    rings = []
    for part in shapely.get_parts(geometry):
        if part.geom_type == "Polygon" and not part.is_empty:
            for ring in (part.exterior, *part.interiors):
                rings.append(Outline(np.asarray(ring.coords)[:, :2] / 1e3, closed=True))
    if rings:
        axes.add_patch(PathPatch(Outline.make_compound_path(*rings), **how))


def emptiest_corner(density: Float[NDArray, "ny nx"]) -> tuple[bool, bool]:
    """Whether a map's emptiest corner is in the east, and whether in the north: there a scale bar hides least."""
    rows, columns = density.shape[0] // 5 + 1, density.shape[1] // 3 + 1
    known = np.nan_to_num(density)
    tops = {
        (False, False): known[:rows, :columns].max(),
        (True, False): known[:rows, -columns:].max(),
        (False, True): known[-rows:, :columns].max(),
        (True, True): known[-rows:, -columns:].max(),
    }
    return min(tops, key=lambda corner: float(tops[corner]))


def scale_bar(axes: Axes, corner: tuple[bool, bool] = (False, False)) -> None:
    """A bar of a round length, about a fifth of the map's width, in a corner (in the east?, in the north?)."""
    west, east = axes.get_xlim()
    south, north = axes.get_ylim()
    wanted = (east - west) / 5
    power = 10.0 ** np.floor(np.log10(wanted))
    length = float(power * max(step for step in (1, 2, 5) if step * power <= wanted))
    x = east - 0.04 * (east - west) - length if corner[0] else west + 0.04 * (east - west)
    y = north - 0.09 * (north - south) if corner[1] else south + 0.035 * (north - south)
    axes.plot([x, x + length], [y, y], color=INK, linewidth=2.2, solid_capstyle="butt", zorder=9)
    label = f"{length:g} km" if length >= 1 else f"{1e3 * length:g} m"
    axes.annotate(
        label,
        (x + length / 2, y),
        (0, 3),
        textcoords="offset points",
        ha="center",
        va="bottom",
        fontsize=7.5,
        zorder=9,
        bbox={"facecolor": "white", "alpha": 0.75, "edgecolor": "none", "pad": 0.8},
    )
