"""Make the Varrow Fell study: eight released wildcats walk and remember, and the files are written.

    python case_studies/varrow_fell/simulate.py [--out FOLDER] [--seed N] [--replace]

Shares no code with the package it tests. It takes a few seconds on one core. Same seed, same files with the same
NumPy and GDAL; another NumPy may draw other random numbers from the seed.
"""

import argparse
import json
import sys
from collections.abc import Sequence
from pathlib import Path

import geopandas as gpd
import numpy as np
import pandas as pd
import rasterio
from varrow_cats import COMMON, ENCODING_RANGE_M, MALE, POPULATION, RELEASES, SPREAD, UNIT, Cat, Release, draw_cats
from varrow_place import CRS, LAKE_PIXEL_M, MARGIN_M, ORIGIN_M, PIXEL_M, Place, varrow_fell
from varrow_walk import NODE_M, walk

HERE = Path(__file__).resolve().parent
SEED = 47
MISSING = 0.03  # share of fixes after the first
INTERVAL = pd.Timedelta(hours=1)

STUDY_TOML = """\
# Wildcats released on Varrow Fell: an invented place with simulated animals. What is true stands in
# case_studies/varrow_fell/truth.json.

[study]
name   = "Varrow Fell wildcats"
crs    = "EPSG:32629"          # metric; x and y of every table are in it
cell_m = 50                    # cover changes over several hundred metres, steps are 150 m long
area   = "area.geojson"
sensitive = "no"               # invented animals

[fixes]                        # a fix every hour from the release on, for two months
file   = "fixes.csv"
animal = "animal"
time   = "time"                # ISO 8601 with offset
x      = "x"
y      = "y"                   # blank: the collar tried and found no position

[animals]                      # one row a cat: when it was released, sex, batch; none knew the fell
file = "animals.csv"

[layers.cover]
file = "cover.tif"             # ground under scrub and trees; 25 m pixels, averaged onto the cells
unit = "%"

[layers.voles]                 # not in the model's list: try it there, what is true is no response
file = "voles.tif"
unit = "1/ha"

[layers.lake]
file  = "lake.tif"             # cells > 0 are water
no_go = true

[model]
card             = "memory-resources"
layers           = ["cover"]
pooling          = "hierarchical"
covariates       = ["sex"]     # a column of animals.csv
memory_start     = "naive"     # released animals know nothing
interval_h       = 1.0
encoding_range_m = 150         # how far around a place an hour there is remembered

[sampling]
chains = 2
warmup = 300
draws  = 500
seed   = 20
"""


def track_fixes(place: Place, release: Release, cat: Cat, rng: np.random.Generator) -> pd.DataFrame:
    """Walk one released cat and fix it every hour.

    The box where it was let go is known, so the first fix never fails.

    Args:
        place: the fell.
        release: who, where, when and how long.
        cat: what moves it.
        rng: source of randomness.

    Returns:
        One row a scheduled fix: animal, time, x, y [whole m; NaN where it failed].
    """
    seen = to_whole_metres(place, walk(place, cat, np.add(release.box_m, ORIGIN_M), release.fixes - 1, rng))
    failed = rng.random(release.fixes) < MISSING
    failed[0] = False
    seen[failed] = np.nan
    times = [(pd.Timestamp(release.time) + INTERVAL * k).isoformat() for k in range(release.fixes)]
    return pd.DataFrame({"animal": release.animal, "time": times, "x": seen[:, 0], "y": seen[:, 1]})


def to_whole_metres(place: Place, xy: np.ndarray) -> np.ndarray:
    """Round positions (n, 2) to 1 m; one that would come to lie in the lake goes to the nearest metre on land."""
    rounded = np.round(xy)
    for k in np.flatnonzero(~place.habitable(rounded)):
        corners = np.floor(xy[k]) + [(0, 0), (1, 0), (0, 1), (1, 1)]
        dry = corners[place.habitable(corners)]
        if not len(dry):
            raise RuntimeError(f"no whole metre on land beside {xy[k]}")
        rounded[k] = dry[np.argmin(np.hypot(*(dry - xy[k]).T))]
    return rounded


def simulate(out: Path, seed: int = SEED, releases: tuple[Release, ...] = RELEASES) -> None:
    """Simulate the study and write it to a folder: study/ and truth.json.

    Args:
        out: folder, made if it isn't there; files of these names in it are replaced.
        seed: of the animals' own parameters, tracks and failed fixes. The place is always the same.
        releases: who is released.
    """
    place = varrow_fell()
    rng_of_cats, *rng_of_each = (
        np.random.default_rng(s) for s in np.random.SeedSequence(seed).spawn(1 + len(RELEASES))
    )
    cats = draw_cats(rng_of_cats, releases)
    walks = zip(releases, cats, rng_of_each[: len(releases)], strict=True)
    fixes = pd.concat([track_fixes(place, *one) for one in walks], ignore_index=True)
    (out / "study").mkdir(parents=True, exist_ok=True)
    _write_study(out / "study", place, fixes, releases)
    record = {"seed": seed, "command": f"python case_studies/varrow_fell/simulate.py --seed {seed}"}
    record |= _truth_record(place, releases, cats, fixes)
    (out / "truth.json").write_text(json.dumps(record, indent=2, ensure_ascii=False) + "\n", encoding="utf-8")


def _write_study(folder: Path, place: Place, fixes: pd.DataFrame, releases: tuple[Release, ...]) -> None:
    fixes.to_csv(folder / "fixes.csv", index=False, float_format="%.0f", lineterminator="\n")
    ends = [pd.Timestamp(r.time) + INTERVAL * r.fixes for r in releases]
    animals = pd.DataFrame(
        {
            "animal": [r.animal for r in releases],
            "from": [r.time for r in releases],
            "until": [end.isoformat() for end in ends],
            "sex": [r.sex for r in releases],
            "release_batch": [r.batch for r in releases],
            "memory_start": "naive",
            "fate": [r.fate for r in releases],
        }
    )
    animals.to_csv(folder / "animals.csv", index=False, lineterminator="\n")
    area = gpd.GeoDataFrame({"name": ["Varrow Fell"]}, geometry=[place.area], crs=CRS).to_crs("EPSG:4326")
    area.to_file(folder / "area.geojson", driver="GeoJSON", COORDINATE_PRECISION=9)
    corner = (place.west_m - MARGIN_M, place.south_m - MARGIN_M)
    _write_raster(folder / "cover.tif", place.cover_pixels, corner, PIXEL_M, "cover [%]")
    _write_raster(folder / "voles.tif", place.voles_pixels, corner, PIXEL_M, "voles [1/ha]")
    _write_raster(folder / "lake.tif", place.lake, (place.west_m, place.south_m), LAKE_PIXEL_M, "lake [1 = water]")
    (folder / "study.toml").write_text(STUDY_TOML, encoding="utf-8")


def _write_raster(file: Path, values: np.ndarray, corner_m: tuple[float, float], pixel_m: float, what: str) -> None:
    """Write whole numbers from 0 to 254, row 0 in the south, as a north-up GeoTIFF."""
    profile = {
        "driver": "GTiff",
        "width": values.shape[1],
        "height": values.shape[0],
        "count": 1,
        "dtype": "uint8",
        "nodata": 255,
        "crs": CRS,
        "transform": rasterio.transform.from_origin(corner_m[0], corner_m[1] + len(values) * pixel_m, pixel_m, pixel_m),
        "compress": "deflate",
        "predictor": 2,
    }
    with rasterio.open(file, "w", **profile) as raster:
        raster.write(values[::-1].astype(np.uint8), 1)
        raster.set_band_description(1, what)


def table_values(cat: Cat) -> dict[str, float]:
    """A cat's parameters under the names of tables/parameters.csv."""
    own = dict(vars(cat))
    return own | {"selection[cover]": own.pop("selection"), "selection[voles]": 0.0, "encoding_range": ENCODING_RANGE_M}


def _truth_record(place: Place, releases: tuple[Release, ...], cats: list[Cat], fixes: pd.DataFrame) -> dict:
    mean, sd = place.cover_mean_sd
    parameters = {name: {"value": value, "unit": UNIT[name]} for name, value in table_values(POPULATION).items()}
    parameters["selection[cover] raw"] = {"value": POPULATION.selection / sd, "unit": "1/%"}
    selection = {"selection[cover]": SPREAD["selection"]}
    spreads = {name: (SPREAD | selection).get(name, 0.0) for name in UNIT if name not in COMMON}
    return {
        "parameters": parameters,
        "spreads": spreads,
        "covariates": {f"{name}:sex=male": float(MALE.get(name, 0.0)) for name in UNIT if name not in COMMON},
        "animals": {r.animal: {"sex": r.sex} | table_values(cat) for r, cat in zip(releases, cats, strict=True)},
        "scales": {
            "layers": {"cover": {"mean": mean, "sd": sd, "unit": "%"}},
            "habitable_km2": float(place.share.sum() * 0.05**2),
        },
        "tracks": {"interval_h": 1.0, "missing": MISSING, "rounding_m": 1.0, "memory_node_m": NODE_M},
        "counts": {"animals": len(releases), "fixes": len(fixes), "failed": int(fixes.x.isna().sum())},
    }


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the simulator from the command line."""
    parser = argparse.ArgumentParser(description="Simulate the Varrow Fell wildcat study.")
    parser.add_argument("--out", type=Path, default=HERE, help="folder for study/ and truth.json")
    parser.add_argument("--seed", type=int, default=SEED, help=f"seed of animals and tracks (default {SEED})")
    parser.add_argument("--replace", action="store_true", help="replace files that are there already")
    chosen = parser.parse_args(arguments)
    there = [name for name in ("study/fixes.csv", "truth.json") if (chosen.out / name).exists()]
    if there and not chosen.replace:
        print(f"{chosen.out} already holds {', '.join(there)}; give --replace or another --out.", file=sys.stderr)
        return 2
    simulate(chosen.out, chosen.seed)
    print(f"Written to {chosen.out}: study/study.toml with its tables and maps, truth.json")
    return 0


if __name__ == "__main__":
    sys.exit(main())
