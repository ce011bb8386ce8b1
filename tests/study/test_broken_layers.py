"""Layers that cannot be used: each is answered by one sentence that names section, key or file and the way out."""

import json
import os
import re
import zipfile

import geopandas
import numpy as np
import pytest
import shapely
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from bayesrange.study import StudyError, read_study

COVER = {"file": "cover.tif", "classes": {"1": "wood", "2": "grass"}, "reference": "grass"}


def refused(folder, match):
    folder.write()
    before = set(folder.folder.rglob("*"))
    with pytest.raises(StudyError, match=re.escape(match)) as caught:
        folder.read()
    text = str(caught.value)
    assert "\n" not in text and text[-1] in ".?"
    assert set(folder.folder.rglob("*")) == before  # nothing written


KEYS = {
    "no file": ({"unit": "m"}, "[layers.worms] file: this is missing; expected the name of a file"),
    "two sources": ({"file": "a.tif", "distance": "b.gpkg"}, "[layers.worms] distance: there is file too"),
    "cap of a raster": ({"file": "worms.tif", "cap_m": 9}, "[layers.worms] cap_m: this goes with distance"),
    "table of a raster": ({"file": "worms.tif", "table": "x"}, "[layers.worms] table: this goes with distance"),
    "cap of 0": (
        {"distance": "b.gpkg", "cap_m": 0},
        "[layers.worms] cap_m: expected a number of metres above 0, got 0",
    ),
    "band of a distance": ({"distance": "b.gpkg", "band": 1}, "[layers.worms] band: a distance to features has no use"),
    "fill of a distance": (
        {"distance": "b.gpkg", "fill": "nearest", "fill_within_m": 5},
        "[layers.worms] fill: a distance to features has no use for it",
    ),
    "band 0": ({"file": "worms.tif", "band": 0}, "[layers.worms] band: expected a whole number of at least 1, got 0"),
    "band as text": (
        {"file": "worms.tif", "band": "red"},
        "[layers.worms] band: expected a whole number of at least 1",
    ),
    "fill alone": ({"file": "worms.tif", "fill": "nearest"}, '[layers.worms] fill_within_m: fill = "nearest" needs it'),
    "within alone": ({"file": "worms.tif", "fill_within_m": 100}, "[layers.worms] fill: fill_within_m needs it"),
    "fill otherwise": ({"file": "worms.tif", "fill": "mean"}, '[layers.worms] fill: expected "nearest", got "mean"'),
    "fill of no-go": (
        {"file": "worms.tif", "no_go": True, "fill": "nearest", "fill_within_m": 9},
        "[layers.worms] fill: no-go ground has no use for it",
    ),
    "reference alone": (
        {"file": "worms.tif", "reference": "grass"},
        "[layers.worms] reference: this needs classes, such as classes = {",
    ),
    "no reference": (
        {"file": "worms.tif", "classes": {"1": "wood", "2": "grass"}},
        '[layers.worms] reference: this is missing; expected one of the classes, such as "wood"',
    ),
    "reference unknown": (
        {"file": "worms.tif", "classes": {"1": "wood", "2": "grass"}, "reference": "gras"},
        '[layers.worms] reference: there is no class "gras"; expected one of wood, grass',
    ),
    "one class": (
        {"file": "worms.tif", "classes": {"1": "wood", "2": "wood"}, "reference": "wood"},
        "[layers.worms] classes: expected at least two classes, got 1",
    ),
    "classes alike": (
        {"file": "worms.tif", "classes": {"1": "wood", "2": "Wood "}, "reference": "wood"},
        "[layers.worms] classes: a name is blank, or two differ only by upper case or blanks",
    ),
    "blank class": (
        {"file": "worms.tif", "classes": {"1": "wood", "2": ""}, "reference": "wood"},
        "[layers.worms] classes: a name is blank",
    ),
    "name for a number": (
        {"file": "worms.tif", "classes": {"wood": "1", "2": "grass"}, "reference": "grass"},
        '[layers.worms] classes: "wood" is no whole number',
    ),
    "one number twice": (
        {"file": "worms.tif", "classes": {"1": "wood", "01": "grass"}, "reference": "grass"},
        "[layers.worms] classes: a number stands twice",
    ),
    "classes as a list": (
        {"file": "worms.tif", "classes": ["wood", "grass"], "reference": "grass"},
        "[layers.worms] classes: expected the numbers in the raster and their names, such as",
    ),
    "no such key": (
        {"file": "worms.tif", "bands": 2},
        '[layers.worms] bands: there is no such key; did you mean "band"?',
    ),
}


@pytest.mark.parametrize("case", KEYS)
def test_keys_that_do_not_go_together(folder, case):
    folder.toml["layers"]["worms"], match = KEYS[case]
    refused(folder, match)


def test_rasters_of_classes(folder):
    folder.toml["layers"]["cover"] = dict(COVER)
    folder.toml["model"]["layers"] = ["cover"]
    halves = np.repeat([[1, 2]], 40, axis=0).repeat(20, axis=1)
    folder.raster("cover.tif", halves + 0.5, 100.0)
    refused(folder, "[layers.cover] cover.tif: the raster holds 1.5, which is no whole number and so no class")
    strange = halves.astype("int16")
    strange[0, :3], strange[5, 0] = 9, -4
    folder.raster("cover.tif", strange, 100.0)
    refused(
        folder,
        "[layers.cover] cover.tif: the raster holds classes that are not among those in the study file: "
        "9 in 3 cells, -4 in 1 cell; name them in classes, or mark them as no data.",
    )
    folder.raster("cover.tif", np.ones((40, 40), dtype="uint8"), 100.0)
    refused(folder, 'cover.tif: the class "grass" takes most of no cell inside the area')
    folder.raster("cover.tif", np.full((40, 40), 2, dtype="uint8"), 100.0)
    refused(folder, 'cover.tif: the class "wood" takes most of no cell inside the area')
    folder.raster("cover.tif", halves.astype("uint8"), 100.0, nodata=2)
    refused(folder, "[layers.cover] cover.tif: 800 of 1600 cells inside the area have no value (around x = 503000, ")


def test_one_contrast_is_not_a_layer_that_can_be_listed(folder):
    folder.toml["layers"]["cover"] = dict(COVER)
    folder.toml["model"]["layers"] = ["cover=wood"]
    refused(folder, '[model] layers: there is no layer "cover=wood"; did you mean "cover"?')


def test_a_section_named_as_another_ones_contrast(folder):
    folder.raster("cover.tif", np.repeat([[1, 2]], 40, axis=0).repeat(20, axis=1).astype("uint8"), 100.0)
    folder.toml["layers"] = {"cover": dict(COVER), "cover=wood": {"file": "worms.tif"}, "worms": {"file": "worms.tif"}}
    path = folder.write()
    path.write_text(path.read_text().replace("[layers.cover=wood]", '[layers."cover=wood"]'))
    with pytest.raises(
        StudyError, match=re.escape('[layers.cover=wood]: there would be two layers called "cover=wood"')
    ):
        read_study(path)


def test_a_problem_of_a_layer_that_the_model_does_not_use_is_said(folder):
    folder.raster("cover.tif", np.ones((40, 40), dtype="uint8"), 100.0)
    folder.toml["layers"]["cover"] = dict(COVER)
    assert any('[layers.cover] cover.tif: the class "grass" takes most' in w for w in folder.read().warnings)


def test_bands(folder):
    folder.raster("worms.tif", np.ones((3, 40, 40)), 100.0, count=3)
    refused(folder, "worms.tif: the raster has 3 bands; say which is meant by band = …: 1, 2, 3.")
    folder.toml["layers"]["worms"]["band"] = 4
    refused(folder, "worms.tif: there is no band 4; the raster has 3.")
    folder.raster("worms.tif", np.ones((40, 40), dtype="complex64"), 100.0)
    del folder.toml["layers"]["worms"]["band"]
    refused(folder, "worms.tif: band 1 holds complex numbers; expected plain ones.")


def test_files_that_are_no_raster(folder):
    folder.path("worms.tif").unlink()
    folder.path("worms.tif").mkdir()
    refused(folder, "worms.tif: this is a folder; expected a GeoTIFF file.")
    folder.path("worms.tif").rmdir()
    os.symlink("worms.tif", folder.path("worms.tif"))
    refused(folder, "worms.tif: there is no such file beside the study file.")  # a link to itself
    folder.path("worms.tif").unlink()
    folder.path("worms.tif").write_bytes(b"")
    refused(folder, "worms.tif: this cannot be read as a raster (expected GeoTIFF)")
    # another format, which would have other files opened that the study does not name
    folder.path("worms.tif").write_text('<VRTDataset rasterXSize="4" rasterYSize="4"></VRTDataset>')
    refused(folder, "worms.tif: this cannot be read as a raster (expected GeoTIFF)")
    folder.raster("worms.tif", np.random.default_rng(0).normal(size=(400, 400)), 10.0)
    folder.path("worms.tif").write_bytes(folder.path("worms.tif").read_bytes()[:200_000])
    refused(folder, "worms.tif: this cannot be read as a raster (expected GeoTIFF)")


def test_a_raster_from_the_other_side_of_the_world(folder):
    folder.raster("worms.tif", np.ones((40, 40)), 100.0, crs="EPSG:32760", north=5_600_000)
    refused(folder, "worms.tif: the raster does not overlap the study area")
    folder.raster("worms.tif", np.ones((40, 40)), 1e-3, crs="EPSG:4326", west=-150.0, north=-40.0)
    refused(folder, "worms.tif: the raster does not overlap the study area")


def lines(folder, name, crs="EPSG:32631", shapes=None, **more):
    diagonal = shapely.LineString([(folder.west, folder.south), (folder.west + 4000, folder.south + 900)])
    geopandas.GeoDataFrame(geometry=shapes or [diagonal], crs=crs).to_file(folder.path(name), **more)


@pytest.fixture
def road(folder):
    def of(name, **more):
        folder.toml["layers"]["road"] = {"distance": name, **more}
        folder.toml["model"]["layers"] = ["road"]
        return folder

    return of


def test_vector_files_that_are_none(road):
    refused(road("roads.shp"), "roads.shp: this is none of .gpkg, .geojson, .json, .zip; save it as a GeoPackage.")
    folder = road("roads.gpkg")
    refused(folder, "roads.gpkg: there is no such file beside the study file.")
    folder.path("roads.gpkg").mkdir()
    refused(folder, "roads.gpkg: this is a folder; expected a .gpkg file.")
    folder.path("roads.gpkg").rmdir()
    for content in (b"", b"<OGRVRTDataSource/>", b"PK"):
        folder.path("roads.gpkg").write_bytes(content)
        refused(folder, "roads.gpkg: this is not a GeoPackage, whatever its name says; save it again.")
    folder.path("roads.gpkg").write_bytes(b"SQLite format 3\0" + bytes(52) + b"GPKG" + bytes(2000))
    refused(folder, "roads.gpkg: this cannot be read as a vector file")
    road("roads.geojson").path("roads.geojson").write_text('{"type": "FeatureCollection", "features": [')
    refused(folder, "roads.geojson: this cannot be read as a vector file")
    road("roads.zip").path("roads.zip").write_bytes(b"PK and no more")
    refused(folder, "roads.zip: this cannot be read as a zip file")


def test_features_that_cannot_be_used(road):
    folder = road("roads.gpkg")
    lines(folder, "roads.gpkg", shapes=[shapely.Point(), None])
    refused(folder, "roads.gpkg: there is no feature in it; expected points, lines or polygons.")
    folder.path("roads.gpkg").unlink()
    with pytest.warns(UserWarning, match="'crs' was not provided"):
        lines(folder, "roads.gpkg", crs=None)
    refused(folder, "roads.gpkg: the file does not say its reference system; save it with one.")
    folder.path("roads.gpkg").unlink()
    lines(folder, "roads.gpkg", layer="roads")
    lines(folder, "roads.gpkg", layer="tracks", mode="a")
    refused(folder, 'roads.gpkg: there are 2 tables in it, so say which is meant by table = "roads" or "tracks".')
    refused(road("roads.gpkg", table="track"), 'there is no table "track" in it; did you mean "tracks"?')
    whole = {"type": "LineString", "coordinates": [[folder.west, folder.south], [folder.west + 50, folder.south]]}
    road("roads.json").path("roads.json").write_text(json.dumps(whole))
    refused(folder, "roads.json: the coordinates look metric, but GeoJSON is in longitude and latitude unless it has")


def test_zip_files_without_a_shapefile_or_with_more_than_fits(road, monkeypatch):
    folder = road("roads.zip")
    with zipfile.ZipFile(folder.path("roads.zip"), "w") as archive:
        archive.writestr("readme.txt", "roads")
    refused(folder, "roads.zip: expected one shapefile (.shp with .shx, .dbf and .prj) in it, got 0.")
    monkeypatch.setattr("bayesrange.study._distance._MOST_UNZIPPED", 1_000_000)
    with zipfile.ZipFile(folder.path("roads.zip"), "w", zipfile.ZIP_DEFLATED) as archive:
        archive.writestr("roads.shp", bytes(1_000_001))  # a kilobyte once it is packed
    refused(folder, "roads.zip: this unzips to 0.0 GB, more than the 0 GB that are read")


def test_a_file_of_too_many_features(road, monkeypatch):
    folder = road("roads.gpkg")
    monkeypatch.setattr("bayesrange.study._distance._MOST_FEATURES", 1)
    lines(folder, "roads.gpkg", shapes=[shapely.Point(folder.west, folder.south)] * 2)
    refused(folder, "roads.gpkg: there are 2 features, more than the 1 that are read")


def test_a_cap_below_every_distance_leaves_nothing_to_learn(road):
    folder = road("roads.gpkg", cap_m=5)
    lines(folder, "roads.gpkg", shapes=[shapely.Point(folder.west - 5000, folder.south)])
    refused(folder, "[layers.road] roads.gpkg: every cell inside the area has the value 5, so nothing can be learnt")


ANY_SECTION = st.fixed_dictionaries(
    {},
    optional={
        "file": st.sampled_from(["worms.tif", "cover.tif", "none.tif", "roads.gpkg"]),
        "distance": st.sampled_from(["roads.gpkg", "none.gpkg", "worms.tif"]),
        "table": st.sampled_from(["roads", "tracks"]),
        "cap_m": st.floats(-1, 1e4),
        "band": st.integers(0, 2),
        "classes": st.dictionaries(
            st.sampled_from(["1", "2", "01", "x"]), st.sampled_from(["a", "b", "A "]), max_size=3
        ),
        "reference": st.sampled_from(["a", "b", "c"]),
        "fill": st.just("nearest"),
        "fill_within_m": st.floats(0, 1e4),
        "no_go": st.booleans(),
    },
)


@given(section=ANY_SECTION)
@settings(max_examples=60, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
def test_any_section_is_read_whole_or_refused_in_a_sentence(folder, section):
    lines(folder, "roads.gpkg", layer="roads")
    cover = np.repeat([[1, 2]], 40, axis=0).repeat(20, axis=1).astype("uint8")
    cover[3, 4] = 0
    folder.raster("cover.tif", cover, 100.0, nodata=0)
    folder.toml["layers"] = {"any": section}
    folder.toml["model"]["layers"] = [] if section.get("no_go") else ["any"]
    try:
        study = folder.read()
    except StudyError as error:
        assert "\n" not in str(error) and str(error)[-1] in ".?"
        return
    assert all(np.isfinite(study.layers[name].values[study.grid.inside]).all() for name in study.model_layers)
    assert len(study.model_layers) == (
        0 if section.get("no_go") else max(len(set(section.get("classes", {}).values())) - 1, 1)
    )
