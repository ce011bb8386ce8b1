"""The layer of the chance that a fix succeeds: what it must be, and what is said of it."""

import re

import numpy as np
import pytest

from bayesrange.study import StudyError
from bayesrange.study._settings_file import read_settings_to_screen


def chances(folder, values=None):
    values = np.linspace(0.2, 1.0, 1600).reshape(40, 40) if values is None else values
    folder.raster("success.tif", values, 100.0)
    folder.toml["layers"]["success"] = {"file": "success.tif"}
    folder.toml["fixes"]["detection"] = "success"


def test_chances_are_read_and_said(folder):
    chances(folder)
    study = folder.read()
    assert study.layers["success"].values.max() == 1.0 and study.model_layers == ("worms",)
    assert any("fixes are taken to succeed by place, with chances from 0.2 to 1;" in w for w in study.warnings)


@pytest.mark.parametrize(
    ("bad", "match"),
    [
        (0.0, "1 cell inside the area has another value, such as 0; mend the layer."),
        (-0.1, "another value, such as -0.1; mend"),
        (1.01, "another value, such as 1.01; are these percent? Divide them by 100; mend"),
    ],
)
def test_what_is_no_chance_is_refused(folder, bad, match):
    values = np.full((40, 40), 0.5)
    values[7, 9] = bad
    chances(folder, values)
    with pytest.raises(StudyError, match=re.escape("[layers.success] success.tif: ") + ".*" + re.escape(match)):
        folder.read()


def test_what_is_no_chance_off_the_area_is_no_matter(folder):
    values = np.full((40, 40), 0.5)
    values[:, :5] = 0.0
    chances(folder, values)
    folder.fixes = folder.fixes[folder.fixes["x"].astype(float) > folder.west + 600]
    folder.area(folder.box(500, 0, 4000, 4000))
    assert np.nanmin(folder.read().layers["success"].values) == 0.5


def test_a_cell_without_a_chance_is_refused(folder):
    values = np.full((40, 40), 0.5)
    values[7, 9] = np.nan
    chances(folder, values)
    with pytest.raises(StudyError, match=r"\[layers.success\] success.tif: 1 of 1600 cells inside the area have no"):
        folder.read()


def test_a_layer_that_cannot_be_one_is_refused(folder):
    folder.toml["fixes"]["detection"] = "success"
    with pytest.raises(StudyError, match=r"detection: there is no layer \"success\"; add .* \(the study has worms\)"):
        folder.read()
    for keys, what in (
        ({"file": "worms.tif", "no_go": True}, "no-go ground"),
        ({"file": "worms.tif", "classes": {"1": "wood", "2": "fen"}, "reference": "fen"}, "a layer of classes"),
        ({"distance": "roads.gpkg"}, "a distance"),
    ):
        folder.toml["layers"]["success"] = keys
        with pytest.raises(StudyError, match=rf"\[fixes\] detection: \"success\" is {what}; expected a raster"):
            folder.read()


def test_cards_for_tracks_refuse_it(folder):
    chances(folder)
    folder.toml["model"] = {"card": "memory-resources", "layers": ["worms"]}
    with pytest.raises(StudyError, match=r"study.toml, \[fixes\] detection: it is for range cards, and memory-resou"):
        folder.read()


def test_a_look_at_the_fixes_goes_on_without_it(folder):
    folder.toml["fixes"]["detection"] = "success"
    _, said = read_settings_to_screen(folder.write())
    assert any('[fixes] detection: there is no layer "success"' in sentence for sentence in said)
