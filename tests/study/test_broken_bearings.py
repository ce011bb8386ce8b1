"""Each mistake in the tables of bearings is answered by one sentence that names the place and the way out."""

import re

import numpy as np
import pandas as pd
import pytest
from study._vhf import CRS, only_bearings, write

from bayesrange.study import StudyError


def refused(folder, table, match):
    with pytest.raises(StudyError, match=re.escape(match)) as caught:
        write(folder, table)
    assert str(caught.value).isprintable() and str(caught.value)[-1] in ".?"


CELLS = {
    "unknown station": (
        "station",
        "brich",
        'bearings.csv, line 6: the station "brich" is not in stations.csv; did you',
    ),
    "strange station": ("station", "Q7", '"Q7" is not in stations.csv; add a line for it, or mend its name'),
    "blank station": ("station", "", "bearings.csv, line 6: the station is blank; expected one of stations.csv"),
    "over 360": ("bearing", "361", 'bearings.csv, line 6: the bearing is "361"; expected degrees from 0 to 360'),
    "below 0": ("bearing", "-5", 'bearings.csv, line 6: the bearing is "-5"; expected degrees from 0 to 360'),
    "quadrant": ("bearing", "N30E", 'bearings.csv, line 6, column "bearing": expected a number, got "N30E"'),
    "nan": ("bearing", "nan", 'bearings.csv, line 6, column "bearing": expected a number, got "nan"'),
    "blank animal": ("animal", "", "bearings.csv, line 6: the animal is blank; name it"),
    "animal by case": ("animal", "e1", "differ only by upper case or blanks"),
    "observer by case": ("observer", "o0", "differ only by upper case or blanks"),
    "control character": ("animal", "E\u202e1", "a line break or an invisible character"),
    "time": ("time", "noon", 'bearings.csv, line 6: the time "noon" cannot be read: expected ISO 8601'),
    "no offset": ("time", "2031-03-01T04:00", "has no offset from UTC"),
    "group": ("group", "south", "bearings.csv, line 6: the group is not that of the set's other bearings"),
    "blank set": (
        "set",
        "",
        "bearings.csv, line 6: the set is blank, and nothing else says which bearings make one fix",
    ),
    "far set": ("set", "119", 'the bearings of the set "119" of N1 are more than a day apart'),
}


@pytest.mark.parametrize("case", CELLS)
def test_a_wrong_cell(folder, case):
    column, text, match = CELLS[case]
    _, table = only_bearings(folder)
    table = table.sort_values(
        ["animal", "time"], key=lambda c: c.map({"N1": 0, "S1": 1, "E1": 2}).fillna(0), kind="stable"
    )
    table = table.astype({"set": object})
    table.iloc[4, table.columns.get_loc(column)] = text
    if column in ("animal", "observer"):
        table["set"] = range(len(table))
    refused(folder, table, match)


KEYS = {
    "no north": ({"north": None}, '[bearings] north: this is missing; expected "magnetic", "true" or "grid"'),
    "north": ({"north": "map"}, '[bearings] north: expected "magnetic", "true" or "grid", got "map"'),
    "declination": (
        {"north": "true", "declination": 3},
        "[bearings] declination: it is for magnetic bearings, but north",
    ),
    "no declination": ({"north": "magnetic"}, "[bearings] declination: this is missing for magnetic bearings"),
    "wide declination": (
        {"north": "magnetic", "declination": 200},
        "[bearings] declination: expected a number of degrees",
    ),
    "column": ({"north": "magnetic", "declination": "decl"}, 'there is no column "decl", which [bearings] declination'),
    "set column": ({"set": "fix"}, 'there is no column "fix", which [bearings] set names'),
    "observer column": ({"observer": "who"}, 'there is no column "who", which [bearings] observer names'),
    "window": ({"window_min": 0}, "[bearings] window_min: expected a number of minutes above 0, got 0"),
    "sd": ({"sd_deg": 0}, "[bearings] sd_deg: expected a number of degrees above 0 and below 90"),
    "sd of one": ({"sd_deg": {"O0": 4}}, '[bearings] sd_deg: there is none for the observer "O1"'),
    "sd of none": (
        {"sd_deg": {"O0": 4, "O1": 95.0}},
        "[bearings] sd_deg: expected degrees above 0 and below 90 for 'O1'",
    ),
    "two places": ({"station_x": "sx"}, "[bearings] station_x: the table of stations says where they are"),
    "no stations file": ({"stations": "hills.csv"}, "hills.csv: there is no such file beside the study file"),
    "no file": ({"file": "vhf.csv"}, "vhf.csv: there is no such file beside the study file"),
    "pattern": ({"file": "v*.csv"}, '[bearings] file: no file matches "v*.csv" beside the study file'),
    "typing mistake": ({"windowmin": 5}, '[bearings] windowmin: there is no such key; did you mean "window_min"?'),
    "tag": ({"tag": "tag"}, "[bearings] tag: a tag is no animal; name the table of deployments by [animals] file"),
    "zone": ({"zone": "Europe/Olso"}, "there is no time zone"),
    "crs": ({"crs": "EPSG:0"}, '[bearings] crs: "EPSG:0" is no reference system that is known'),
    "degrees": ({"crs": "EPSG:4326"}, "stations.csv: the stations are no longitudes and latitudes, but [bearings] crs"),
}


@pytest.mark.parametrize("case", KEYS)
def test_a_wrong_key(folder, case):
    keys, match = KEYS[case]
    _, table = only_bearings(folder)
    if case == "zone":
        table["time"] = table["time"].str.slice(0, 16)
    folder.toml["bearings"] |= keys
    folder.toml["bearings"] = {key: value for key, value in folder.toml["bearings"].items() if value is not None}
    refused(folder, table, match)


def test_a_declination_out_of_range(folder):
    _, table = only_bearings(folder, "magnetic", declination="decl")
    table["decl"] = 3.5
    table.loc[4, "decl"] = 350
    refused(folder, table, 'bearings.csv, line 6: the declination is "350.0"; expected degrees from -180 to 180')


STATIONS = {
    "twice": (
        "alder,500000,5600000\nalder,500000,5600100",
        'line 3: the station is "alder" once more; expected one line',
    ),
    "blank": (",500000,5600000", "stations.csv, line 2: the station is blank; expected one line a station"),
    "case": ("alder,500000,5600000\nAlder,504000,5600000", "differ only by upper case or blanks"),
    "text": ("alder,500000,N", 'stations.csv, line 2, column "y": expected a number, got "N"'),
    "far off": (
        "alder,1e300,5600000\nbirch,504000,5600000\ncedar,504000,5604000\nelm,500000,5604000",
        'stations.csv: the station "alder" lies where [study] crs does not reach; check [bearings] crs',
    ),
    "no place": ("alder,500000,", 'stations.csv, line 2, column "y": expected a number, got ""'),
    "degrees": (
        "alder,3.0,50.5\nbirch,3.1,50.5\ncedar,3.1,50.6\nelm,3.0,50.6",
        "stations.csv: the stations look like longitude and latitude; say so by crs",
    ),
}


@pytest.mark.parametrize("case", STATIONS)
def test_a_wrong_table_of_stations(folder, case):
    text, match = STATIONS[case]
    _, table = only_bearings(folder)
    folder.path("stations.csv").write_text(f"station,x,y\n{text}\n")
    refused(folder, table, match)


def test_nothing_says_where_stations_are(folder):
    _, table = only_bearings(folder)
    del folder.toml["bearings"]["stations"]
    refused(folder, table, "bearings.csv: nothing says where the stations are; name their table by [bearings] stations")
    folder.path("stations.csv").write_text("name,x,y\nalder,500000,5600000\n")
    folder.toml["bearings"]["stations"] = "stations.csv"
    refused(folder, table, 'stations.csv: there is no column "station", which a table of stations needs')


def test_a_missing_column_of_bearings(folder):
    _, table = only_bearings(folder)
    for column in ("animal", "time", "station", "bearing"):
        refused(folder, table.drop(columns=column), f'there is no column "{column}", which [bearings] {column} names')


def test_no_column_of_sets_and_no_window(folder):
    _, table = only_bearings(folder, keep_sets=False)
    refused(folder, table, 'bearings.csv, line 2: there is no column "set", and nothing else says which bearings make')


def test_neither_fixes_nor_bearings(folder):
    del folder.toml["fixes"]
    with pytest.raises(StudyError, match=re.escape("[fixes] file: this is missing; expected a file, a pattern")):
        folder.read()


def test_a_bearing_given_twice(folder):
    _, table = only_bearings(folder)
    refused(folder, pd.concat([table, table.iloc[[4]]]), "1 bearing repeats an animal, time, station and observer")


def test_no_bearings_at_all(folder):
    _, table = only_bearings(folder)
    refused(folder, table.iloc[:0], "bearings.csv: there is no bearing in it (0 rows)")
    refused(folder, table.assign(bearing=""), "bearings.csv: there is no bearing in it (540 rows)")


def test_pairs_alone_without_a_standard_deviation(folder):
    _, table = only_bearings(folder, hills=2)
    refused(folder, table, "standard deviation cannot be had from 0 sets of three and more bearings; say what beacon")


def test_too_few_sets_to_pool(folder):
    _, table = only_bearings(folder)
    few = table[(table["set"] < 4) | (table.groupby("set").cumcount() < 2)]
    refused(folder, few, "standard deviation cannot be had from 4 sets of three and more bearings")


def test_bearings_of_one_station_alone(folder):
    _, table = only_bearings(folder, hills=1, sd_deg=4)
    refused(folder, table, "none of 180 sets of bearings gives a place: 180 have bearings from one place only")


def test_a_station_on_the_animal_gives_no_place_and_is_named(folder):
    # Two bearings that meet on the second's own station: there the azimuth of the animal is undefined.
    _, table = only_bearings(folder, hills=2, sd_deg=3.0)
    first, second = table.index[table["set"] == 7]
    table.loc[first, ["station", "bearing"]] = ["alder", 0.0]
    folder.path("more.csv").write_text((folder.path("stations.csv")).read_text() + "oak,499500,5602000\n")
    folder.toml["bearings"]["stations"] = "more.csv"
    table.loc[second, ["station", "bearing"]] = ["oak", 90.0]
    study = write(folder, table)
    told = next(w for w in study.warnings if "meet within 1 m of a station" in w)
    assert study.counts["no_place"] + study.counts["fixes"] == 180
    rows = study.fixes["row"]
    assert first + 2 not in set(rows) and "bearings.csv line" in told


def test_places_outside_the_area_are_refused_with_their_line(folder):
    _, table = only_bearings(folder, hills=4, sd_deg_true=0.0, sd_deg=0.2)
    rows = table.index[table["set"] == 5]
    target = np.array([9000.0, 2000.0])
    from study._vhf import HILLS, grid_bearings

    for row in rows:
        hill = HILLS.set_index("station").loc[table.loc[row, "station"]]
        table.loc[row, "bearing"] = grid_bearings(*target, hill["x"], hill["y"])
    refused(folder, table, f"1 fix outside the study area (bearings.csv line {rows[0] + 2})")


def test_system_of_the_study_is_needed_for_stations_in_metres(folder):
    _, table = only_bearings(folder)
    del folder.toml["study"]["crs"]
    refused(folder, table, '[study] crs: this is missing; expected a metric system such as "EPSG:32631"')
    folder.toml["bearings"]["crs"] = CRS
    refused(folder, table, '[study] crs: this is missing; expected a metric system such as "EPSG:32631"')
