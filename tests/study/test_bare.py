"""A study that is only looked at: sound fixes are enough, and what is missing or wrong beside them is said."""

import json
import re

import numpy as np
import pandas as pd
import pytest
from study._vhf import only_bearings

from bayesrange.study import StudyError, find_flags, read_bare, read_settings


def bare(folder, **sections):
    folder.toml = {"study": {"crs": folder.crs}, "fixes": {"file": "fixes.csv"}, **sections}
    return read_bare(folder.write())


def test_fixes_and_a_reference_system_are_enough(folder):
    study = bare(folder)
    assert len(study.fixes) == 180 and study.area is None and study.groups is None and study.spans == {}
    assert study.warnings == ["[study] area: none is given, so that fixes outside it cannot be told; a fit needs one."]


def test_of_longitude_and_latitude_not_even_that(folder):
    folder.toml = {"fixes": {"file": "fixes.csv", "crs": "EPSG:4326"}}
    folder.fixes = folder.fixes.assign(x=3.0 + 0.001 * np.arange(180), y=50.5)
    assert read_bare(folder.write()).crs.to_epsg() == 32631


def test_a_whole_study_is_read_as_for_a_fit(folder):
    whole, looked_at = folder.read(), read_bare(folder.path("study.toml"))
    pd.testing.assert_frame_equal(looked_at.fixes, whole.fixes)
    pd.testing.assert_frame_equal(looked_at.groups, whole.groups)
    assert looked_at.area.equals(whole.area) and looked_at.warnings == []


def test_places_from_bearings_come_with_their_doubts(folder):
    _, table = only_bearings(folder, hills=2)
    folder.toml = {"study": {"crs": folder.crs}, "bearings": folder.toml["bearings"] | {"sd_deg": 3.0}}
    table.to_csv(folder.path("bearings.csv"), index=False)
    study = read_bare(folder.write())
    assert len(study.fixes) > 150 and "flag" in study.fixes.columns
    doubtful = find_flags(study.fixes).query("flag == 'bearing'")["fix"].tolist()
    assert doubtful == study.fixes.index[study.fixes["flag"] != ""].tolist() and doubtful


def test_duplicates_stay(folder):
    folder.fixes = pd.concat([folder.fixes, folder.fixes.iloc[[5]]], ignore_index=True)
    assert len(bare(folder).fixes) == 181


def test_failed_fixes_have_their_animal_and_time(folder):
    folder.fixes.loc[[3, 100], ["x", "y"]] = ""
    failed = bare(folder).failed
    assert failed["animal"].tolist() == ["N1", "S1"]
    assert failed["time"][0] == pd.Timestamp("2031-03-01T11:00Z")


def test_failed_fixes_go_through_deployments_as_fixes_do(folder):
    folder.fixes.loc[[3, 100], ["x", "y"]] = ""
    folder.fixes = folder.fixes.rename(columns={"animal": "tag"})
    rows = "animal,tag,from,until\nAda,N1,2031-03-05,\nBea,S1,,\nCid,E1,,\n"
    folder.path("animals.csv").write_text(rows)
    study = bare(folder, fixes={"file": "fixes.csv", "tag": "tag"}, animals={"file": "animals.csv"})
    assert study.failed["animal"].tolist() == ["Bea"]  # Ada's was before she wore the collar


def test_a_time_of_a_failed_fix_that_cannot_be_read_is_said(folder):
    folder.fixes.loc[3, ["x", "y"]] = ""
    folder.fixes.loc[3, "time"] = "noon"
    study = bare(folder)
    assert study.failed.empty and any('line 5: the time "noon" cannot be read' in w for w in study.warnings)


def test_classes_are_mapped_on_the_cells(folder):
    codes = np.where(np.arange(160)[None] < 80, 1, 2) * np.ones((160, 1), dtype=int)
    folder.raster("cover.tif", codes.astype("int16"), 25.0)
    layer = {"file": "cover.tif", "classes": {"1": "wood", "2": "grass"}, "reference": "grass"}
    study = bare(folder, study={"crs": folder.crs, "area": "area.geojson", "cell_m": 100}, layers={"cover": layer})
    assert study.classes["cover"].names == ["wood", "grass"]
    assert (study.classes["cover"].cells[:, :20] == 0).all() and (study.classes["cover"].cells[:, 20:] == 1).all()


PASSED_OVER = {
    "no such area": ({"study": {"area": "nowhere.geojson"}}, "no file nowhere.geojson"),
    "empty groups": ({"groups": {"file": "empty.csv"}}, "empty.csv: there is no group"),
    "no such card layer": ({"model": {"card": "avoidance", "layers": ["worm"]}}, 'there is no layer "worm"'),
    "unknown key of the model": (
        {"model": {"carrd": "avoidance"}},
        "carrd: there is no such key.*a fit would refuse it",
    ),
    "wrong sampling": ({"sampling": {"chains": "four"}}, r"\[sampling\] chains: expected a whole number"),
    "wrong period": ({"periods": {"before": {"from": "spring"}}}, r"\[periods.before\] from: expected a date"),
    "no such layer file": (
        {
            "layers": {"cover": {"file": "cover.tif", "classes": {"1": "a", "2": "b"}, "reference": "a"}},
            "study": {"area": "area.geojson"},
        },
        "cover.tif",
    ),
}


@pytest.mark.parametrize("case", PASSED_OVER)
def test_what_is_wrong_beside_the_fixes_is_said_and_left_out(folder, case):
    sections, match = PASSED_OVER[case]
    folder.path("empty.csv").write_text("group,x,y,animals\n")
    study = {"study": {"crs": folder.crs} | sections.get("study", {})}
    found = bare(folder, **(sections | study))
    assert len(found.fixes) == 180
    assert any(re.search(match, warning) for warning in found.warnings), found.warnings


REFUSED = {
    "no file": ({"fixes": {"file": "none.csv"}}, "there is no such file"),
    "no fixes section key": ({"fixes": {"file": "fixes.csv", "aminal": "a"}}, 'did you mean "animal"'),
    "unknown section": ({"grups": {"file": "groups.csv"}}, 'did you mean "groups"'),
    "no reference system": ({"study": {}}, r"\[study\] crs: this is missing"),
    "sensitive": ({"study": {"crs": "EPSG:32631", "sensitive": "high"}}, "shows exact places"),
    "tag without deployments": ({"fixes": {"file": "fixes.csv", "tag": "animal"}}, "a tag is no animal"),
}


@pytest.mark.parametrize("case", REFUSED)
def test_what_is_wrong_with_the_fixes_is_refused(folder, case):
    sections, match = REFUSED[case]
    with pytest.raises(StudyError, match=match) as caught:
        bare(folder, **sections)
    assert str(caught.value).count("\n") == 0


def test_a_study_without_area_cannot_be_fitted(folder):
    folder.toml["study"].pop("area")
    with pytest.raises(StudyError, match=r"\[study\] area: this is missing"):
        read_settings(folder.write())
    assert json.dumps(read_bare(folder.path("study.toml")).counts)
