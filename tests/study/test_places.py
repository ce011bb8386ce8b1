"""Reference systems and areas: places must come out where the published examples put them."""

import json

import numpy as np
import pyproj
import pytest
import shapely

from bayesrange.study import StudyError

# (system of the fixes, longitude, latitude, study system, easting, northing, tolerance m)
WORKED = {
    # IOGP Guidance Note 7-2, method 9807; printed with a scale factor of 7 digits, hence 1 cm
    "iogp": ("EPSG:4277", 0.5, 50.5, "EPSG:27700", 577274.99, 69740.50, 0.01),
    # Ordnance Survey, Guide to coordinate systems in Great Britain: 52 39 27.2531 N, 1 43 04.5177 E
    "os": ("EPSG:4277", 1 + 43 / 60 + 4.5177 / 3600, 52 + 39 / 60 + 27.2531 / 3600, "EPSG:27700", 651409.903,
           313177.270, 0.001),
    # Definition of UTM: the central meridian on the equator
    "utm": ("EPSG:4326", 9.0, 0.0, "EPSG:32632", 500000.0, 0.0, 0.001),
}  # fmt: skip


@pytest.mark.parametrize("case", WORKED)
def test_fixes_are_carried_as_in_worked_examples(folder, case):
    source, longitude, latitude, target, easting, northing, tolerance = WORKED[case]
    square = shapely.box(easting - 500, northing - 500, easting + 500, northing + 500)
    _metric_area(folder, square, target)
    folder.toml["study"]["crs"] = target
    folder.toml["fixes"]["crs"] = source
    for section in ("groups", "layers"):
        del folder.toml[section]
    folder.toml["model"]["layers"] = []
    folder.fixes = folder.fixes.iloc[:1].assign(x=longitude, y=latitude)
    fix = folder.read().fixes.iloc[0]
    assert abs(fix["x"] - easting) <= tolerance
    assert abs(fix["y"] - northing) <= tolerance


def _metric_area(folder, shape, crs):
    geojson = shapely.geometry.mapping(shape) | {"crs": {"type": "name", "properties": {"name": crs}}}
    folder.path("area.geojson").write_text(json.dumps(geojson))


def test_the_utm_zone_is_chosen_from_longitude_and_latitude_and_said(folder):
    plain = folder.read()
    to_degrees = pyproj.Transformer.from_crs(folder.crs, "EPSG:4326", always_xy=True)
    folder.fixes["x"], folder.fixes["y"] = to_degrees.transform(*folder.fixes[["x", "y"]].to_numpy(dtype=float).T)
    folder.groups["x"], folder.groups["y"] = to_degrees.transform(*folder.groups[["x", "y"]].to_numpy(dtype=float).T)
    folder.toml["fixes"]["crs"] = "EPSG:4326"
    del folder.toml["study"]["crs"]
    study = folder.read()
    assert study.crs.to_epsg() == 32631
    assert any("EPSG:32631" in w for w in study.warnings)
    # there and back through PROJ: well below a millimetre
    np.testing.assert_allclose(study.fixes[["x", "y"]], plain.fixes[["x", "y"]], atol=1e-4, rtol=0)
    np.testing.assert_allclose(study.groups[["x", "y"]], plain.groups[["x", "y"]], atol=1e-4, rtol=0)


def test_darwin_core_names_are_understood_and_the_radius_is_read_as_95_percent(folder):
    plain = folder.read()
    to_degrees = pyproj.Transformer.from_crs(folder.crs, "EPSG:4326", always_xy=True)
    folder.fixes["x"], folder.fixes["y"] = to_degrees.transform(*folder.fixes[["x", "y"]].to_numpy(dtype=float).T)
    # names: TDWG Darwin Core term list
    names = {"animal": "organismID", "time": "eventDate", "x": "decimalLongitude", "y": "decimalLatitude"}
    folder.fixes = folder.fixes.rename(columns=names).assign(coordinateUncertaintyInMeters=30, geodeticDatum="WGS84")
    study = folder.read()
    np.testing.assert_allclose(study.fixes[["x", "y"]], plain.fixes[["x", "y"]], atol=1e-4, rtol=0)
    # radius that holds 95 % of a circular normal error: 2.447747 sd (chi-square, two degrees of freedom)
    np.testing.assert_allclose(study.fixes["error_m"], 30 / 2.447747, rtol=3e-5)
    assert any("radius of a 95 % circle" in w for w in study.warnings)
    folder.fixes.loc[3, "geodeticDatum"] = "EPSG:4258"
    with pytest.raises(StudyError, match=r"geodeticDatum is not the same in all rows \(EPSG:4258, WGS84\)"):
        folder.read()


def test_homes_in_degrees_beside_a_metric_system_are_read_and_said(folder):
    plain = folder.read()
    to_degrees = pyproj.Transformer.from_crs(folder.crs, "EPSG:4326", always_xy=True)
    for table in (folder.fixes, folder.groups):
        table["x"], table["y"] = to_degrees.transform(*table[["x", "y"]].to_numpy(dtype=float).T)
    folder.toml["fixes"]["crs"] = "EPSG:4326"
    study = folder.read()
    np.testing.assert_allclose(study.groups[["x", "y"]], plain.groups[["x", "y"]], atol=1e-4, rtol=0)
    assert any("home centres look like degrees" in w for w in study.warnings)


def test_an_area_with_the_older_crs_member_is_taken_as_it_is(folder):
    square = folder.box(0, 0, 4000, 4000)
    _metric_area(folder, square, "urn:ogc:def:crs:EPSG::32631")
    assert folder.read().area.equals(square)


def test_an_area_in_several_touching_polygons_is_joined(folder):
    halves = shapely.MultiPolygon([folder.box(0, 0, 2000, 4000), folder.box(2000, 0, 4000, 4000)])
    folder.path("area.geojson").write_text(json.dumps({
        "type": "FeatureCollection",
        "crs": {"type": "name", "properties": {"name": folder.crs}},
        "features": [
            {"type": "Feature", "properties": {}, "geometry": shapely.geometry.mapping(p)} for p in halves.geoms
        ],
    }))  # fmt: skip
    study = folder.read()
    assert isinstance(study.area, shapely.Polygon)
    assert study.grid.habitable_km2 == 16.0


def test_a_system_that_stretches_distances_is_refused(folder):
    folder.area(folder.box(0, 0, 4000, 4000))
    to_mercator = pyproj.Transformer.from_crs(folder.crs, "EPSG:3857", always_xy=True)
    folder.fixes["x"], folder.fixes["y"] = to_mercator.transform(*folder.fixes[["x", "y"]].to_numpy(dtype=float).T)
    folder.toml["study"]["crs"] = "EPSG:3857"
    # Mercator's scale is 1/cos(latitude): at 50.55° N 1.57
    with pytest.raises(StudyError, match=r"EPSG:3857 stretches distances by 5[67] % at this area; choose one made"):
        folder.read()


def test_a_fix_in_the_sliver_of_a_cell_that_holds_no_sub_cell_is_still_inside(folder):
    folder.area(folder.box(0, 0, 4003, 4000))
    folder.fixes.loc[0, "x"] = folder.west + 4002
    assert folder.read().counts["outside_within_error"] == 0
