"""Bearings to the animals of the small study, taken from four hills around it, with errors from a seed."""

import numpy as np
import pandas as pd
import pyproj

WEST, SOUTH, CRS = 500_000.0, 5_600_000.0, "EPSG:32631"
HILLS = pd.DataFrame(
    {
        "station": ["alder", "birch", "cedar", "elm"],
        "x": [-500.0, 4300.0, 4500.0, -200.0],
        "y": [-300.0, 100.0, 4400.0, 4200.0],
    }
)


def grid_bearings(x, y, hill_x, hill_y):
    return np.degrees(np.arctan2(x - hill_x, y - hill_y)) % 360


def hill_convergence():
    """Degrees from true to grid north at each hill, by going 10 m towards true north on the ellipsoid."""
    degrees = pyproj.Transformer.from_crs(CRS, "EPSG:4326", always_xy=True)
    longitude, latitude = degrees.transform(HILLS["x"] + WEST, HILLS["y"] + SOUTH)
    ahead = pyproj.Geod(ellps="WGS84").fwd(longitude, latitude, np.zeros(4), np.full(4, 10.0))
    x, y = degrees.transform(ahead[0], ahead[1], direction="INVERSE")
    return -np.degrees(np.arctan2(x - (HILLS["x"] + WEST), y - (HILLS["y"] + SOUTH))).to_numpy()


def take_bearings(fixes, sd_deg=3.0, hills=3, seed=7, sets=True):
    """One row a bearing: every fix from `hills` of the four hills, three minutes apart, from grid north."""
    rng = np.random.default_rng(seed)
    rows = []
    for k, fix in enumerate(fixes.itertuples()):
        for j, hill in enumerate(rng.permutation(4)[:hills]):
            place = HILLS.iloc[hill]
            exact = grid_bearings(float(fix.x) - WEST, float(fix.y) - SOUTH, place["x"], place["y"])
            bearing = (exact + sd_deg * rng.normal()) % 360
            time = pd.Timestamp(fix.time) + pd.Timedelta(minutes=3 * j)
            rows.append((fix.animal, time.isoformat(), place["station"], round(bearing, 3), k, f"O{j % 2}", fix.group))
    table = pd.DataFrame(rows, columns=["animal", "time", "station", "bearing", "set", "observer", "group"])
    return (table if sets else table.drop(columns="set")).astype({"bearing": object})


def only_bearings(folder, north="grid", keep_sets=True, **more):
    """Turn the small study into one with bearings alone; the true places are returned."""
    truth = folder.fixes.sort_values(["animal", "time"], ignore_index=True)
    options = {key: more.pop(key) for key in ("sd_deg_true", "hills", "seed") if key in more}
    if "sd_deg_true" in options:
        options["sd_deg"] = options.pop("sd_deg_true")
    table = take_bearings(truth, sets=keep_sets, **options)
    HILLS.assign(x=HILLS["x"] + WEST, y=HILLS["y"] + SOUTH).to_csv(folder.path("stations.csv"), index=False)
    folder.toml.pop("fixes", None)
    folder.toml["bearings"] = {"file": "bearings.csv", "stations": "stations.csv", "north": north, **more}
    return truth, table


def write(folder, table):
    table.to_csv(folder.path("bearings.csv"), index=False)
    return folder.read()
