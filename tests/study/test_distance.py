"""Layers of the distance to features, held against formulas of plane geometry."""

import zipfile

import geopandas
import numpy as np
import pytest
import shapely

LINE = [(-700, 500), (1300, 900), (1500, 3600), (6000, 3700)]  # a road that comes and goes beyond the area [m]


def vector(folder, name, shapes, crs="EPSG:32631", **more):
    table = geopandas.GeoDataFrame(geometry=list(shapes), crs=folder.crs).to_crs(crs)
    table.to_file(folder.path(name), **more)
    folder.toml["layers"]["road"] = {"distance": name}
    folder.toml["model"]["layers"] = ["road"]


def place(folder, x, y):
    return folder.west + x, folder.south + y


def road(folder, corners=LINE):
    return shapely.LineString([place(folder, x, y) for x, y in corners])


def mean_of_cells(distance, folder):
    """Mean of a function of x and y [m from the area's corner] over 4 × 4 places in each cell."""
    at = 25 * (np.arange(160) + 0.5)
    return distance(*np.meshgrid(at, at)).reshape(40, 4, 40, 4).mean(axis=(1, 3))


def to_segments(x, y, corners):
    """Distance to a broken line: foot of the perpendicular, clipped to each segment (plane geometry)."""
    best = np.full(x.shape, np.inf)
    for (ax, ay), (bx, by) in zip(corners, corners[1:], strict=False):
        along = ((x - ax) * (bx - ax) + (y - ay) * (by - ay)) / ((bx - ax) ** 2 + (by - ay) ** 2)
        along = np.clip(along, 0, 1)
        best = np.minimum(best, np.hypot(x - ax - along * (bx - ax), y - ay - along * (by - ay)))
    return best


def read(folder):
    return folder.read().layers["road"]


def test_distance_to_a_line_that_leaves_the_area(folder):
    vector(folder, "roads.gpkg", [road(folder)])
    layer = read(folder)
    expected = mean_of_cells(lambda x, y: to_segments(x, y, LINE), folder)
    np.testing.assert_allclose(layer.values, expected, atol=1e-6)  # coordinates near 6e6 m
    assert (layer.unit, layer.file) == ("m", "roads.gpkg")
    assert "roads.gpkg" in folder.read().hashes


def test_distance_to_the_nearest_of_points_lines_and_polygons(folder):
    lake = folder.box(2000, 2000, 3000, 2600) - folder.box(2200, 2200, 2800, 2400)  # with an island
    lines = shapely.GeometryCollection([shapely.MultiLineString([road(folder, LINE[:2])]), shapely.Point()])
    vector(folder, "features.gpkg", [shapely.Point(place(folder, 3500, 400)), lake, lines])

    def expected(x, y):
        to_lake = np.hypot(np.maximum(abs(x - 2500) - 500, 0), np.maximum(abs(y - 2300) - 300, 0))
        ashore = (abs(x - 2500) < 300) & (abs(y - 2300) < 100)
        to_lake = np.where(ashore, np.minimum(300 - abs(x - 2500), 100 - abs(y - 2300)), to_lake)
        return np.minimum.reduce([np.hypot(x - 3500, y - 400), to_lake, to_segments(x, y, LINE[:2])])

    values = read(folder).values
    np.testing.assert_allclose(values, mean_of_cells(expected, folder), atol=1e-6)
    assert values[20, 20] == 0 < values[22, 24]


def test_a_cap_holds_before_the_mean_is_taken(folder):
    vector(folder, "roads.gpkg", [road(folder)])
    folder.toml["layers"]["road"]["cap_m"] = 300
    expected = mean_of_cells(lambda x, y: np.minimum(to_segments(x, y, LINE), 300), folder)
    np.testing.assert_allclose(read(folder).values, expected, atol=1e-6)


def test_geojson_in_degrees_gives_the_same_distances(folder):
    vector(
        folder,
        "roads.geojson",
        [road(folder).segmentize(100)],
        crs="EPSG:4326",
        driver="GeoJSON",
        COORDINATE_PRECISION=9,
    )
    expected = mean_of_cells(lambda x, y: to_segments(x, y, LINE), folder)
    # edges of 100 m bend by less than a millimetre between two systems, and 9 decimals of a degree are 0.1 mm
    np.testing.assert_allclose(read(folder).values, expected, atol=2e-3)


@pytest.mark.parametrize("inner", ["roads.shp", "data/my roads.shp"])
def test_a_zipped_shapefile(folder, inner):
    vector(folder, "roads.shp", [road(folder)])
    with zipfile.ZipFile(folder.path("roads.zip"), "w", zipfile.ZIP_DEFLATED) as archive:
        for part in sorted(folder.folder.glob("roads.*")):
            if part.suffix != ".zip":
                archive.write(part, inner.removesuffix(".shp") + part.suffix)
    folder.toml["layers"]["road"]["distance"] = "roads.zip"
    expected = mean_of_cells(lambda x, y: to_segments(x, y, LINE), folder)
    np.testing.assert_allclose(read(folder).values, expected, atol=1e-6)


def test_the_named_table_of_a_geopackage_is_taken(folder):
    vector(folder, "ways.gpkg", [shapely.Point(place(folder, 0, 0))], layer="gates")
    vector(folder, "ways.gpkg", [road(folder)], layer="roads", mode="a")
    folder.toml["layers"]["road"]["table"] = "roads"
    expected = mean_of_cells(lambda x, y: to_segments(x, y, LINE), folder)
    np.testing.assert_allclose(read(folder).values, expected, atol=1e-6)
