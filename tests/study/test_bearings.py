"""Studies from bearings: sets, north, standard deviations, flags, and what is set aside and counted."""

import numpy as np
import pandas as pd
import pyproj
import pytest
from study._vhf import CRS, HILLS, SOUTH, WEST, hill_convergence, only_bearings, write

from bayesrange.study._bare import read_bare

ELLIPSE = ["error_major_m", "error_minor_m", "error_bearing_deg"]


def places(study):
    return study.fixes[["x", "y"]].to_numpy()


def true_places(truth):
    return truth[["x", "y"]].to_numpy(dtype=float)


def test_exact_bearings_give_back_the_places(folder):
    truth, table = only_bearings(folder, sd_deg_true=0.0)
    study = write(folder, table)
    # Bearings are written to 0.001°, 0.09 m at 5 km; three of them
    np.testing.assert_allclose(places(study), true_places(truth), atol=0.2)
    assert (study.fixes["animal"] == truth["animal"]).all() and (study.fixes["group"] == truth["group"]).all()
    # Three bearings at 0, 3 and 6 minutes
    assert (study.fixes["time"] == pd.to_datetime(truth["time"], utc=True) + pd.Timedelta("3min")).all()
    assert study.counts["bearings"] == 3 * study.counts["bearing_sets"] == 3 * study.counts["fixes"] == 540
    assert {"bearings.csv", "stations.csv"} <= study.hashes.keys() and (study.fixes["flag"] == "").all()


def test_true_places_are_in_their_ellipses(folder):
    truth, table = only_bearings(folder)
    study = write(folder, table)
    major, minor, bearing = (study.fixes[c].to_numpy() for c in ELLIPSE)
    np.testing.assert_allclose(study.fixes["error_m"] ** 2, (major**2 + minor**2) / 2)
    off = places(study) - true_places(truth)
    angle = np.radians(bearing)
    along = off[:, 0] * np.sin(angle) + off[:, 1] * np.cos(angle)
    across = off[:, 0] * np.cos(angle) - off[:, 1] * np.sin(angle)
    held = (along / major) ** 2 + (across / minor) ** 2 < 5.9915  # chi-squared with 2 degrees of freedom, 95 %
    assert 0.90 < held.mean() < 0.99  # 180 sets: binomial standard error 0.016
    assert np.abs(along).mean() > 1.2 * np.abs(across).mean()
    told = next(w for w in study.warnings if "standard deviation of a bearing was pooled over" in w)
    assert "180 sets of three and more" in told and "O0" in told and "O1" in told


@pytest.mark.parametrize("north", ["true", "magnetic"])
def test_north_is_turned_to_the_grid_of_the_study(folder, north):
    # 4 km west of a meridian 3° off the zone's own the grid is turned by more than a degree: 100 m at 5 km
    truth, table = only_bearings(folder, north, sd_deg_true=0.0)
    gamma = dict(zip(HILLS["station"], hill_convergence(), strict=True))
    table["bearing"] = (table["bearing"].astype(float) + table["station"].map(gamma)) % 360
    if north == "magnetic":
        table["bearing"] = (table["bearing"] - 11.5) % 360
        folder.toml["bearings"]["declination"] = 11.5
    study = write(folder, table)
    np.testing.assert_allclose(places(study), true_places(truth), atol=0.3)
    if north == "magnetic":
        table["own"] = 11.5
        folder.toml["bearings"]["declination"] = "own"
        np.testing.assert_array_equal(places(write(folder, table)), places(study))


def test_convergence_has_the_sign_of_the_closed_form():
    # tan γ = tan(λ − λ₀) sin φ on the sphere, grid north east of true north in a zone's north-east: common practice
    from bayesrange.study._north import convergence

    longitude, latitude = np.array([3.0, 4.5, 1.5, 4.5]), np.array([50.0, 50.0, 50.0, -50.0])
    crs = pyproj.CRS(CRS)
    x, y = pyproj.Transformer.from_crs("EPSG:4326", crs, always_xy=True).transform(longitude, latitude)
    expected = np.degrees(np.arctan(np.tan(np.radians(longitude - 3)) * np.sin(np.radians(latitude))))
    np.testing.assert_allclose(convergence(x, y, crs), expected, atol=1e-4)
    assert (convergence(longitude, latitude, pyproj.CRS("EPSG:4326")) == 0).all()


def test_stations_in_degrees_and_a_chosen_system_give_the_same_places(folder):
    truth, table = only_bearings(folder, "true", sd_deg_true=0.0)
    gamma = dict(zip(HILLS["station"], hill_convergence(), strict=True))
    table["bearing"] = (table["bearing"].astype(float) + table["station"].map(gamma)) % 360
    plain = write(folder, table)
    carry = pyproj.Transformer.from_crs(CRS, "EPSG:4326", always_xy=True).transform
    longitude, latitude = carry(HILLS["x"] + WEST, HILLS["y"] + SOUTH)
    where = pd.DataFrame({"station_x": longitude, "station_y": latitude}, index=HILLS["station"])
    table = table.join(where, on="station").drop(columns="station")
    del folder.toml["bearings"]["stations"]
    folder.toml["bearings"]["crs"] = "EPSG:4326"
    np.testing.assert_allclose(places(write(folder, table)), places(plain), atol=1e-3)
    del folder.toml["study"]["crs"]
    folder.groups[["x", "y"]] = ""
    chosen = write(folder, table)
    assert chosen.crs == pyproj.CRS(CRS) and any("was chosen from the fixes" in w for w in chosen.warnings)
    np.testing.assert_allclose(places(chosen), places(plain), atol=1e-3)
    np.testing.assert_allclose(chosen.fixes[ELLIPSE], plain.fixes[ELLIPSE], rtol=1e-4, atol=1e-3)


def test_bearings_and_fixes_are_put_together(folder):
    tracks = folder.fixes.copy()
    truth, table = only_bearings(folder)
    alone = write(folder, table)
    table["animal"] = "V" + table["animal"]
    folder.toml["fixes"] = {"file": "fixes.csv", "error": 12}
    both = write(folder, table)
    assert len(both.fixes) == len(tracks) + len(truth)
    vhf = both.fixes["animal"].str.startswith("V").to_numpy()
    columns = ["x", "y", "error_m", *ELLIPSE]
    np.testing.assert_array_equal(both.fixes.loc[vhf, columns], alone.fixes[columns])
    assert (both.fixes.loc[~vhf, ELLIPSE] == [12, 12, 0]).all(axis=None) and (both.fixes["flag"] == "").sum() > 300
    # Fixes in degrees: the bearings' places go with them and come back, ellipses and all
    carry = pyproj.Transformer.from_crs(CRS, "EPSG:4326", always_xy=True).transform
    folder.fixes["x"], folder.fixes["y"] = carry(tracks["x"].astype(float), tracks["y"].astype(float))
    folder.toml["fixes"]["crs"] = "EPSG:4326"
    again = write(folder, table)
    np.testing.assert_allclose(again.fixes[columns], both.fixes[columns], atol=1e-3)


@pytest.mark.parametrize("given", [3.0, {"O0": 3.0, "O1": 5.0}])
def test_a_standard_deviation_from_beacon_trials_makes_pairs_usable(folder, given):
    _, table = only_bearings(folder, hills=2, sd_deg=given)
    study = write(folder, table)
    assert study.counts["fixes"] + study.counts["no_place"] == 180 and 0 < study.counts["no_place"] < 18
    # Two lines at right angles from 3 km with 3° each: 157 m an axis, so most ellipses are of that size
    assert 80 < study.fixes["error_minor_m"].median() < 250
    narrow = study.fixes["flag"].str.contains("narrow crossing")
    assert study.counts["narrow_crossing"] == narrow.sum()


def test_pairs_and_single_bearings_are_set_aside_and_counted(folder):
    truth, table = only_bearings(folder)
    drop = table.groupby("set").cumcount().to_numpy()
    table = table[~((table["set"] < 10) & (drop > 1)) & ~((table["set"] >= 10) & (table["set"] < 15) & (drop > 0))]
    table.iloc[-1, table.columns.get_loc("bearing")] = ""
    study = write(folder, table)
    counts = study.counts
    assert (counts["pairs_set_aside"], counts["single_bearings"], counts["bearings_failed"]) == (11, 5, 1)
    assert counts["fixes"] == 180 - 16 and counts["bearing_sets"] == 180
    told = next(w for w in study.warnings if "of 180 sets" in w)
    assert "5 have bearings from one place only" in told and "11 are pairs without [bearings] sd_deg" in told
    assert any("bearings.csv: 1 row has no bearing, set aside" in w for w in study.warnings)


def test_a_bearing_the_wrong_way_round_is_flagged_and_used(folder):
    _, table = only_bearings(folder, hills=4, seed=3)
    clean = write(folder, table)
    turned = table["set"] == 40
    which = table.index[turned][0]
    table.loc[which, "bearing"] = (table.loc[which, "bearing"] + 180) % 360
    study = write(folder, table)
    assert len(study.fixes) == len(clean.fixes)
    flags = study.fixes["flag"].str.contains("behind observer")
    assert study.counts["behind_observer"] == flags.sum() == clean.counts["behind_observer"] + 1
    assert study.fixes.loc[flags, "row"].iloc[0] == which + 2
    told = next(w for w in study.warnings if "behind an observer" in w)
    assert f"bearings.csv line {which + 2}" in told
    # Its set is left out of the pooled standard deviation, so that other ellipses stay what they were
    others = (study.fixes["flag"] == "").to_numpy() & (clean.fixes["flag"] == "").to_numpy()
    np.testing.assert_allclose(study.fixes.loc[others, "error_m"], clean.fixes.loc[others, "error_m"], rtol=0.02)


def test_a_bearing_far_off_is_flagged(folder):
    _, table = only_bearings(folder, hills=4, seed=3, sd_deg=3.0)
    which = table.index[table["set"] == 40][0]
    table.loc[which, "bearing"] = (table.loc[which, "bearing"] + 35) % 360
    study = write(folder, table)
    row = study.fixes[study.fixes["row"] == which + 2].iloc[0]
    assert "large residual" in row["flag"] and study.counts["large_residual"] >= 1


def test_bearings_that_do_not_meet_have_no_place_and_are_counted(folder):
    _, table = only_bearings(folder, hills=2, sd_deg=3.0)
    for which in table.index[table["set"] == 7]:
        table.loc[which, "bearing"] = 123.0
    study = write(folder, table)
    told = next(w for w in study.warnings if "do not meet ahead" in w or "does not meet ahead" in w)
    assert "set aside" in told and study.counts["no_place"] + study.counts["fixes"] == 180
    assert not ((study.fixes["animal"] == "E1") & (study.fixes["row"] == 2 * 7 + 2)).any()


def test_without_a_column_of_sets_a_window_makes_them(folder):
    _, table = only_bearings(folder)
    by_set = write(folder, table)
    folder.toml["bearings"]["window_min"] = 6
    by_window = write(folder, table.drop(columns="set").sample(frac=1, random_state=1))
    columns = ["animal", "time", "x", "y", "error_m"]
    pd.testing.assert_frame_equal(by_window.fixes[columns], by_set.fixes[columns], rtol=1e-9)
    folder.toml["bearings"]["window_min"] = 5.9  # the third bearing, 6 minutes after the first, is left alone
    with pytest.raises(Exception, match="sd_deg = 5"):
        write(folder, table.drop(columns="set"))


def test_tags_of_bearings_become_animals_and_hours_are_kept(folder):
    _, table = only_bearings(folder)
    table["tag"] = table.pop("animal").map({"N1": "150.1", "S1": "150.2", "E1": "150.3"})
    folder.toml["bearings"]["tag"] = "tag"
    folder.path("animals.csv").write_text("animal,tag,from,until\nN1,150.1,,2031-03-04\nS1,150.2,,\nE1,150.3,,\n")
    folder.toml["animals"] = {"file": "animals.csv"}
    folder.toml["bearings"]["zone"] = "Europe/Oslo"
    folder.toml["fixes"] = {"keep": {"hours": "18:00-06:00"}, "zone": "Europe/Oslo"}
    study = write(folder, table)
    assert set(study.fixes["animal"]) == {"N1", "S1", "E1"}
    assert study.counts["outside_deployment"] > 0 and study.counts["not_kept_by_hours"] > 0
    assert set((study.fixes["time"] + pd.Timedelta("1h")).dt.hour) == {0, 4, 20}


def test_the_look_at_the_data_sees_places_from_bearings(folder):
    _, table = only_bearings(folder)
    plain = write(folder, table)
    bare = read_bare(folder.path("study.toml"))
    assert len(bare.fixes) == len(plain.fixes) and len(bare.failed) == 0
    np.testing.assert_array_equal(bare.fixes[["x", "y", *ELLIPSE]], plain.fixes[["x", "y", *ELLIPSE]])
