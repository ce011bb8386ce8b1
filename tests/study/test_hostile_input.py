"""Inputs made by accident or malice: one sentence that names the file, row or key, and nothing written.

Common practice for what a file system, a spreadsheet or a hand can do to a study; no outside values.
"""

import json
import os
import re
import string

import numpy as np
import pytest
import rasterio
from affine import Affine
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from rasterio.transform import from_origin

from bayesrange.study import StudyError, read_study

FILES = ("study.toml", "fixes.csv", "groups.csv", "area.geojson", "worms.tif")


def refused(path, match):
    """The study is refused in one short printable sentence, and its folder left as it was."""
    folder = path.parent
    before = {file: file.lstat().st_mtime_ns for file in folder.rglob("*")}
    with pytest.raises(StudyError) as caught:
        read_study(path)
    text = str(caught.value)
    assert text.replace(str(folder), "").isprintable() and text[-1] in ".?" and len(text) < 600, text
    assert re.search(match, text), text
    assert {file: file.lstat().st_mtime_ns for file in folder.rglob("*")} == before


SPOIL = {
    "0 bytes": lambda file: file.write_bytes(b""),
    "folder": lambda file: file.mkdir(),
    "link to itself": lambda file: file.symlink_to(file),
    "link to nothing": lambda file: file.symlink_to(file.with_name("nothing")),
    "zeros": lambda file: file.write_bytes(bytes(100)),
    "noise": lambda file: file.write_bytes(bytes(range(256)) * 4),
    "pipe": os.mkfifo,
    "gone": lambda file: None,
}


@pytest.mark.parametrize("file", FILES)
@pytest.mark.parametrize("how", SPOIL)
def test_a_file_that_is_none(folder, how, file):
    path = folder.write()
    folder.path(file).unlink()
    SPOIL[how](folder.path(file))
    refused(path, r"\[study\]" if (file, how) == ("study.toml", "0 bytes") else re.escape(file))


NAMES = {
    "zero byte": ("a\0b", r'"a\\x00b.*" has a line break or an invisible character in it; write it without'),
    "line break": ("a\nb", "has a line break or an invisible character in it"),
    "turned round": ("\u202eab", "has a line break or an invisible character in it"),
    "too long": ("x" * 5000, r"xxx….* is longer than 255 characters; shorten it"),
    "network": ("https://nowhere.invalid/a", "there is no (such )?file|no file matches"),
    "network of the library": ("/vsicurl/http://nowhere.invalid/a", "there is no (such )?file|no file matches"),
}
ENDINGS = {
    ("fixes", "file"): ".csv",
    ("groups", "file"): ".csv",
    ("study", "area"): ".geojson",
    ("layers", "file"): ".tif",
}


@pytest.mark.parametrize("key", ENDINGS, ids=" ".join)
@pytest.mark.parametrize("case", NAMES)
def test_a_file_name_that_is_none(folder, case, key):
    name, match = NAMES[case]
    section = folder.toml["layers"]["worms"] if key[0] == "layers" else folder.toml[key[0]]
    section[key[1]] = name + ENDINGS[key]
    refused(folder.write(), match)


def with_text(folder, section, key, text):
    """The study file with a value that only TOML can write."""
    folder.toml.setdefault(section, {})[key] = 98765.25
    path = folder.write()
    path.write_text(path.read_text().replace("98765.25", text))
    return path


VALUES = {
    "infinite cells": ("study", "cell_m", "inf", r"\[study\] cell_m: expected a number of metres above 0"),
    "cells that are no number": ("study", "cell_m", "nan", r"\[study\] cell_m: expected a number"),
    "cells larger than all": ("study", "cell_m", "1e308", "too small for cells of 1e.308 m; check the area's polygon"),
    "cells of nothing": ("study", "cell_m", "1e-300", "would be more than 100,000 along a side of the study area"),
    "cells below what numbers hold": ("study", "cell_m", "5e-324", "would be more than 100,000 along a side"),
    "infinite error": ("fixes", "error", "inf", r"\[fixes\] error: expected a column, or a number of metres"),
    "infinite speed": ("fixes", "max_speed_kmh", "inf", r"\[fixes\] max_speed_kmh: expected a number of kilometres"),
    "infinite perception": ("model", "perception_m", "inf", r"\[model\] perception_m: expected a number of metres"),
    "infinite settling": ("animals", "settle_in_days", "inf", r"\[animals\] settle_in_days"),
    "huge chains": ("sampling", "seed", "1" + 30 * "0", r"\[sampling\] seed: expected a whole number from 0"),
    "brackets": ("study", "name", "[" * 5000 + "]" * 5000, "study.toml: (brackets are nested too deep|this is not)"),
    "zero byte in crs": ("study", "crs", r'"\u0000"', r'\[study\] crs: "\\x00" is no reference system'),
    "long crs": ("study", "crs", f'"{"x" * 5000}"', "xxx….* is no reference system that is known"),
    "crs of the centre of the earth": ("study", "crs", '"EPSG:4978"', "expected a projected system in metres"),
    "line break in the name": ("study", "name", r'"a\nb"', r'\[study\] name: "a\\nb" has a line break'),
}


@pytest.mark.parametrize("case", VALUES)
def test_a_value_that_is_none(folder, case):
    section, key, text, match = VALUES[case]
    refused(with_text(folder, section, key, text), match)


LAYERS = {
    "blank": (" ", "the name of a layer is blank"),
    "invisible": ("wo\u200brms", r'"wo\\u200brms" has a line break or an invisible character'),
    "alike": ("Worms ", r'the names "worms" and "Worms " differ only by upper case or blanks'),
}


@pytest.mark.parametrize("case", LAYERS)
def test_a_layer_name_that_is_none(folder, case):
    name, match = LAYERS[case]
    path = folder.write()
    path.write_text(path.read_text() + f'\n[layers.{json.dumps(name)}]\nfile = "worms.tif"\n')
    refused(path, match)


CELLS = {
    "animal that beeps": ("animal", "a\x07b", "has a line break or an invisible character in it"),
    "animal with no width": ("animal", "\u200bN1", "has a line break or an invisible character in it"),
    "animal as long as a page": ("animal", "x" * 3000, "fixes.csv: among the animals is .* longer than 255 characters"),
    "group that colours the terminal": ("group", "\x1b[31mnorth", r'"\\x1b\[31mnorth" \(fixes.csv line 6\)'),
    "group elsewhere": ("group", "../north", r'not in groups.csv: "../north" \(fixes.csv line 6\)'),
    "markup": ("group", "<script>", r'not in groups.csv: "<script>" \(fixes.csv line 6\)'),
    "before the calendar": ("time", "0001-01-01T00:00Z", "line 6: the time .* expected a year from 1700 to 2260"),
    "long ago": ("time", "1600-01-01T00:00Z", "expected a year from 1700 to 2260"),
    "far off": ("time", "9999-01-01T00:00Z", "expected a year from 1700 to 2260"),
    "offset of days": ("time", "2031-03-01T00:00+99:00", "line 6: the time"),
    "beyond numbers": ("x", "1e400", 'fixes.csv, line 6, column "x": expected a number, got "1e400"'),
    "underscore": ("x", "500_000", 'column "x": expected a number, got "500_000"'),
    "beyond the earth": ("x", "1e30", "outside the study area"),
}


@pytest.mark.parametrize("case", CELLS)
def test_a_cell_that_is_none(folder, case):
    column, text, match = CELLS[case]
    folder.fixes[column] = folder.fixes[column].astype(object)
    folder.fixes.loc[4, column] = text
    refused(folder.write(), match)


@pytest.mark.parametrize("number", ["1e300", "99999999999999999999", "12000", "3-99999"])
def test_more_animals_than_a_group_holds(folder, number):
    folder.groups.loc[1, "animals"] = number
    refused(folder.write(), r'groups.csv, line 3, column "animals": .* animals are more than one group holds')


def polygon(*corners):
    return {"type": "Polygon", "coordinates": [[*corners, corners[0]]]}


AREAS = {
    "brackets": ("[" * 200_000, "area.geojson: brackets are nested too deep for GeoJSON"),
    "no number": (
        '{"type": "Polygon", "coordinates": [[[NaN, 50], [3, 51], [4, 50], [NaN, 50]]]}',
        "area.geojson: this is not valid GeoJSON: NaN is no number",
    ),
    "no outline": ({"type": "Polygon", "coordinates": []}, "area.geojson: "),
    "no shape": ({"type": "Feature", "geometry": None, "properties": {}}, "area.geojson: there is no polygon in it"),
    "words": ({"type": "Polygon", "coordinates": [["a", "b"]]}, "area.geojson: "),
    "the world": (
        polygon((-180, -90), (180, -90), (180, 90), (-180, 90)),
        r"\[study\] cell_m: cells of 100 m would be more than 100,000 along a side",
    ),
    "other side of the world": (polygon((100, -50), (101, -50), (101, -49)), r"\[study\] crs|outside the study area"),
    "x and y exchanged": (polygon((50.53, 3.0), (50.57, 3.0), (50.57, 3.06)), r"\[study\] crs|exchanged|outside"),
    "a point's size": (
        polygon((3.0, 50.55), (3.0000001, 50.55), (3.0000001, 50.5500001)),
        "outside the study area|too small for cells of 100 m",
    ),
    "crs of its own": (
        polygon((3.0, 50.53), (3.06, 50.53), (3.06, 50.57)) | {"crs": {"type": "name", "properties": {"name": "fen"}}},
        'area.geojson: its "crs" member says "fen", which is no reference system that is known',
    ),
    "crs that is no object": (
        polygon((3.0, 50.53), (3.06, 50.53), (3.06, 50.57)) | {"crs": 7},
        '"crs" member says "7"',
    ),
}


@pytest.mark.parametrize("case", AREAS)
def test_an_area_that_is_none(folder, case):
    content, match = AREAS[case]
    folder.path("area.geojson").write_text(content if isinstance(content, str) else json.dumps(content))
    refused(folder.write(), match)


def empty_raster(folder, pixels, pixel_m, **more):
    """A raster of zeros that takes next to no room on disk."""
    place = from_origin(folder.west - 1000, folder.south + 5000, pixel_m, pixel_m)
    profile = {"driver": "GTiff", "width": pixels, "height": pixels, "count": 1, "crs": folder.crs, "transform": place}
    packed = {"compress": "deflate", "sparse_ok": True}
    with rasterio.open(folder.path("worms.tif"), "w", **profile, **packed, **more):
        pass


def test_rasters_that_unpack_to_more_than_memory(folder):
    empty_raster(folder, 60_000, 0.1, dtype="uint8", tiled=True)
    assert folder.path("worms.tif").stat().st_size < 10_000_000
    refused(folder.write(), "worms.tif: the part around the study area has .* pixels, more than the 64 million")
    empty_raster(folder, 30_000, 100, dtype="float64", blockysize=30_000)
    refused(folder.write(), r"worms.tif: the file is packed in pieces of .* \(7.2 GB\).*save it in tiles")


def test_rasters_cut_short_or_without_size(folder):
    whole = folder.path("worms.tif").read_bytes()
    folder.path("worms.tif").write_bytes(whole[: len(whole) // 3])
    refused(folder.write(), "worms.tif: this cannot be read as a raster")
    profile = {"driver": "GTiff", "width": 9, "height": 9, "count": 1, "dtype": "float32", "crs": folder.crs}
    with rasterio.open(
        folder.path("worms.tif"), "w", transform=Affine(0, 0, folder.west, 0, 0, folder.south), **profile
    ) as target:
        target.write(np.ones((1, 9, 9), "float32"))
    refused(folder.write(), "worms.tif: the raster's pixels have no size")


def test_names_with_separators_and_markup_are_names(folder):
    # They may stand in a study; what is written for them is tested where it is written.
    folder.fixes["animal"] = folder.fixes["animal"].replace({"N1": "../N1", "S1": "<b>S</b>"})
    assert {"../N1", "<b>S</b>"} <= set(folder.read().fixes["animal"])


CHARACTERS = string.ascii_letters + string.digits + " \t\n\"'=[]{}.,#-_\0é\u200b"


@settings(max_examples=40, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(data=st.data())
def test_any_change_of_the_study_file_gives_a_sound_study_or_one_sentence(folder, data):
    path = folder.write()
    text = path.read_text()
    start = data.draw(st.integers(0, len(text)))
    end = min(len(text), start + data.draw(st.integers(0, 12)))
    path.write_text(text[:start] + data.draw(st.text(CHARACTERS, max_size=8)) + text[end:], encoding="utf-8")
    try:
        study = read_study(path)
    except StudyError as error:
        said = str(error).replace(str(folder.folder), "")
        assert said.isprintable() and said[-1] in ".?" and len(said) < 1500
        return
    assert len(study.fixes) == study.counts["fixes"] and np.isfinite(study.fixes[["x", "y"]].to_numpy(float)).all()
    assert study.grid.habitable_km2 > 0
