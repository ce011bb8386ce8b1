"""Outlines of the isopleths with their uncertainty, as polygons in the study CRS.

`inside_probability` is known at cell centres. Between centres it is read linearly and contoured (marching squares), so
that outlines are smooth and not stepped; where the area ends it is carried outwards to the cell edge, and every outline
is cut at the edge of the habitable cells. Areas count only the habitable share of each cell. They agree with
tables/ranges.csv to about one cell: a contour cuts the corners of the cells.
"""

import contourpy
import geopandas
import numpy as np
import shapely
from jaxtyping import Bool, Float
from numpy.typing import NDArray
from scipy.ndimage import distance_transform_edt
from shapely.geometry.base import BaseGeometry

from bayesrange.report._read import Contents

# P(the place lies inside the isopleth) at the outline, and how it is said.
NEARLY_SURE, AS_LIKELY_AS_NOT, POSSIBLE = 0.95, 0.5, 0.05
LEVELS: dict[float, str] = {NEARLY_SURE: "nearly sure", AS_LIKELY_AS_NOT: "as likely as not", POSSIBLE: "possible"}


def isopleth_outlines(run: Contents) -> geopandas.GeoDataFrame:
    """Outlines of every group, isopleth and probability.

    Returns:
        Columns group, isopleth [%], probability, level (in words), area_km2, geometry (multipolygons [m]; empty,
        with area 0, where no place is that sure). Each level lies within the next less sure one.
    """
    cells, shares = _cells(run)
    land, tree = shapely.coverage_union_all(cells), shapely.STRtree(cells)
    probability = run.space_use["inside_probability"].transpose("isopleth", "group", "y", "x")
    rows = []
    for group in run.groups:
        for isopleth in run.isopleths:
            surface = np.asarray(probability.sel(group=group, isopleth=isopleth).values, dtype=float)
            x, y, z = _padded(run, surface)
            for level, words in LEVELS.items():
                outline = _only_polygons(shapely.intersection(_contour(x, y, z, level), land))
                near = tree.query(outline, predicate="intersects")
                pieces = shapely.intersection(cells[near], outline)
                area_km2 = float(shapely.area(pieces) @ shares[near]) / 1e6
                rows.append((group, isopleth, level, words, area_km2, outline))
    columns = ["group", "isopleth", "probability", "level", "area_km2", "geometry"]
    records = {name: [row[at] for row in rows] for at, name in enumerate(columns)}
    return geopandas.GeoDataFrame(records, geometry="geometry", crs=run.crs)


def _cells(run: Contents) -> tuple[NDArray, Float[NDArray, " cells"]]:
    """The habitable cells as boxes with exactly shared corners, and the habitable share of each."""
    east, north = _edges(run.x_m, run.cell_m), _edges(run.y_m, run.cell_m)
    row, column = np.nonzero(run.inside)
    boxes = shapely.box(east[column], north[row], east[column + 1], north[row + 1])
    return boxes, run.habitable[row, column]


def _edges(centres: Float[NDArray, " n"], cell_m: float) -> Float[NDArray, " edges"]:
    return centres[0] - cell_m / 2 + cell_m * np.arange(centres.size + 1)


def _padded(
    run: Contents, surface: Float[NDArray, "ny nx"]
) -> tuple[Float[NDArray, " columns"], Float[NDArray, " rows"], Float[NDArray, "rows columns"]]:
    """The surface carried beyond the habitable cells by the nearest one, with a border of one cell."""
    known: Bool[NDArray, "ny nx"] = run.inside & np.isfinite(surface)
    _, nearest = distance_transform_edt(~known, return_indices=True)
    x = run.x_m[0] + run.cell_m * np.arange(-1, run.x_m.size + 1)
    y = run.y_m[0] + run.cell_m * np.arange(-1, run.y_m.size + 1)
    return x, y, np.pad(surface[tuple(nearest)], 1, mode="edge")


def _contour(
    x: Float[NDArray, " columns"], y: Float[NDArray, " rows"], z: Float[NDArray, "rows columns"], level: float
) -> BaseGeometry:
    """Where z ≥ level. The level is lowered by 1e−6 so that cells that equal it (half of the draws) are in."""
    made = contourpy.contour_generator(x, y, z, fill_type=contourpy.FillType.OuterOffset)
    points, offsets = made.filled(level - 1e-6, 2.0)
    polygons = []
    for ring_points, starts in zip(points, offsets, strict=True):
        rings = [ring_points[start:end] for start, end in zip(starts[:-1], starts[1:], strict=True)]
        polygons.append(shapely.Polygon(rings[0], rings[1:]))
    return shapely.union_all(shapely.make_valid(np.array(polygons, dtype=object)))


def _only_polygons(geometry: BaseGeometry) -> shapely.MultiPolygon:
    """The polygons of a geometry: cutting leaves points and lines where an outline only touches the edge."""
    parts = shapely.get_parts(geometry)
    return shapely.MultiPolygon([part for part in parts if part.geom_type == "Polygon" and part.area > 0])
