"""Location error from dilution of precision, classes and ellipses, against the field's own rules."""

import re

import numpy as np
import pyproj
import pytest
from scipy import stats

from bayesrange.study import StudyError

ELLIPSE = ["error_major_m", "error_minor_m", "error_bearing_deg"]


def refused(folder, match):
    with pytest.raises(StudyError, match=re.escape(match)) as caught:
        folder.read()
    assert str(caught.value).isprintable() and str(caught.value)[-1] in ".?"


def set_fixes(folder, **keys):
    folder.toml["fixes"] |= keys


def test_hdop_times_uere_is_root_2_times_the_sd_of_an_axis(folder):
    # Source: NRC 1995, GPS: A Shared National Asset, app. D: HDOP 1.5 and UERE 4 m: DRMS 6 m, sd per axis 4.242641 m
    folder.fixes["hdop"] = 1.5
    folder.fixes.loc[3, "hdop"] = 3.0
    set_fixes(folder, hdop="hdop", uere_m=4)
    study = folder.read()
    sd = study.fixes.set_index("row")["error_m"]
    assert sd[5] == pytest.approx(2 * 4.242641, abs=2e-6) and sd[2] == pytest.approx(4.242641, abs=1e-6)
    # The radius that holds 95 %: 10.384910 m for this sd (same source)
    assert sd[2] * np.sqrt(stats.chi2(2).ppf(0.95)) == pytest.approx(10.384910, abs=1e-5)
    assert not set(ELLIPSE) & set(study.fixes.columns)


def test_blank_hdop_is_counted(folder):
    folder.fixes["hdop"] = "2"
    folder.fixes.loc[[4, 9], "hdop"] = ""
    set_fixes(folder, hdop="hdop", uere_m=5)
    study = folder.read()
    assert (study.fixes["error_m"] == 0).sum() == 2
    assert "fixes.csv: 2 fixes have no error given, taken as exact." in study.warnings


def test_classes_take_their_error_from_the_table(folder):
    folder.fixes["quality"] = np.resize(["3", "2", "B", ""], 180)
    folder.path("classes.csv").write_text("class,error_m\n3,150\n2,350\nB,8000\n")
    set_fixes(folder, error_class="quality", error_table="classes.csv")
    study = folder.read()
    assert study.fixes.sort_values("row")["error_m"].tolist() == [150.0, 350.0, 8000.0, 0.0] * 45
    assert "classes.csv" in study.hashes
    assert "fixes.csv: 45 fixes have no error given, taken as exact." in study.warnings


def with_ellipses(folder, **keys):
    folder.fixes["smaj"], folder.fixes["smin"], folder.fixes["dir"] = "200", "50", "30"
    set_fixes(folder, error_major="smaj", error_minor="smin", error_bearing="dir", **keys)


def test_ellipses_are_standard_deviations_unless_a_level_is_said(folder):
    with_ellipses(folder)
    study = folder.read()
    assert (study.fixes[ELLIPSE] == [200, 50, 30]).all(axis=None)
    assert study.fixes["error_m"].to_numpy() == pytest.approx(np.sqrt((200**2 + 50**2) / 2))
    assert any("smaj and smin were read as semi-axes that are standard deviations." in w for w in study.warnings)
    set_fixes(folder, error_level=0.95)
    study = folder.read()
    # 2.447747: the radius in sd that holds 95 % of a circular normal error (NRC 1995, app. D; closed form)
    assert study.fixes[ELLIPSE[0]].to_numpy() == pytest.approx(200 / 2.447747, rel=1e-6)
    assert study.fixes[ELLIPSE[1]].to_numpy() == pytest.approx(50 / 2.447747, rel=1e-6)
    assert any("those of 95 % ellipses: sd = it / 2.4477" in w for w in study.warnings)


def test_blank_ellipses_are_exact_and_counted(folder):
    with_ellipses(folder)
    folder.fixes.loc[7, ["smaj", "smin", "dir"]] = ""
    study = folder.read()
    row = study.fixes.set_index("row").loc[9]
    assert (row[ELLIPSE] == 0).all() and row["error_m"] == 0
    assert "fixes.csv: 1 fix has no error given, taken as exact." in study.warnings


def test_ellipses_of_longitude_and_latitude_lie_to_true_north(folder):
    with_ellipses(folder)
    plain = folder.read()
    carry = pyproj.Transformer.from_crs(folder.crs, "EPSG:4326", always_xy=True)
    x, y = folder.fixes["x"].astype(float).to_numpy(), folder.fixes["y"].astype(float).to_numpy()
    folder.fixes["x"], folder.fixes["y"] = carry.transform(x, y)
    set_fixes(folder, crs="EPSG:4326")
    study = folder.read()
    # From each place 10 m along the ellipse's true azimuth on the ellipsoid, and its direction on the grid
    place = folder.fixes["x"].to_numpy(dtype=float), folder.fixes["y"].to_numpy(dtype=float)
    ahead = pyproj.Geod(ellps="WGS84").fwd(*place, np.full(180, 30.0), np.full(180, 10.0))
    east, north = carry.transform(ahead[0], ahead[1], direction="INVERSE")
    expected = np.degrees(np.arctan2(east - x, north - y))
    order = study.fixes.sort_values("row")
    np.testing.assert_allclose(order["error_bearing_deg"], expected, atol=1e-3)  # 10 m read to a few 1e-9 degrees
    np.testing.assert_allclose(order[ELLIPSE[:2]], plain.fixes[ELLIPSE[:2]])
    assert np.abs(expected - 30).max() > 0.001


def test_a_fix_may_be_outside_by_3_sd_of_the_long_axis(folder):
    with_ellipses(folder)
    folder.fixes.loc[7, ["x", "y"]] = [folder.west - 590, folder.south + 2000]
    folder.fixes.loc[7, "dir"] = "90"
    study = folder.read()
    assert study.counts["outside_within_error"] == 1
    folder.fixes.loc[7, "x"] = folder.west - 615
    refused(folder, "1 fix outside the study area (fixes.csv line 9), by more than 3 standard deviations")


def test_a_column_that_is_passed_over_is_named(folder):
    folder.fixes["hdop"], folder.fixes["error_m"] = 1.5, 20.0
    set_fixes(folder, hdop="hdop", uere_m=4)
    study = folder.read()
    assert 'fixes.csv: the column "error_m" is not used, as [fixes] hdop says the error.' in study.warnings
    assert (study.fixes["error_m"] < 5).all()


KEYS = {
    "two": ({"hdop": "hdop", "uere_m": 4, "error": 20}, "[fixes] hdop: there is error too"),
    "two more": (
        {"hdop": "hdop", "uere_m": 4, "error_class": "c", "error_table": "t.csv"},
        "[fixes] error_class: there is hdop too, and each says the location error",
    ),
    "no uere": ({"hdop": "hdop"}, "[fixes] hdop: uere_m is missing beside it"),
    "no hdop": ({"uere_m": 4}, "[fixes] uere_m: hdop is missing beside it"),
    "no table": ({"error_class": "c"}, "[fixes] error_class: error_table is missing beside it"),
    "no class": ({"error_table": "t.csv"}, "[fixes] error_table: error_class is missing beside it"),
    "no minor": (
        {"error_major": "a", "error_bearing": "c"},
        "[fixes] error_major: error_minor is missing beside it; an ellipse needs error_major, error_minor",
    ),
    "no ellipse": ({"error_level": 0.95}, "[fixes] error_level: it says what ellipses bound"),
    "percent": (
        {"error_major": "a", "error_minor": "b", "error_bearing": "c", "error_level": 95},
        "[fixes] error_level: expected a share between 0 and 1 such as 0.95, got 95",
    ),
    "uere": ({"hdop": "hdop", "uere_m": 0}, "[fixes] uere_m: expected a number of metres above 0, got 0"),
    "no table file": (
        {"error_class": "group", "error_table": "t.csv"},
        "t.csv: there is no such file beside the study file",
    ),
    "no column": ({"hdop": "hdpo", "uere_m": 4}, 'there is no column "hdpo", which [fixes] hdop names'),
}


@pytest.mark.parametrize("case", KEYS)
def test_keys_that_do_not_go_together(folder, case):
    keys, match = KEYS[case]
    set_fixes(folder, **keys)
    refused(folder, match)


CLASSES = {
    "unknown": ("class,error_m\n3,150\n", 'fixes.csv, line 4: the error class "B" is not in classes.csv; known are 3'),
    "close": ("class,error_m\n3,150\nBB,8000\n", 'the error class "B" is not in classes.csv; did you mean "BB"?'),
    "minus": ("class,error_m\n3,-150\nB,8000\n", 'classes.csv, line 2: the error is "-150"; expected at least 0 m'),
    "twice": ("class,error_m\n3,150\n3,160\n", 'classes.csv, line 3: the class is "3" once more; expected one line'),
    "blank": ("class,error_m\n,150\n", "classes.csv, line 2: the class is blank"),
    "header": ("quality,error_m\n3,150\n", 'classes.csv: there is no column "class", which a table of error classes'),
    "text": ("class,error_m\n3,far\n", 'classes.csv, line 2, column "error_m": expected a number, got "far"'),
}


@pytest.mark.parametrize("case", CLASSES)
def test_a_wrong_table_of_classes(folder, case):
    text, match = CLASSES[case]
    folder.path("classes.csv").write_text(text)
    folder.fixes["quality"] = np.resize(["3", "3", "B"], 180)
    set_fixes(folder, error_class="quality", error_table="classes.csv")
    refused(folder, match)


CELLS = {
    "part": ("smin", "", "fixes.csv, line 9: the ellipse is given in part"),
    "swapped": ("smin", "300", 'the long semi-axis is "200"; expected at least the short one, column "smin"'),
    "minus": ("smin", "-5", 'fixes.csv, line 9: the short semi-axis is "-5"; expected at least 0 m'),
    "turn": ("dir", "361", 'fixes.csv, line 9: the ellipse\'s bearing is "361"; expected 0 to 360 degrees, clockwise'),
    "text": ("dir", "N", 'fixes.csv, line 9, column "dir": expected a number, got "N"'),
}


@pytest.mark.parametrize("case", CELLS)
def test_a_wrong_ellipse(folder, case):
    column, text, match = CELLS[case]
    with_ellipses(folder)
    folder.fixes.loc[7, column] = text
    refused(folder, match)


@pytest.mark.parametrize("text", ["0", "-1"])
def test_an_hdop_of_nothing(folder, text):
    folder.fixes["hdop"] = "1.2"
    folder.fixes.loc[7, "hdop"] = text
    set_fixes(folder, hdop="hdop", uere_m=4)
    refused(folder, f'fixes.csv, line 9: the HDOP is "{text}"; expected a number above 0, or blank')
