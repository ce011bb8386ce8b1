"""Fix success by hour and by class of ground, against what was planted."""

import json

import geopandas
import numpy as np
import pytest
import rasterio
import shapely
from rasterio.transform import from_origin
from screening._tracks import as_file, table, wandering

from bayesrange.screening import look
from bayesrange.study import read_bare


@pytest.fixture
def study(tmp_path):
    """Fixes fail in one of two at 3 o'clock (Oslo) and otherwise in one of four in the wood, which is the west."""
    rng = np.random.default_rng(4)
    fixes = table(wandering(3000, hours=1.0, tau_h=24.0), hours=1.0)
    wood = fixes["x"] < 5e5
    at_three = fixes["time"].dt.tz_convert("Europe/Oslo").dt.hour == 3
    fails = rng.random(3000) < np.where(at_three, 0.5, np.where(wood, 0.25, 0.0))
    truth = {"wood": (int((wood & ~fails).sum()), int((wood & fails).sum())), "fails": int(fails.sum())}
    fixes.loc[fails, ["x", "y"]] = np.nan
    as_file(fixes).to_csv(tmp_path / "fixes.csv", index=False)
    box = shapely.box(4.95e5, 5.595e6, 5.05e5, 5.605e6)
    geopandas.GeoSeries([box], crs=32631).to_crs(4326).to_file(tmp_path / "area.geojson", driver="GeoJSON")
    codes = np.ones((200, 200), dtype="int16")
    codes[:, 100:] = 2
    place = from_origin(4.95e5, 5.605e6, 50, 50)
    shape = {"count": 1, "height": 200, "width": 200, "dtype": "int16"}
    with rasterio.open(tmp_path / "cover.tif", "w", crs="EPSG:32631", transform=place, **shape) as raster:
        raster.write(codes[None])
    lines = {
        "study": {"crs": "EPSG:32631", "area": "area.geojson", "cell_m": 100},
        "fixes": {"file": "fixes.csv", "zone": "Europe/Oslo"},
    }
    text = "\n".join(f"[{s}]\n" + "\n".join(f"{k} = {json.dumps(v)}" for k, v in t.items()) for s, t in lines.items())
    text += '\n[layers.cover]\nfile = "cover.tif"\nclasses = { 1 = "wood", 2 = "heath" }\nreference = "heath"\n'
    (tmp_path / "study.toml").write_text(text)
    return look(read_bare(tmp_path)), truth


def test_the_hour_at_which_fixes_fail_is_on_the_studys_clock(study):
    found, truth = study
    by_hour = found.by_hour.set_index("hour")
    assert by_hour["failed"].sum() == truth["fails"] and by_hour["fixes"].sum() == 3000 - truth["fails"]
    assert by_hour["success"].idxmin() == 3
    assert by_hour["success"][3] == pytest.approx(0.5, abs=3 * np.sqrt(0.25 / 125))  # 125 days


def test_failed_fixes_are_put_to_the_ground_between_their_neighbours(study):
    found, truth = study
    by_class = found.by_class.set_index("class")
    got, lost = truth["wood"]
    assert by_class.loc["wood", "fixes"] == got
    # Near the border of both classes the straight line may miss by a cell: a tenth of those that failed.
    assert by_class.loc["wood", "failed"] == pytest.approx(lost, rel=0.1)
    assert by_class["failed"].sum() == pytest.approx(
        truth["fails"], abs=2
    )  # none before the first fix or after the last
    assert by_class.loc["wood", "success"] < 0.8 < by_class.loc["heath", "success"]


def test_squares_hold_every_attempt_and_are_worse_in_the_wood(study):
    found, truth = study
    squares = found.by_square
    assert squares["fixes"].sum() == 3000 - truth["fails"]
    assert squares["failed"].sum() == pytest.approx(truth["fails"], abs=2)
    west, east = squares[squares["x"] < 5e5 - 300], squares[squares["x"] > 5e5 + 300]
    share = [one["fixes"].sum() / (one["fixes"] + one["failed"]).sum() for one in (west, east)]
    assert share[0] < 0.8 < 0.95 < share[1]
    assert len(set(squares["side_m"])) == 1 and (np.ptp(found.study.fixes["x"]) / squares["side_m"].iloc[0]) <= 15


def test_without_a_layer_of_classes_nothing_is_said_of_them(tmp_path):
    as_file(table(wandering(100))).to_csv(tmp_path / "fixes.csv", index=False)
    (tmp_path / "study.toml").write_text('[study]\ncrs = "EPSG:32631"\n[fixes]\nfile = "fixes.csv"\n')
    assert look(read_bare(tmp_path)).by_class.empty
    assert look(read_bare(tmp_path)).by_hour["fixes"].sum() == 100
