"""Each broken input is answered by one sentence that names the place and the way out."""

import json
import re

import numpy as np
import pytest
import shapely

from bayesrange.study import StudyError, read_study


def refused(folder, match):
    with pytest.raises(StudyError, match=re.escape(match)) as caught:
        folder.read()
    text = str(caught.value)
    assert "\n" not in text and text[-1] in ".?"


SETTINGS = {
    "wrong kind": (
        "sampling",
        "chains",
        "four",
        '[sampling] chains: expected a whole number of at least 1, got "four"',
    ),
    "out of range": ("sampling", "target_accept", 1.5, "target_accept: expected a number between 0 and 1, got 1.5"),
    "fraction": ("sampling", "draws", 10.5, "draws: expected a whole number of at least 1, got 10.5"),
    "yes": ("model", "over_marking", "yes", '[model] over_marking: expected true or false, got "yes"'),
    "typing mistake": ("sampling", "warm_up", 5, '[sampling] warm_up: there is no such key; did you mean "warmup"?'),
    "wrong section": ("model", "chains", 4, "[model] chains: there is no such key here; it belongs in [sampling]"),
    "choice": ("model", "pooling", "some", '[model] pooling: expected "shared", "hierarchical" or "individual"'),
    "minus": ("study", "cell_m", -100, '[study] cell_m: expected a number of metres above 0, or "auto", got -100'),
    "layer": ("model", "layers", ["worm"], '[model] layers: there is no layer "worm"; did you mean "worms"?'),
    "layer twice": ("model", "layers", ["worms", "worms"], '[model] layers: "worms" is listed twice'),
    "error": ("fixes", "error", -2, "[fixes] error: expected a column, or a number of metres of at least 0"),
    "crs": ("study", "crs", "EPSG:1", '[study] crs: "EPSG:1" is no reference system that is known'),
    "degrees": ("study", "crs", "EPSG:4326", '[study] crs: "EPSG:4326" is in degrees; expected a projected system'),
    "feet": ("study", "crs", "EPSG:2263", '[study] crs: "EPSG:2263" is in US survey foot; expected a projected'),
    "no area": ("study", "area", "aera.geojson", "[study] area: there is no file aera.geojson beside the study file"),
    "no fixes": ("fixes", "file", "fix.csv", "fix.csv: there is no such file beside the study file"),
    "pattern": ("fixes", "file", "c*/*.csv", '[fixes] file: no file matches "c*/*.csv"'),
    "column": (
        "fixes",
        "animal",
        "anmal",
        'there is no column "anmal", which [fixes] animal names; did you mean "animal"?',
    ),
    "group column": (
        "fixes",
        "group",
        "clan",
        'there is no column "clan", which [fixes] group names; the columns are animal',
    ),
    "covariate": (
        "model",
        "covariates",
        ["desnity"],
        'there is no column "desnity", which [model] covariates names; did you mean "density"?',
    ),
    "cells too large": (
        "study",
        "cell_m",
        400,
        "only 7.1 cells across, which would bias localising by about 13 % or more",
    ),
    "cells too small": ("study", "cell_m", 5, "× 800 cells, more than 400 along a side"),
}


@pytest.mark.parametrize("case", SETTINGS)
def test_a_wrong_setting(folder, case):
    section, key, value, match = SETTINGS[case]
    folder.toml[section][key] = value
    refused(folder, match)


LATER = {
    "sensitive": ("study", {"sensitive": "high"}, '[study] sensitive = "high"'),
    "effect": ("model", {"smallest_effect": {"avoidance": 0.1}}, "[model] smallest_effect"),
}


@pytest.mark.parametrize("case", LATER)
def test_a_key_of_a_later_version_is_known_and_refused(folder, case):
    section, given, match = LATER[case]
    folder.toml.setdefault(section, {}).update(given)
    with pytest.raises(StudyError, match=re.escape(match) + ".* not built yet"):
        folder.read()


def test_all_mistakes_of_a_file_stand_in_one_sentence(folder):
    folder.toml["sampling"] = {"chains": 0, "sede": 3}
    del folder.toml["model"]["card"]
    refused(folder, "[model] card: this is missing; expected the name of a model card")
    refused(
        folder, "[sampling] chains: expected a whole number of at least 1, got 0; [sampling] sede: there is no such"
    )


def test_broken_toml_and_missing_files_name_the_place(folder):
    path = folder.write()
    path.write_text("[study\n")
    with pytest.raises(StudyError, match=r"study.toml: this is not valid TOML: .*line 1"):
        read_study(path)
    path.rename(folder.path("heath.toml"))
    with pytest.raises(StudyError, match=r"this folder has no study.toml; it holds heath.toml"):
        read_study(folder.folder)
    with pytest.raises(StudyError, match="there is no such study file or folder"):
        read_study(path)


FIXES = {
    "text": (4, "x", "nan", 'fixes.csv, line 6, column "x": expected a number, got "nan"'),
    "infinite": (4, "y", "inf", 'fixes.csv, line 6, column "y": expected a number, got "inf"'),
    "comma": (4, "x", "500000,5", 'expected a number, got "500000,5"; write decimals with a point'),
    "half": (4, "x", "", "fixes.csv, line 6: one coordinate is blank; give both"),
    "no animal": (4, "animal", " ", "fixes.csv, line 6: the animal is blank"),
    "alike": (4, "animal", "n 1", 'the animals "N1" and "n 1" differ only by upper case or blanks'),
    "no offset": (4, "time", "2031-03-01T04:00", "the time 2031-03-01T04:00 has no offset from UTC"),
    "not iso": (4, "time", "1.3.2031 04:00", 'line 6: the time "1.3.2031 04:00" cannot be read: expected ISO 8601'),
    "no such day": (
        4,
        "time",
        "2031-02-30T04:00Z",
        'the time "2031-02-30T04:00Z" cannot be read: there is no such day',
    ),
    "no group": (4, "group", "", "1 fix has no group (fixes.csv line 6)"),
    "other group": (4, "group", "west", '1 fix is of a group that is not in groups.csv: "west" (fixes.csv line 6)'),
    "outside": (4, "x", 499_000, "1 fix outside the study area (fixes.csv line 6)"),
    "repeat": (
        4,
        "time",
        "2031-03-01T12:00+01:00",
        "1 fix repeats an animal and time that stand before (fixes.csv line 6)",
    ),
}


@pytest.mark.parametrize("case", FIXES)
def test_a_wrong_fix(folder, case):
    row, column, value, match = FIXES[case]
    folder.fixes[column] = folder.fixes[column].astype(object)
    folder.fixes.loc[row, column] = value
    refused(folder, match)


@pytest.mark.parametrize("error", ["-5", "far"])
def test_a_wrong_location_error(folder, error):
    folder.fixes["error_m"] = [error, *["5"] * 179]
    refused(folder, f"fixes.csv, line 2{': the error is' if error == '-5' else ', column'}")


def test_far_outside_even_for_its_error(folder):
    folder.fixes.loc[4, "x"] = folder.west - 200
    folder.toml["fixes"]["error"] = 20
    refused(folder, "1 fix outside the study area (fixes.csv line 6), by more than 3 standard deviations")


def test_degrees_given_as_metres(folder):
    folder.fixes["x"], folder.fixes["y"] = 3.0, 50.5
    refused(folder, 'the coordinates look like longitude and latitude; say so by crs = "EPSG:4326"')


def test_metres_given_as_degrees(folder):
    folder.toml["fixes"]["crs"] = "EPSG:4326"
    refused(folder, "is no longitude and latitude, but [fixes] crs is EPSG:4326")


def test_x_and_y_exchanged(folder):
    folder.toml["fixes"] |= {"x": "y", "y": "x"}
    refused(folder, "180 fixes outside the study area, but inside it with x and y exchanged")


def test_no_crs_at_all(folder):
    del folder.toml["study"]["crs"]
    refused(folder, '[study] crs: this is missing; expected a metric system such as "EPSG:32631"')


def test_unknown_zone(folder):
    folder.fixes["time"] = folder.fixes["time"].str.removesuffix("+01:00")
    folder.toml["fixes"]["zone"] = "Europe/Olso"
    refused(folder, 'there is no time zone "Europe/Olso"; did you mean "Europe/Oslo"?')


@pytest.mark.parametrize("time", ["2031-03-30T02:30", "2031-10-26T02:30"])  # skipped; repeated (directive 2000/84/EC)
def test_a_clock_time_that_summer_time_skips_or_repeats(folder, time):
    folder.fixes["time"] = folder.fixes["time"].astype(object)
    folder.fixes.loc[0, "time"] = time
    folder.toml["fixes"]["zone"] = "Europe/Oslo"
    refused(folder, f'line 2: the time "{time}" cannot be read: summer time in Europe/Oslo skips or repeats it')


def test_a_line_with_too_many_cells_and_a_column_twice(folder):
    path = folder.write()
    lines = folder.path("fixes.csv").read_text().splitlines()
    folder.path("fixes.csv").write_text("\n".join([*lines[:3], lines[3] + ",7", *lines[4:]]))
    with pytest.raises(StudyError, match="fixes.csv, line 4: expected 5 cells as in the header, got 6"):
        read_study(path)
    folder.path("fixes.csv").write_text("\n".join([lines[0] + ",x", *(line + ",1" for line in lines[1:])]))
    with pytest.raises(StudyError, match='the column "x" stands twice in the header'):
        read_study(path)
    folder.path("fixes.csv").write_text("\n")
    with pytest.raises(StudyError, match="fixes.csv: the file is empty"):
        read_study(path)
    folder.path("fixes.csv").write_text(lines[0] + "\n" + "N1,2031-03-01T00:00Z,north,,\n")
    with pytest.raises(StudyError, match=r"there is no fix with coordinates \(1 rows\)"):
        read_study(path)


GROUPS = {
    "twice": (1, "group", "north", 'groups.csv, line 3: the group "north" stands twice'),
    "alike": (1, "group", "North", 'groups.csv: the groups "north" and "North" differ only by upper case or blanks'),
    "blank": (1, "group", "", "groups.csv, line 3: the group's name is blank"),
    "half a home": (1, "x", "", "groups.csv, line 3: one coordinate of the home centre is blank"),
    "home outside": (1, "x", 490_000, 'the home centre of "south" is outside the study area'),
    "home in degrees": (slice(None), ["x", "y"], 3, "groups.csv: the home centres look like degrees"),
    "half an animal": (
        1,
        "animals",
        2.5,
        'groups.csv, line 3, column "animals": expected a whole number of at least 1',
    ),
    "no animal": (1, "animals", 0, 'expected a whole number of at least 1, got "0"'),
    "none to some": (1, "animals", "0-2", 'expected a whole number of at least 1, got "0-2"'),
    "from more to less": (1, "animals", "5-3", 'got "5-3"; a number that is uncertain is written as a range such as'),
    "half a range": (1, "animals", "3-", 'got "3-"; a number that is uncertain is written as a range such as 3-5.'),
    "less than none": (1, "animals", "-3", 'column "animals": expected a whole number of at least 1, got "-3"'),
    "parts of animals": (1, "animals", "2.5-3.5", 'expected a whole number of at least 1, got "2.5-3.5"'),
    "a date": (1, "animals", "3. May", "such as 3-5 (a spreadsheet may have made a date of it: format the column"),
    "a word": (1, "animals", "some", 'column "animals": expected a number, got "some"'),
}


@pytest.mark.parametrize("case", GROUPS)
def test_a_wrong_group(folder, case):
    row, column, value, match = GROUPS[case]
    folder.groups.loc[row, column] = value
    refused(folder, match)


def test_a_group_that_nothing_is_known_of(folder):
    folder.groups.loc[3] = ["west", "", "", 2, 0.1]
    refused(folder, 'the group "west" has neither fixes nor a home centre')


def test_a_home_centre_somewhere_in_a_polygon_is_not_built_yet(folder):
    folder.groups["where"] = ["", "", ""]
    folder.read()
    folder.groups["where"] = ["", "wood.geojson", ""]
    refused(folder, "groups.csv, line 3: a polygon in the column where, for a home centre that is not known better, is")


def test_groups_that_come_and_go(folder):
    folder.groups["from"] = ["", "2031-03-05", ""]
    folder.fixes = folder.fixes.iloc[::-1]  # S1's fixes are then in lines 62 to 121, the last first
    refused(
        folder,
        '25 fixes are of a group at a time when it is not there by from and until in groups.csv: "south" (fixes.csv '
        "line 97, fixes.csv line 98, fixes.csv line 99 and 22 more); mend from and until, or the group of these fixes.",
    )
    folder.groups["until"] = ["", "2031-03-01", ""]
    refused(folder, "groups.csv, line 3: until is not after from")


def test_a_blank_covariate(folder):
    folder.groups["density"] = ["0.5", "", "0.7"]
    folder.toml["model"]["covariates"] = ["density"]
    refused(folder, 'groups.csv, line 3, column "density": the covariate is blank')


def pond(folder, rows, columns):
    ground = np.zeros((40, 40), dtype="uint8")
    ground[rows, columns] = 1
    folder.raster("water.tif", ground, 100.0)
    folder.toml["layers"]["water"] = {"file": "water.tif", "no_go": True}


def test_fixes_and_homes_on_no_go_ground(folder):
    folder.fixes.loc[4, ["x", "y"]] = [folder.west + 1550, folder.south + 2850]
    folder.fixes.loc[5, "x"] = folder.west - 50
    pond(folder, 11, 15)  # the cell of x 1500–1600 m, y 2800–2900 m
    refused(folder, "1 fix outside the study area (fixes.csv line 7); ")
    folder.fixes.loc[5, "x"] = folder.west + 50
    refused(folder, "on no-go ground (fixes.csv line")
    folder.toml["fixes"]["error"] = 100
    refused(folder, 'groups.csv: the home centre of "north" is on no-go ground')


def test_unconnected_pieces_are_named_with_centre_and_size(folder):
    folder.fixes = folder.fixes[(folder.fixes["x"].astype(float) - folder.west - 2150).abs() > 150]
    pond(folder, slice(None), slice(20, 23))
    refused(
        folder,
        "the habitable cells fall into 2 unconnected pieces (8 km² around x = 501000, y = 5602000; "
        "6.8 km² around x = 503150, y = 5602000)",
    )


def test_a_model_layer_that_is_no_go(folder):
    pond(folder, 0, 0)
    folder.toml["model"]["layers"] = ["water"]
    refused(folder, '[model] layers: "water" is a no-go layer')


def test_no_ground_left(folder):
    pond(folder, slice(None), slice(None))
    refused(folder, "no ground is left once the no-go layers are taken out")


AREAS = {
    "crosses itself": ([(0, 0), (4000, 4000), (4000, 0), (0, 4000)], "the polygon is not valid (Self-intersection"),
    "open line": (None, "expected polygons, got a LineString; close the outline"),
}


@pytest.mark.parametrize("case", AREAS)
def test_an_area_that_is_no_polygon(folder, case):
    corners, match = AREAS[case]
    line = [(folder.west + x, folder.south + y) for x, y in corners or [(0, 0), (4000, 0), (4000, 4000)]]
    folder.area(shapely.Polygon(line) if corners else shapely.LineString(line))
    refused(folder, match)


def test_an_area_in_metres_without_its_system(folder):
    folder.path("area.geojson").write_text(json.dumps(shapely.geometry.mapping(folder.box(0, 0, 4000, 4000))))
    refused(folder, "area.geojson: the coordinates look metric, but GeoJSON is in longitude and latitude")


@pytest.mark.parametrize(
    ("text", "match"),
    [
        ("{", "this is not valid GeoJSON"),
        ("[]", "this is not GeoJSON"),
        ('{"type": "FeatureCollection", "features": []}', "there is no polygon in it"),
    ],
)
def test_a_file_that_is_no_geojson(folder, text, match):
    folder.path("area.geojson").write_text(text)
    refused(folder, f"area.geojson: {match}")


def test_an_area_of_another_format(folder):
    folder.toml["study"]["area"] = "area.shp"
    refused(folder, "[study] area: area.shp is none of .geojson, .json, .gpkg")


def test_broken_layers(folder):
    folder.raster("worms.tif", np.ones((40, 40)), 100.0)
    refused(folder, "[layers.worms] worms.tif: every cell inside the area has the value 1")
    folder.raster("worms.tif", np.arange(1600.0).reshape(40, 40), 100.0, north=folder.south + 3800)
    refused(folder, "[layers.worms] worms.tif: 80 of 1600 cells inside the area have no value")
    folder.raster("worms.tif", np.arange(1600.0).reshape(40, 40), 100.0, north=folder.south + 90_000)
    refused(folder, "worms.tif: the raster does not overlap the study area")
    folder.raster("worms.tif", np.ones((2, 40, 40)), 100.0, count=2)
    refused(folder, "worms.tif: the raster has 2 bands; say which is meant by band = …: 1, 2.")
    folder.raster("worms.tif", np.where(np.eye(40) > 0, np.inf, 1.0), 100.0)
    refused(folder, "worms.tif: the raster has infinite values")
    folder.raster("worms.tif", np.ones((40, 40)), 100.0, crs=None)
    refused(folder, "worms.tif: the raster does not say its reference system")
    folder.path("worms.tif").write_text("no raster")
    refused(folder, "worms.tif: this cannot be read as a raster")
    folder.path("worms.tif").unlink()
    refused(folder, "worms.tif: there is no such file beside the study file")
