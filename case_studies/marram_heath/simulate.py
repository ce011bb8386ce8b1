"""Make the Marram Heath study: particles find the scent, collared animals walk in it, the files are written.

    python case_studies/marram_heath/simulate.py [--out FOLDER] [--seed N] [--replace]

An individual-based simulator that shares no code with the package it tests: no steady-state equation is solved. It
takes about half a minute on one core. Same seed, same numbers on one kind of processor; elsewhere rounding differs in
the last digit, which a particle turned back at the edge can amplify.
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

sys.path.insert(0, str(Path(__file__).resolve().parent))

from marram_particles import Stationary, Truth, Walker, stationary_density
from marram_place import CELL_M, CRS, MARGIN_M, PIXEL_M, Place, marram_heath

__all__ = ["Place", "Stationary", "Truth", "Walker", "marram_heath", "simulate", "stationary_density", "track_fixes"]

HERE = Path(__file__).resolve().parent
SEED = 31
PARTICLES = 4000  # per group
BLOCKS = 1200  # renewals of the scent
COLLARS = 2  # per group
FIXES = 150  # per collar
INTERVAL_H = 4.0
TRACK_STEP_H = 0.01
ERROR_M = 15.0  # sd per axis
FAILED = 0.03  # share of fixes
FIRST_FIX = pd.Timestamp("2031-03-04T18:00:00+01:00")
EDGE_MARGIN_M = 1.0  # fixes keep this distance from the edge, so that rounding leaves none outside

STUDY_TOML = """\
# Badger groups on Marram Heath: an invented place with simulated animals. What is true stands in
# case_studies/marram_heath/truth.json.

[study]
name   = "Marram Heath badgers"
crs    = "EPSG:32631"          # metric; x and y of every table are in it
cell_m = 100                   # about 20 cells across the 95 % range of a group
area   = "area.geojson"
sensitive = "no"               # invented animals

[fixes]                        # two collared adults per group, a fix every four hours for 25 days
file   = "fixes.csv"
animal = "animal"
time   = "time"                # ISO 8601 with offset
x      = "x"
y      = "y"                   # blank: the collar tried and found no position
group  = "group"
error  = "error_m"             # standard deviation per axis, m

[groups]                       # setts found on foot; `animals`: adults that mark, collared or not
file = "groups.csv"

[layers.earthworms]
file = "earthworms.tif"        # 50 m pixels, averaged onto the cells
unit = "kg/ha"

[model]
card         = "avoidance-resources"
layers       = ["earthworms"]
perception_m = 200             # distance over which scent is perceived; the simulator smooths with the same

[sampling]
chains = 4
warmup = 150
draws  = 250
seed   = 20
"""


def track_fixes(place: Place, truth: Truth, field: Stationary, rng: np.random.Generator) -> pd.DataFrame:
    """Walk the collared animals through the converged scent and fix them.

    Each starts at the last position of one of its group's particles, so that no settling-in is seen.

    Args:
        place: the heath.
        truth: the true parameters.
        field: converged particles.
        rng: source of randomness.

    Returns:
        One row a scheduled fix: animal, time, x, y [m; NaN where it failed], group, error_m.
    """
    walker = Walker(place, truth)
    group = np.repeat(np.arange(len(place.adults)), COLLARS)
    xy = np.concatenate([rng.choice(last, COLLARS, replace=False) for last in field.xy])
    steps, step = round(INTERVAL_H / TRACK_STEP_H), truth.diffusion_km2_h * TRACK_STEP_H
    true_xy = np.empty((FIXES, len(group), 2))
    true_xy[0] = xy
    for fix in range(1, FIXES):
        true_xy[fix] = walker.walk(true_xy[fix - 1], group, field.potential, steps, step, rng)

    animals = []
    for a, g in enumerate(group):
        name = place.names[g]
        first = FIRST_FIX + pd.Timedelta(days=int(g), hours=2 * (a % COLLARS))  # collared one after another
        seen = _with_error(place, true_xy[:, a] * 1000.0 + (place.west_m, place.south_m), rng)
        seen[rng.random(FIXES) < FAILED] = np.nan
        times = [(first + pd.Timedelta(hours=INTERVAL_H) * k).isoformat() for k in range(FIXES)]
        table = pd.DataFrame({"animal": f"{name[0]}{a % COLLARS + 1}", "time": times, "x": seen[:, 0], "y": seen[:, 1]})
        animals.append(table.assign(group=name, error_m=ERROR_M))
    return pd.concat(animals, ignore_index=True)


def _with_error(place: Place, xy_m: np.ndarray, rng: np.random.Generator) -> np.ndarray:
    """Add GPS error and round to 0.1 m; an error that puts the fix outside the heath is drawn again."""
    inner = place.area.buffer(-EDGE_MARGIN_M)
    seen = np.full_like(xy_m, np.nan)
    todo = np.arange(len(xy_m))
    while todo.size:
        seen[todo] = np.round(xy_m[todo] + ERROR_M * rng.standard_normal((len(todo), 2)), 1)
        todo = todo[~inner.contains(gpd.points_from_xy(*seen[todo].T))]
    return seen


def simulate(out: Path, seed: int = SEED, particles: int = PARTICLES, blocks: int = BLOCKS) -> None:
    """Simulate the study and write it to a folder: study/, truth.json and particles.npz.

    Args:
        out: folder, made if it isn't there; files of these names in it are replaced.
        seed: of the particles, the tracks and the errors. The place is always the same.
        particles: particles per group.
        blocks: renewals of the scent.
    """
    place, truth = marram_heath(), Truth()
    particle_seed, track_seed = np.random.SeedSequence(seed).spawn(2)
    field = stationary_density(place, truth, np.random.default_rng(particle_seed), particles, blocks)
    fixes = track_fixes(place, truth, field, np.random.default_rng(track_seed))
    (out / "study").mkdir(parents=True, exist_ok=True)
    _write_study(out / "study", place, fixes)
    command = f"python case_studies/marram_heath/simulate.py --seed {seed} --particles {particles} --blocks {blocks}"
    record = {"seed": seed, "command": command, **_truth_record(place, truth, fixes)}
    (out / "truth.json").write_text(json.dumps(record, indent=2, ensure_ascii=False) + "\n", encoding="utf-8")
    _write_particles(out / "particles.npz", place, field)


def _write_particles(file: Path, place: Place, field: Stationary) -> None:
    ny, nx = place.share.shape
    np.savez_compressed(
        file,
        density=field.density.astype(np.float32),
        points=field.points.astype(np.int32),
        x_m=place.west_m + CELL_M * (np.arange(nx) + 0.5),
        y_m=place.south_m + CELL_M * (np.arange(ny) + 0.5),
        mask=place.share > 0,
        share=place.share.astype(np.float32),
        group=np.array(place.names),
    )


def _write_study(folder: Path, place: Place, fixes: pd.DataFrame) -> None:
    fixes.to_csv(folder / "fixes.csv", index=False, float_format="%.1f", lineterminator="\n")
    x, y = place.setts_m.astype(int).T
    groups = pd.DataFrame({"group": place.names, "x": x, "y": y, "animals": place.adults})
    groups.to_csv(folder / "groups.csv", index=False, lineterminator="\n")
    area = gpd.GeoDataFrame({"name": ["Marram Heath"]}, geometry=[place.area], crs=CRS).to_crs("EPSG:4326")
    area.to_file(folder / "area.geojson", driver="GeoJSON", COORDINATE_PRECISION=9)
    rows, columns = place.pixels.shape
    north = place.south_m - MARGIN_M + rows * PIXEL_M
    profile = {
        "driver": "GTiff",
        "width": columns,
        "height": rows,
        "count": 1,
        "dtype": "float32",
        "nodata": -9999.0,
        "crs": CRS,
        "transform": rasterio.transform.from_origin(place.west_m - MARGIN_M, north, PIXEL_M, PIXEL_M),
        "compress": "deflate",
        "predictor": 3,
    }
    with rasterio.open(folder / "earthworms.tif", "w", **profile) as raster:
        raster.write(place.pixels[::-1].astype(np.float32), 1)
        raster.set_band_description(1, "earthworms [kg/ha]")
    (folder / "study.toml").write_text(STUDY_TOML, encoding="utf-8")


def _truth_record(place: Place, truth: Truth, fixes: pd.DataFrame) -> dict:
    mean, sd = place.layer_mean_sd
    return {
        "parameters": {
            "localising": {"value": truth.localising, "unit": "1/km"},
            "avoidance": {"value": truth.avoidance, "unit": "1"},
            "resource[earthworms]": {"value": truth.resource, "unit": "per sd"},
            "avoidance raw": {"value": truth.avoidance * place.a0_km2, "unit": "km² per animal"},
            "resource[earthworms] raw": {"value": truth.resource / sd, "unit": "1/(kg/ha)"},
        },
        "scales": {
            "a0_km2": place.a0_km2,
            "perception_m": truth.perception_km * 1000.0,
            "eps_m": truth.softening_km * 1000.0,
            "layers": {"earthworms": {"mean": mean, "sd": sd, "unit": "kg/ha"}},
        },
        "tracks": {
            "diffusion_km2_per_h": truth.diffusion_km2_h,
            "interval_h": INTERVAL_H,
            "step_h": TRACK_STEP_H,
            "error_m": ERROR_M,
        },
        "counts": {"animals": int(fixes.animal.nunique()), "fixes": len(fixes), "failed": int(fixes.x.isna().sum())},
    }


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the simulator from the command line."""
    parser = argparse.ArgumentParser(description="Simulate the Marram Heath badger study.")
    parser.add_argument("--out", type=Path, default=HERE, help="folder for study/, truth.json and particles.npz")
    parser.add_argument("--seed", type=int, default=SEED, help=f"seed of particles and tracks (default {SEED})")
    parser.add_argument("--particles", type=int, default=PARTICLES, help=f"per group (default {PARTICLES})")
    parser.add_argument("--blocks", type=int, default=BLOCKS, help=f"renewals of the scent (default {BLOCKS})")
    parser.add_argument("--replace", action="store_true", help="replace files that are there already")
    chosen = parser.parse_args(arguments)
    there = [name for name in ("study/fixes.csv", "truth.json", "particles.npz") if (chosen.out / name).exists()]
    if there and not chosen.replace:
        print(f"{chosen.out} already holds {', '.join(there)}; give --replace or another --out.", file=sys.stderr)
        return 2
    simulate(chosen.out, chosen.seed, chosen.particles, chosen.blocks)
    print(f"Written to {chosen.out}: study/study.toml with its tables and maps, truth.json, particles.npz")
    return 0


if __name__ == "__main__":
    sys.exit(main())
