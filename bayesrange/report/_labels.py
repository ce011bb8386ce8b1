"""Names on a map that keep off each other."""

from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.patheffects import withStroke
from matplotlib.text import Annotation
from matplotlib.transforms import Bbox, BboxBase

from bayesrange.report._drawing import INK

_OFFSETS = ((0, 8), (0, -8), (9, 0), (-9, 0), (9, 9), (-9, 9), (9, -9), (-9, -9))
_OFFSETS += ((0, 20), (0, -20), (24, 12), (-24, 12))


def place_labels(axes: Axes, points: list[tuple[float, float]], texts: list[str]) -> None:
    """Write each text beside its point, where it covers least of earlier texts, of all points and of the frame.

    Greedy, in the order given; points in data units. Call it last: what is added later moves the axes.
    """
    figure = axes.get_figure(root=True)
    renderer = FigureCanvasAgg(figure).get_renderer()
    figure.draw_without_rendering()  # so that the layout, and with it every position, is final
    pixels = axes.transData.transform(points)
    taken = [Bbox.from_extents(x - 5, y - 5, x + 5, y + 5) for x, y in pixels]
    for point, text in zip(points, texts, strict=True):
        candidates = [_label(axes, point, text, offset) for offset in _OFFSETS]
        boxes = [label.get_window_extent(renderer) for label in candidates]
        best = min(range(len(boxes)), key=lambda at: (_covered(boxes[at], taken) + _outside(boxes[at], axes.bbox), at))
        for at, label in enumerate(candidates):
            if at != best:
                label.remove()
        taken.append(boxes[best])


def _label(axes: Axes, point: tuple[float, float], text: str, offset: tuple[int, int]) -> Annotation:
    across = "left" if offset[0] > 0 else "right" if offset[0] < 0 else "center"
    up = "bottom" if offset[1] > 0 else "top" if offset[1] < 0 else "center"
    return axes.annotate(
        text,
        point,
        offset,
        textcoords="offset points",
        ha=across,
        va=up,
        fontsize=8,
        fontweight="bold",
        color=INK,
        zorder=8,
        path_effects=[withStroke(linewidth=2.5, foreground="white")],
    )


def _covered(box: Bbox, taken: list[Bbox]) -> float:
    """Area that a box shares with earlier ones [pixel²]."""
    shared = [Bbox.intersection(box, other) for other in taken]
    return float(sum(part.width * part.height for part in shared if part is not None))


def _outside(box: Bbox, frame: BboxBase) -> float:
    part = Bbox.intersection(box, frame)
    return float(box.width * box.height - (part.width * part.height if part is not None else 0.0))
