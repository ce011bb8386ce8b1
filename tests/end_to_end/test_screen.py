"""`screen`, `cards --for` and `start --fixes` from files to what a user sees."""

import csv
import json
import re

import geopandas
import numpy as np
import pandas as pd
import pytest
from screening._tracks import as_file, table, wandering

import bayesrange
from bayesrange import commands
from bayesrange.study import FLAGS, read_bare


def animals():
    """Two clean animals a group, one of each a companion of no one."""
    tracks = {"A1": ("north", 1, 0.0), "A2": ("north", 2, 300.0), "B1": ("south", 3, 4000.0)}
    parts = [table(wandering(600, seed=s) + east, animal=a, group=g) for a, (g, s, east) in tracks.items()]
    return pd.concat(parts, ignore_index=True)


def write(folder, fixes, study="", **sections):
    folder.mkdir(parents=True, exist_ok=True)
    as_file(fixes).to_csv(folder / "fixes.csv", index=False)
    lines = ["[study]", 'name = "Reed <Marsh> [bold]"', 'crs = "EPSG:32631"', study, "[fixes]", 'file = "fixes.csv"']
    for section, keys in sections.items():
        lines += [keys] if section == "fixes" else [f"[{section}]", keys]
    (folder / "study.toml").write_text("\n".join(lines) + "\n", encoding="utf-8")
    return folder


def spoilt():
    fixes = animals()
    fixes.loc[100, "x"] += 90_000
    fixes.loc[1300, "y"] += 4_000
    fixes.loc[1100:1199, ["x", "y"]] = fixes.loc[1100, ["x", "y"]].to_numpy(dtype=float)
    fixes.loc[[40, 700], ["x", "y"]] = np.nan
    return pd.concat([fixes, fixes.iloc[[5]]], ignore_index=True)


def test_a_bare_study_is_screened_and_nothing_but_the_folder_is_written(tmp_path, capsys):
    folder = write(tmp_path / "study", animals())
    before = {path.name: path.read_bytes() for path in folder.iterdir()}
    assert commands.main(["screen", str(folder)]) == 0
    said = " ".join(capsys.readouterr().out.split())
    assert "Reed <Marsh> [bold]" in said and "No fix is flagged." in said and "Nothing was changed." in said
    assert sorted(p.name for p in (folder / "screening").iterdir()) == [
        "screening.csv", "screening.gpkg", "screening.html",
    ]  # fmt: skip
    assert {p.name: p.read_bytes() for p in folder.iterdir() if p.is_file()} == before
    assert (
        (folder / "screening" / "screening.csv").read_text().startswith("animal,time,flag,value,limit,unit,file,row,")
    )
    assert len(geopandas.read_file(folder / "screening" / "screening.gpkg")) == 0


def test_planted_faults_are_in_table_points_and_page(tmp_path, capsys):
    folder = write(tmp_path / "study", spoilt())
    assert commands.main(["screen", str(folder)]) == 0
    said = " ".join(capsys.readouterr().out.split())
    assert 'flags = ["duplicate", "speed", "spike", "stationary"]' in said and "2 more attempts" in said
    with (folder / "screening" / "screening.csv").open(encoding="utf-8", newline="") as file:
        rows = list(csv.DictReader(file))
    flags = {(row["flag"], row["animal"], int(row["row"])) for row in rows}
    assert {("speed", "A1", 102), ("spike", "B1", 1302), ("duplicate", "A1", 1802), ("stationary", "A2", 1201)} <= flags
    assert {row["flag"] for row in rows} <= set(FLAGS) and all(row["meaning"] for row in rows)
    points = geopandas.read_file(folder / "screening" / "screening.gpkg")
    assert len(points) == len(rows) and points.crs.to_epsg() == 32631
    speed = points[points["flag"] == "speed"].geometry.iloc[0]
    written = pd.read_csv(folder / "fixes.csv").iloc[100]
    assert (speed.x, speed.y) == pytest.approx((written["x"], written["y"]))
    page = (folder / "screening" / "screening.html").read_text(encoding="utf-8")
    assert "Reed &lt;Marsh&gt; [bold]" in page and "<script" not in page and "http" not in page.split("</head>")[1]


def test_the_same_data_give_the_same_files(tmp_path):
    folder = write(tmp_path / "study", spoilt())
    bayesrange.screen(folder, tmp_path / "one")
    bayesrange.screen(folder, tmp_path / "two")
    for name in ("screening.csv", "screening.html"):
        assert (tmp_path / "one" / name).read_bytes() == (tmp_path / "two" / name).read_bytes()


def test_an_earlier_screening_is_replaced_and_anything_else_left_alone(tmp_path, capsys):
    folder = write(tmp_path / "study", animals())
    assert commands.main(["screen", str(folder)]) == 0
    assert commands.main(["screen", str(folder)]) == 0
    assert "replaces an earlier one" in " ".join(capsys.readouterr().out.split())
    other = tmp_path / "thesis"
    other.mkdir()
    (other / "screening.html").write_text("<p>my own</p>")
    assert commands.main(["screen", str(folder), "--out", str(other)]) == 2
    assert "holds other things than a screening" in capsys.readouterr().err
    assert (other / "screening.html").read_text() == "<p>my own</p>" and len(list(other.iterdir())) == 1
    (tmp_path / "file").write_text("x")
    assert commands.main(["screen", str(folder), "--out", str(tmp_path / "file")]) == 2
    assert "this is a file; expected a folder" in capsys.readouterr().err


def test_in_python_the_tables_are_pandas(tmp_path):
    found = bayesrange.screen(write(tmp_path / "study", spoilt()))
    assert found.table.query("flag == 'speed'")["row"].tolist() == [102, 1302] and found.counts["duplicate"] == 1
    assert found.animals.set_index("animal").loc["A1", "verdict"] == "settled"
    assert (found.folder / "screening.html").is_file()
    assert found.by_period.loc["north"].sum() == found.animals.query("group == 'north'")["sound"].sum()
    assert found.by_hour["failed"].sum() == 2


def test_what_screen_flags_is_what_a_fit_drops(tmp_path):
    flags = '["duplicate", "speed", "spike", "stationary"]'
    folder = write(tmp_path / "study", spoilt(), **{"fixes.drop": f"flags = {flags}"})
    found = bayesrange.screen(folder)
    assert "dropped in a fit" in (found.folder / "screening.html").read_text()
    bounds = found.study.fixes.loc[found.sound, ["x", "y"]]
    area = geopandas.GeoSeries(geopandas.points_from_xy(*bounds.to_numpy().T), crs=32631).union_all().convex_hull
    geopandas.GeoSeries([area.buffer(500)], crs=32631).to_crs(4326).to_file(folder / "area.geojson", driver="GeoJSON")
    text = (folder / "study.toml").read_text().replace("[fixes]", 'area = "area.geojson"\ncell_m = "auto"\n[fixes]', 1)
    (folder / "study.toml").write_text(text + '[model]\ncard = "localising"\n')
    study = bayesrange.read_study(folder)
    kept = found.study.fixes[found.sound]
    assert study.fixes["row"].tolist() == kept["row"].tolist()
    assert sum(n for key, n in study.counts.items() if key.startswith("dropped")) == len(found.study.fixes) - len(kept)


WRONG = {
    "no study": (None, "no such study file or folder"),
    "no fixes": (("fixes.csv", "none.csv"), "there is no such file"),
    "unknown flag": ('[fixes.drop]\nflags = ["slow"]', "expected a list such as"),
    "unknown key": ("[study.x]\n", "there is no such key"),
    "exact places must not be shown": (("[fixes]", 'sensitive = "high"\n[fixes]'), "shows exact places"),
}


def test_a_group_without_fixes_is_in_the_table_and_stops_nothing(tmp_path, capsys):
    folder = write(tmp_path / "study", animals(), groups='file = "groups.csv"')
    x, y = animals()[["x", "y"]].mean()
    (folder / "groups.csv").write_text(f"group,x,y,animals\nnorth,,,2\nsouth,,,1\nunwatched,{x:.0f},{y:.0f},2\n")
    assert commands.main(["screen", str(folder)]) == 0
    found = bayesrange.screen(folder, out=tmp_path / "again").groups.set_index("group")
    assert found.loc["unwatched", ["fixes", "effective"]].tolist() == [0, 0.0]


@pytest.mark.parametrize("case", WRONG)
def test_wrong_input_is_one_sentence_and_nothing_is_written(tmp_path, capsys, case):
    lines, words = WRONG[case]
    folder = tmp_path / "study"
    if lines is not None:
        write(folder, animals())
        text = (folder / "study.toml").read_text()
        (folder / "study.toml").write_text(text.replace(*lines) if isinstance(lines, tuple) else text + lines)
    before = sorted(tmp_path.rglob("*"))
    for command in (["screen", str(folder)], ["cards", "--for", str(folder)]):
        assert commands.main(command) == 2
        said = capsys.readouterr()
        assert said.out == "" and said.err.count("\n") == 1 and words in said.err
    assert sorted(tmp_path.rglob("*")) == before


def test_cards_for_a_study_say_yes_or_why_not(tmp_path, capsys):
    folder = write(tmp_path / "study", animals(), 'area = "area.geojson"\ncell_m = 300')
    xy = animals()[["x", "y"]].to_numpy().T
    hull = geopandas.GeoSeries(geopandas.points_from_xy(*xy), crs=32631).union_all().convex_hull.buffer(400)
    geopandas.GeoSeries([hull], crs=32631).to_crs(4326).to_file(folder / "area.geojson", driver="GeoJSON")
    assert commands.main(["cards", "--for", str(folder)]) == 0
    said = " ".join(capsys.readouterr().out.split())
    assert re.search(r"avoidance: not yet .*cells across", said) and "there is no layer yet" in said
    assert commands.main(["cards", "localising", "--for", str(folder)]) == 0
    assert "avoidance" not in capsys.readouterr().out
    assert not (folder / "screening").exists()


def started(tmp_path, fixes, *more, name="my fixes.csv"):
    (tmp_path / "data").mkdir(exist_ok=True)
    fixes.to_csv(tmp_path / "data" / name, index=False)
    return commands.main(["start", str(tmp_path / "new"), "--fixes", str(tmp_path / "data" / name), *more])


def test_start_fills_in_what_it_finds_and_screen_reads_it(tmp_path):
    degrees = animals()
    degrees = as_file(degrees).assign(x=3.0 + (degrees["x"] - 5e5) / 71_000, y=50.5 + (degrees["y"] - 5.6e6) / 111_000)
    renamed = {"animal": "Animal_ID", "time": "Timestamp", "x": "Longitude", "y": "Latitude", "group": "pack"}
    assert started(tmp_path, degrees.rename(columns=renamed)) == 0
    text = (tmp_path / "new" / "study.toml").read_text(encoding="utf-8")
    for line in ('crs    = "EPSG:32631"', 'animal = "Animal_ID"', 'x      = "Longitude"', 'crs    = "EPSG:4326"'):
        assert re.search(re.escape(line) + r" +# please check", text), text
    assert 'file   = "../data/my fixes.csv"' in text
    assert pd.read_csv(tmp_path / "new" / "animals.csv")["animal"].tolist() == ["A1", "A2", "B1"]
    assert pd.read_csv(tmp_path / "new" / "groups.csv")["group"].tolist() == ["north", "south"]
    study = read_bare(tmp_path / "new")
    assert len(study.fixes) == 1800 and study.crs.to_epsg() == 32631
    assert study.groups["group"].tolist() == ["north", "south"]


def test_start_knows_darwin_core_names(tmp_path):
    dwc = {"animal": "organismID", "time": "eventDate", "x": "decimalLongitude", "y": "decimalLatitude"}
    fixes = as_file(animals()).assign(x=3.1, y=50.5).rename(columns=dwc).drop(columns=["group", "error_m"])
    assert started(tmp_path, fixes.assign(coordinateUncertaintyInMeters=30.0)) == 0
    study = read_bare(tmp_path / "new")
    assert study.fixes["error_m"].iloc[0] == pytest.approx(30 / 2.4477) and study.groups is None


def test_start_takes_day_and_clock_and_leaves_the_zone_open(tmp_path):
    fixes = as_file(animals())
    parts = fixes["time"].str.extract("(.*)T(.*)Z")
    assert started(tmp_path, fixes.drop(columns="time").assign(Date=parts[0], Time=parts[1])) == 0
    text = (tmp_path / "new" / "study.toml").read_text(encoding="utf-8")
    assert 'time   = ["Date", "Time"]' in text and "please fill in: the times have no offset" in text
    assert "please fill in: the metric reference system" in text
    with pytest.raises(bayesrange.StudyError, match="has no offset from UTC"):
        read_bare(tmp_path / "new")


BAD_START = {
    "no animal": (lambda t: t.rename(columns={"animal": "beast"}), "no column looks like the animal"),
    "no place": (lambda t: t.drop(columns="y"), "no column looks like the northing or latitude"),
    "no rows": (lambda t: t.iloc[:0], "there is no row in it"),
    "no number": (lambda t: t.assign(x="far"), 'expected a number, got "far"'),
    "all failed": (lambda t: t.assign(x="", y=""), "no row has both"),
}


@pytest.mark.parametrize("case", BAD_START)
def test_start_refuses_fixes_it_cannot_make_out_and_writes_nothing(tmp_path, capsys, case):
    change, words = BAD_START[case]
    assert started(tmp_path, change(as_file(animals()))) == 2
    said = capsys.readouterr().err
    assert words in said and said.count("\n") == 1 and not (tmp_path / "new").exists()


def test_start_refuses_a_missing_or_strange_file(tmp_path, capsys):
    for name, words in (("none.csv", "there is no such file"), ("fixes.xlsx", "expected a file of fixes that ends in")):
        assert commands.main(["start", str(tmp_path / "new"), "--fixes", str(tmp_path / name)]) == 2
        assert words in capsys.readouterr().err
    second = tmp_path / "data" / "two.csv"
    (tmp_path / "data").mkdir()
    as_file(animals()).rename(columns={"x": "easting"}).to_csv(second, index=False)
    assert started(tmp_path, as_file(animals()), "--fixes", str(second)) == 2
    assert 'two.csv: there is no column "x"' in capsys.readouterr().err
    assert json.dumps(sorted(p.name for p in tmp_path.iterdir())) == '["data"]'
