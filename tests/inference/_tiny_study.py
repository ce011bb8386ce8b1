"""A tiny study on disk: 24 × 24 cells of 100 m, three groups in an invented marsh, one of them without fixes.

Names have a blank, markup, an accent and a comma in them. Positions are a plain autoregression around the home
centre: they serve tests of the machinery, not of ecology.
"""

import json
from copy import deepcopy
from pathlib import Path
from typing import Any

import geopandas
import numpy as np
import pandas as pd
import rasterio
import shapely
from rasterio.transform import from_origin

WEST, SOUTH, CRS = 500_000.0, 5_600_000.0, "EPSG:32631"
NORTH, SOUTH_GROUP, UNWATCHED = "north", "säter, <b>low</b>", "east wood"
HOMES = {NORTH: (800.0, 1700.0), SOUTH_GROUP: (900.0, 700.0), UNWATCHED: (1800.0, 1300.0)}

SETTINGS: dict[str, Any] = {
    "study": {"name": "Tern <Marsh> [bold]", "crs": CRS, "cell_m": 100, "area": "area.geojson"},
    "fixes": {"file": "fixes.csv"},
    "groups": {"file": "groups.csv"},
    "layers": {"worms": {"file": "worms.tif", "unit": "kg/ha"}},
    "model": {"card": "avoidance-resources", "layers": ["worms"]},
    "sampling": {"chains": 2, "warmup": 60, "draws": 70, "seed": 4},
}


def fixes_table(each: int = 100) -> pd.DataFrame:
    """Fixes of one animal in each watched group, every 4 hours."""
    rng, parts = np.random.default_rng(11), []
    for group, home in list(HOMES.items())[:2]:
        place = np.zeros((each, 2))
        for k in range(1, each):
            place[k] = 0.4 * place[k - 1] + 260 * rng.normal(size=2)
        place = np.clip(place + home, 20, 2350) + (WEST, SOUTH)
        time = pd.date_range("2031-03-01T00:00", periods=each, freq="4h").strftime("%Y-%m-%dT%H:%MZ")
        part = pd.DataFrame({"animal": f"{group[0]}1", "time": time, "group": group})
        parts.append(part.assign(x=place[:, 0].round(1), y=place[:, 1].round(1), error_m=0.0))
    return pd.concat(parts, ignore_index=True)


def groups_table() -> pd.DataFrame:
    rows = [(g, WEST + x, SOUTH + y, 2 + k, 1.5 * k - k**2) for k, (g, (x, y)) in enumerate(HOMES.items())]
    return pd.DataFrame(rows, columns=["group", "x", "y", "animals", "size"])


def write_study(
    folder: Path,
    fixes: pd.DataFrame | None = None,
    groups: pd.DataFrame | None = None,
    **changes: dict[str, Any],
) -> Path:
    """Write the study with `changes` merged into its sections.

    Returns:
        The study file.
    """
    folder.mkdir(parents=True, exist_ok=True)
    settings = deepcopy(SETTINGS)
    for section, keys in changes.items():
        settings[section] = {**settings.get(section, {}), **keys}
    # The south-eastern corner is cut off, so that some cells are habitable in part.
    area = shapely.Polygon([(0, 0), (1730, 0), (2400, 660), (2400, 2400), (0, 2400)])
    moved = shapely.affinity.translate(area, WEST, SOUTH)
    geopandas.GeoSeries([moved], crs=CRS).to_crs("EPSG:4326").to_file(folder / "area.geojson", driver="GeoJSON")
    (fixes_table() if fixes is None else fixes).to_csv(folder / "fixes.csv", index=False)
    (groups_table() if groups is None else groups).to_csv(folder / "groups.csv", index=False)
    _write_layer(folder / "worms.tif")
    file = folder / "study.toml"
    file.write_text("\n".join(_toml(settings)) + "\n", encoding="utf-8")
    return file


def _write_layer(file: Path) -> None:
    y, x = np.mgrid[0:48, 0:48] * 50.0
    values = (40 + 15 * np.sin(x / 380) * np.cos(y / 510) + 0.004 * x).astype("float32")
    place = from_origin(WEST, SOUTH + 2400, 50, 50)
    profile = {"crs": CRS, "transform": place, "count": 1, "dtype": "float32", "height": 48, "width": 48}
    with rasterio.open(file, "w", driver="GTiff", **profile) as target:
        target.write(values[None])


def _toml(table: dict[str, Any], path: tuple[str, ...] = ()) -> list[str]:
    lines = [f"[{'.'.join(path)}]"] if path else []
    lines += [f"{key} = {_value(value)}" for key, value in table.items() if not isinstance(value, dict)]
    for key, value in table.items():
        if isinstance(value, dict):
            lines += _toml(value, (*path, key))
    return lines


def _value(value: Any) -> str:
    return json.dumps(value, ensure_ascii=False)
