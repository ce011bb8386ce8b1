"""A tiny study of tracks on disk: 20 × 20 cells of 100 m, a pond that no animal enters, four animals with hourly fixes.

Names have an accent, markup and a blank in them. One track has a gap, one an irregular stretch, one rests. Positions
are a plain autoregression around a home: they serve tests of the machinery, not of ecology.
"""

from copy import deepcopy
from pathlib import Path
from typing import Any

import geopandas
import numpy as np
import pandas as pd
import rasterio
import shapely
from inference._tiny_study import _toml
from rasterio.transform import from_origin

WEST, SOUTH, CRS = 500_000.0, 5_600_000.0, "EPSG:32631"
ASE, BO, TOM, VIXEN = "Åse", "<b>Bo</b>", "old tom", "vixen"
HOMES = {ASE: (700.0, 1300.0), BO: (900.0, 700.0), TOM: (1400.0, 900.0), VIXEN: (1200.0, 1500.0)}
FIXES = {ASE: 150, BO: 140, TOM: 160, VIXEN: 135}
GAP_AFTER, GAP_H = 60, 9  # Åse
IRREGULAR = range(40, 60)  # intervals of Bo's that are 25 min long
RESTS = (20, 21, 22, 80, 81)  # steps of old tom's of length 0
POND = shapely.box(950, 800, 1050, 1300)
START = pd.Timestamp("2031-03-01T00:00")

SETTINGS: dict[str, Any] = {
    "study": {"name": "Fern <Hollow> [bold]", "crs": CRS, "cell_m": 100, "area": "area.geojson"},
    "fixes": {"file": "fixes.csv"},
    "animals": {"file": "animals.csv"},
    "layers": {
        "forage": {"file": "forage.tif", "unit": "kg/ha"},
        "pond": {"file": "pond.tif", "no_go": True},
    },
    "model": {"card": "memory-resources", "layers": ["forage"], "nodes": 16},
    "sampling": {"chains": 2, "warmup": 60, "draws": 60, "seed": 4},
}


def track(animal: str) -> pd.DataFrame:
    """Fixes of one animal, coordinates rounded to 1 m, times jittered by up to two minutes."""
    rng = np.random.default_rng([3, list(HOMES).index(animal)])
    home, count, place = np.array(HOMES[animal]), FIXES[animal], np.zeros((FIXES[animal], 2))
    area = AREA.buffer(-20).difference(POND.buffer(10))
    for k in range(1, count):
        if animal == TOM and k - 1 in RESTS:
            place[k] = place[k - 1]
            continue
        while True:
            place[k] = 0.7 * place[k - 1] + 170 * rng.normal(size=2)
            if area.contains(shapely.Point(place[k] + home)):
                break
    hours = np.ones(count - 1)
    if animal == ASE:
        hours[GAP_AFTER] = GAP_H
    if animal == BO:
        hours[IRREGULAR] = 25 / 60
    minutes = 60 * np.concatenate([[0], hours.cumsum()]) + rng.integers(-2, 3, count)
    time = (START + pd.to_timedelta(minutes, unit="min")).strftime("%Y-%m-%dT%H:%MZ")
    xy = (place + home + (WEST, SOUTH)).round()
    return pd.DataFrame({"animal": animal, "time": time, "x": xy[:, 0], "y": xy[:, 1], "error_m": 0.0})


AREA = shapely.Polygon([(0, 0), (1430, 0), (2000, 560), (2000, 2000), (0, 2000)])


def fixes_table() -> pd.DataFrame:
    return pd.concat([track(animal) for animal in HOMES], ignore_index=True)


def animals_table() -> pd.DataFrame:
    rows = [(ASE, "f", "one", 3.5), (BO, "m", "one", 4.0), (TOM, "m", "two", 6.5), (VIXEN, "f", "two", 2.0)]
    return pd.DataFrame(rows, columns=["animal", "sex", "release_batch", "mass"])


def companion(of: pd.DataFrame, name: str, apart_m: float = 5.0) -> pd.DataFrame:
    """A track that goes along with another, some metres off and two minutes later."""
    time = pd.to_datetime(of["time"]) + pd.Timedelta(minutes=2)
    return of.assign(animal=name, time=time.dt.strftime("%Y-%m-%dT%H:%MZ"), x=of["x"] + apart_m)


def write_tracks(
    folder: Path,
    fixes: pd.DataFrame | None = None,
    animals: pd.DataFrame | None = None,
    without: tuple[str, ...] = (),
    pond: shapely.Geometry = POND,
    **changes: dict[str, Any],
) -> Path:
    """Write the study with `changes` merged into its sections.

    Args:
        folder: where.
        fixes: in place of its fixes.
        animals: in place of its table of animals.
        without: keys of [model] that are left out.
        pond: ground that is no-go, in metres from the south-western corner.
        changes: keys of each section.

    Returns:
        The study file.
    """
    folder.mkdir(parents=True, exist_ok=True)
    settings = deepcopy(SETTINGS)
    for section, keys in changes.items():
        settings[section] = {**settings.get(section, {}), **keys}
    for key in without:
        settings["model"].pop(key)
    moved = shapely.affinity.translate(AREA, WEST, SOUTH)
    geopandas.GeoSeries([moved], crs=CRS).to_file(folder / "area.geojson", driver="GeoJSON")
    (fixes_table() if fixes is None else fixes).to_csv(folder / "fixes.csv", index=False)
    (animals_table() if animals is None else animals).to_csv(folder / "animals.csv", index=False)
    y, x = np.mgrid[0:40, 0:40] * 50.0 + 25
    _write_raster(folder / "forage.tif", 40 + 15 * np.sin(x / 380) * np.cos(y / 510) + 0.004 * x)
    _write_raster(folder / "pond.tif", shapely.contains_xy(pond, x, y))
    file = folder / "study.toml"
    file.write_text("\n".join(_toml(settings)) + "\n", encoding="utf-8")
    return file


def _write_raster(file: Path, values: np.ndarray) -> None:
    """Values from south to north on cells of 50 m."""
    place = from_origin(WEST, SOUTH + 2000, 50, 50)
    profile = {"crs": CRS, "transform": place, "count": 1, "dtype": "float32", "height": 40, "width": 40}
    with rasterio.open(file, "w", driver="GTiff", **profile) as target:
        target.write(values[::-1].astype("float32")[None])
