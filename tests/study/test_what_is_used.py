"""Deployments, [fixes.keep], periods and groups that come and go: what is used, and what is set aside and counted."""

import datetime as dt
import re

import numpy as np
import pandas as pd
import pytest

from bayesrange.study import StudyError, read_study


def refused(folder, match, period=None):
    with pytest.raises(StudyError, match=re.escape(match)) as caught:
        read_study(folder.write(), period)
    assert str(caught.value).isprintable() and str(caught.value)[-1] in ".?"


def deploy(folder, *rows, **animals):
    """Tags 1 (all of the fixes of N1) and 2 (S1), 3 (E1)."""
    folder.fixes["tag"] = folder.fixes.pop("animal").map({"N1": "1", "S1": "2", "E1": "3"})
    lines = ["animal,tag,from,until,fate", *(rows or ["N1,1,,,", "S1,2,,,", "E1,3,,,"])]
    folder.path("animals.csv").write_text("\n".join(lines) + "\n")
    folder.toml["fixes"]["tag"] = "tag"
    folder.toml["animals"] = {"file": "animals.csv"} | animals


def test_tags_become_animals(folder):
    plain = folder.read().fixes
    deploy(folder)
    study = folder.read()
    pd.testing.assert_frame_equal(study.fixes, plain)
    assert (study.counts["outside_deployment"], study.counts["settling_in"]) == (0, 0)
    assert "animals.csv" in study.hashes


def test_a_tag_is_used_again_and_what_is_between_is_set_aside(folder):
    # Fixes every 4 h from 2031-03-01T00:00+01:00, 60 of them: the last is on 03-10 at 20:00.
    deploy(folder, "N1,1,,2031-03-03,died", "N2,1,2031-03-05T00:00+01:00,,", "S1,2,,,", "E1,3,,,")
    folder.toml["fixes"]["zone"] = "Europe/Oslo"
    study = folder.read()
    assert study.fixes["animal"].value_counts().to_dict() == {"N1": 18, "N2": 36, "S1": 60, "E1": 60}
    assert study.counts["outside_deployment"] == 6
    assert study.deployments[["animal", "tag", "fate"]].iloc[0].tolist() == ["N1", "1", "died"]
    assert any("animals.csv: 6 fixes outside any deployment set aside" in w for w in study.warnings)


def test_the_days_of_settling_in_are_set_aside(folder):
    rows = [f"{a},{t},2031-03-01T00:00+01:00,," for a, t in (("N1", 1), ("S1", 2), ("E1", 3))]
    deploy(folder, *rows, settle_in_days=2)
    study = folder.read()
    assert study.counts["settling_in"] == 3 * 12
    assert study.fixes["time"].min() == pd.Timestamp("2031-03-02T23:00Z")


def test_deployments_bound_animals_without_tags_too(folder):
    folder.path("animals.csv").write_text("animal,from,until\nN1,,2031-03-02T00:00+01:00\nS1,,\nE1,,\n")
    folder.toml["animals"] = {"file": "animals.csv"}
    assert folder.read().fixes["animal"].value_counts()["N1"] == 6


DEPLOYMENTS = {
    "unknown tag": (["N1,1,,,", "S1,2,,,"], 'fixes.csv, line 122: "3" is in no deployment of animals.csv'),
    "overlap": (
        ["N1,1,,2031-03-03,", "N2,1,2031-03-03,,", "S1,2,,,", "E1,3,,,"],
        'animals.csv, line 3: the tag "1" is in an earlier deployment',
    ),
    "back": (["N1,1,2031-03-03,2031-03-01,"], "animals.csv, line 2: until is not after from"),
    "no date": (["N1,1,March,,"], 'animals.csv, line 2: the time "March" cannot be read: expected ISO 8601'),
    "no such day": (["N1,1,2031-02-30,,"], 'the time "2031-02-30" cannot be read: there is no such day'),
    "no offset": (["N1,1,2031-03-01T04:00,,"], "the time 2031-03-01T04:00 has no offset from UTC"),
    "blank tag": (["N1,,,,"], "animals.csv, line 2: the tag is blank"),
    "blank animal": ([",1,,,"], "animals.csv, line 2: the animal is blank"),
    "none in time": (["N1,1,2032-01-01,,", "S1,2,2032-01-01,,", "E1,3,2032-01-01,,"], "no fix is within a deployment"),
}


@pytest.mark.parametrize("case", DEPLOYMENTS)
def test_a_wrong_deployment(folder, case):
    rows, match = DEPLOYMENTS[case]
    deploy(folder, *rows)
    refused(folder, match)


def test_settings_of_deployments_that_do_not_go_together(folder):
    deploy(folder, settle_in_days=3)
    refused(folder, "animals.csv, line 2: from is blank, and [animals] settle_in_days counts from it")
    del folder.toml["animals"]["file"]
    refused(folder, "[fixes] tag: a tag is no animal; name the table of deployments by [animals] file")
    del folder.toml["fixes"]["tag"]
    refused(folder, "[animals] settle_in_days: it counts from a deployment's beginning")
    folder.toml["animals"] = {"file": "animals.csv"}
    folder.toml["fixes"] |= {"tag": "tag", "animal": "tag"}
    refused(folder, "[fixes] tag: there is animal too")
    folder.toml["fixes"]["time"] = ["date", "clock", "zone"]
    refused(folder, "[fixes] time: expected one column or two, the day and the clock")


@pytest.mark.parametrize(
    ("hours", "clock"), [("18:00-06:00", {0, 4, 20}), ("04:00 - 12:00", {4, 8}), ("12:00-24:00", {12, 16, 20})]
)
def test_hours_are_those_of_the_clock_as_written(folder, hours, clock):
    folder.toml["fixes"]["keep"] = {"hours": hours}
    study = folder.read()
    assert set((study.fixes["time"] + pd.Timedelta("1h")).dt.hour) == clock  # written with +01:00
    assert study.counts["not_kept_by_hours"] == 180 - len(study.fixes) > 0
    assert any(f"{180 - len(study.fixes)} of 180 fixes were set aside" in w for w in study.warnings)


def test_hours_are_those_of_the_zone_where_one_is_given(folder):
    folder.toml["fixes"] |= {"keep": {"hours": "04:00-12:00"}, "zone": "Asia/Tokyo"}  # UTC+9: common practice
    assert set((folder.read().fixes["time"] + pd.Timedelta("9h")).dt.hour) <= set(range(4, 12))


def test_day_and_night_share_the_fixes_between_them(folder):
    folder.toml["fixes"]["keep"] = {"sun": "day"}
    day = folder.read().fixes
    folder.toml["fixes"]["keep"] = {"sun": "night"}
    night = folder.read().fixes
    assert len(day) + len(night) == 180
    # At 3° E, 50.5° N in early March the sun is up from about 6:25 to 17:30 UTC (closed form below)
    declination, latitude = np.radians(-6.0), np.radians(50.5)
    half = np.degrees(np.arccos(-np.tan(latitude) * np.tan(declination))) / 15
    hour = (day["time"] - day["time"].dt.normalize()).dt.total_seconds() / 3600
    assert (np.abs(hour - 12) < half + 0.5).all() and len(day) == 3 * 10 * 3


def test_a_column_keeps_the_rows_with_its_value(folder):
    folder.fixes["activity"] = ["active", "rest", "odd"] * 60
    folder.toml["fixes"]["keep"] = {"column": {"activity": "active"}}
    study = folder.read()
    assert (study.counts["not_kept_by_column"], len(study.fixes)) == (120, 60)
    folder.toml["fixes"]["keep"] = {"column": {"activity": ["active", "odd"]}, "hours": "00:00-12:00"}
    counts = folder.read().counts
    assert (counts["not_kept_by_column"], counts["not_kept_by_hours"] + counts["fixes"]) == (60, 120)


KEEP = {
    "hours": ({"hours": "6-18"}, '[fixes.keep] hours: expected two clock times such as "18:00-06:00", got "6-18"'),
    "no hours": ({"hours": "06:00-06:00"}, '[fixes.keep] hours: expected two clock times such as "18:00-06:00"'),
    "late": ({"hours": "06:00-24:30"}, "[fixes.keep] hours: expected two clock times"),
    "sun": ({"sun": "dusk"}, '[fixes.keep] sun: expected "night" or "day", got "dusk"'),
    "column": ({"column": {"activty": "x"}}, 'there is no column "activty", which [fixes.keep] column names'),
    "none": ({"column": {"group": "North"}}, '[fixes.keep] column = group = "North": no fix is left'),
}


@pytest.mark.parametrize("case", KEEP)
def test_a_wrong_keep(folder, case):
    keep, match = KEEP[case]
    folder.toml["fixes"]["keep"] = keep
    refused(folder, match)


def periods(folder, **spans):
    """Write `[periods]` by hand, as dates of TOML have no quotes."""
    lines = [f"{name} = {{ from = {start}, until = {until} }}" for name, (start, until) in spans.items()]
    path = folder.write()
    path.write_text(path.read_text() + "\n[periods]\n" + "\n".join(lines) + "\n")
    return path


TWO = {"before": ("2031-03-01", "2031-03-05"), "after": ("2031-03-07", "2031-03-31")}


def test_one_period_is_read_and_the_rest_counted(folder):
    before, after = (read_study(periods(folder, **TWO), period) for period in TWO)
    assert (before.period, after.period, folder.read().period) == ("before", "after", None)
    # Until is the whole day, here of UTC: the fix of 2031-03-01T00:00+01:00 is on the last of February there
    assert before.fixes["time"].max() < pd.Timestamp("2031-03-06T00:00Z") <= pd.Timestamp("2031-03-05T23:00Z").ceil("D")
    assert before.fixes["time"].min() == pd.Timestamp("2031-03-01T03:00Z")
    assert before.counts["outside_period"] == 180 - len(before.fixes) == 180 - 3 * 30
    assert after.fixes["time"].min() == pd.Timestamp("2031-03-07T03:00Z")
    assert any(f'The period "before": {len(before.fixes)} of 180 fixes' in w for w in before.warnings)


def test_layers_go_by_period(folder):
    north, east = np.mgrid[0:160, 0:160]
    folder.raster("later.tif", (900 + north + 2.0 * east).astype("float32"), 25.0)
    folder.toml["layers"]["worms"] = {"files": {"before": "worms.tif", "after": "later.tif"}, "unit": "kg/ha"}
    before, after = (read_study(periods(folder, **TWO), period) for period in TWO)
    inside = before.grid.inside
    difference = after.layers["worms"].values[inside] - before.layers["worms"].values[inside]
    assert difference == pytest.approx(np.full(inside.sum(), 700.0))
    assert "later.tif" in after.hashes and "later.tif" not in before.hashes


PERIODS = {
    "none chosen": (
        TWO,
        None,
        "the study has the periods before, after, which are fitted one by one; choose",
    ),
    "unknown": (TWO, "befor", 'there is no period "befor"; did you mean "before"?'),
    "back": ({"before": ("2031-03-05", "2031-03-01")}, "before", "[periods] before: until is not after from"),
    "overlap": (TWO | {"late": ("2031-03-31", "2031-04-30")}, "late", '[periods]: "after" and "late" overlap'),
    "empty": (TWO | {"late": ("2031-06-01", "2031-06-30")}, "late", "[periods] late: no fix is in it; the fixes are"),
    "quotes": ({"before": ('"2031-03-01"', "2031-03-05")}, "before", "expected a date such as 2031-03-01, without"),
    "folder": ({'"../up"': ("2031-03-01", "2031-03-05")}, "../up", "[periods]: the name '../up' would not do for a"),
    "alike": (TWO | {"After": ("2031-04-01", "2031-04-30")}, "after", "[periods]: two names differ only by upper case"),
    "no offset": ({"a": ("2031-03-01T04:00:00", "2031-03-05")}, "a", "[periods] a, from: the time 2031-03-01T04:00:00"),
    "far": ({"a": ("0001-01-01", "2031-03-05")}, "a", "[periods] a, from: 0001-01-01 is too far off"),
}


@pytest.mark.parametrize("case", PERIODS)
def test_a_wrong_period(folder, case):
    spans, period, match = PERIODS[case]
    with pytest.raises(StudyError, match=re.escape(match)):
        read_study(periods(folder, **spans), period)


def test_layers_by_period_that_do_not_fit_the_periods(folder):
    folder.toml["layers"]["worms"] = {"files": {"before": "worms.tif", "later": "worms.tif"}}
    refused(folder, "[layers.worms] files: there is no section [periods]")
    with pytest.raises(StudyError, match=re.escape('[layers.worms] files: there is none for the period "after"')):
        read_study(periods(folder, **TWO), "before")
    refused(folder, "[layers.worms] files: there is no section [periods]", "before")


def test_a_period_of_a_study_without_periods(folder):
    refused(folder, 'there is no period "before"; the study file has no section [periods]', "before")


def test_a_group_that_is_not_there_in_the_period_is_left_out(folder):
    folder.groups["until"] = ["", "", ""]
    folder.groups.loc[3] = ["west", folder.west + 500, folder.south + 500, 2, 0.1, "2031-02-15"]
    study = folder.read()
    assert study.groups["group"].tolist() == ["north", "south", "east"]
    assert any("groups.csv: not there in the time that is fitted, and left out: west" in w for w in study.warnings)
    folder.groups["until"] = "2031-02-15"
    refused(folder, "groups.csv: no group is there in the time that is fitted")


def test_a_local_time_bounds_a_period_where_the_zone_is_known(folder):
    folder.toml["fixes"]["zone"] = "Europe/Oslo"
    moment = dt.datetime(2031, 3, 2, 8, 0).isoformat()
    study = read_study(periods(folder, a=(moment, "2031-03-04")), "a")
    assert study.fixes["time"].min() == pd.Timestamp("2031-03-02T07:00Z")
    assert study.fixes["time"].max() == pd.Timestamp("2031-03-04T19:00Z")
