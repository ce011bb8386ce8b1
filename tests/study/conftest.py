"""A small, sound study in an invented place, which tests then break in one respect each."""

import json
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import geopandas
import numpy as np
import pandas as pd
import pytest
import rasterio
import shapely
from rasterio.transform import from_origin

from bayesrange.study import Study, read_study

WEST, SOUTH, CRS = 500_000.0, 5_600_000.0, "EPSG:32631"
HOMES = {"north": (1500.0, 2800.0), "south": (1500.0, 1300.0), "east": (2800.0, 2000.0)}


def fixes_table() -> pd.DataFrame:
    rng = np.random.default_rng(11)
    parts = []
    for group, (x, y) in HOMES.items():
        time = pd.date_range("2031-03-01T00:00", periods=60, freq="4h").strftime("%Y-%m-%dT%H:%M+01:00")
        place = np.clip(np.array([x, y]) + 500 * rng.normal(size=(60, 2)), 150, 3850) + (WEST, SOUTH)
        animal = f"{group[0].upper()}1"
        parts.append(
            pd.DataFrame({"animal": animal, "time": time, "group": group}).assign(x=place[:, 0], y=place[:, 1])
        )
    return pd.concat(parts, ignore_index=True).round({"x": 1, "y": 1}).astype({"x": object, "y": object})


def groups_table() -> pd.DataFrame:
    rows = [(g, WEST + x, SOUTH + y, 3, 0.5 * k) for k, (g, (x, y)) in enumerate(HOMES.items())]
    table = pd.DataFrame(rows, columns=["group", "x", "y", "animals", "density"])
    return table.astype({"x": object, "y": object, "animals": object})


def settings_table() -> dict[str, Any]:
    return {
        "study": {"name": "Sedge Fen", "crs": CRS, "cell_m": 100, "area": "area.geojson"},
        "fixes": {"file": "fixes.csv"},
        "groups": {"file": "groups.csv"},
        "layers": {"worms": {"file": "worms.tif", "unit": "kg/ha"}},
        "model": {"card": "avoidance-resources", "layers": ["worms"]},
        "sampling": {"chains": 2},
    }


@dataclass
class StudyFolder:
    """Tables and settings in memory; `read` writes them and reads the study."""

    west, south, crs = WEST, SOUTH, CRS  # corner of the area [m]

    folder: Path
    toml: dict[str, Any] = field(default_factory=settings_table)
    fixes: pd.DataFrame = field(default_factory=fixes_table)
    groups: pd.DataFrame = field(default_factory=groups_table)

    def path(self, name: str) -> Path:
        return self.folder / name

    @staticmethod
    def box(west: float, south: float, east: float, north: float) -> shapely.Polygon:
        """A rectangle, in metres from the corner of the study area."""
        return shapely.box(WEST + west, SOUTH + south, WEST + east, SOUTH + north)

    def area(self, shape: shapely.Geometry, crs: str = "EPSG:4326", name: str = "area.geojson") -> None:
        geopandas.GeoSeries([shape], crs=CRS).to_crs(crs).to_file(self.path(name), driver="GeoJSON")

    def raster(
        self, name: str, values: np.ndarray, pixel: float, west: float = WEST, north: float = SOUTH + 4000, **more: Any
    ) -> None:
        """Write `values` (row 0 north)."""
        profile = {"crs": CRS, "transform": from_origin(west, north, pixel, pixel), "count": 1, **more}
        shape = {"height": values.shape[-2], "width": values.shape[-1], "dtype": values.dtype}
        with rasterio.open(self.path(name), "w", driver="GTiff", **shape, **profile) as target:
            target.write(values if values.ndim == 3 else values[None])

    def write(self) -> Path:
        lines: list[str] = []
        _write_table(self.toml, [], lines)
        self.path("study.toml").write_text("\n".join(lines), encoding="utf-8")
        self.fixes.to_csv(self.path("fixes.csv"), index=False)
        self.groups.to_csv(self.path("groups.csv"), index=False)
        return self.path("study.toml")

    def read(self) -> Study:
        return read_study(self.write())


def _write_table(table: dict[str, Any], path: list[str], lines: list[str]) -> None:
    if path:
        lines.append(f"[{'.'.join(path)}]")
    lines += [f"{k} = {json.dumps(v, ensure_ascii=False)}" for k, v in table.items() if not isinstance(v, dict)]
    for key, value in table.items():
        if isinstance(value, dict):
            _write_table(value, [*path, key], lines)


@pytest.fixture
def folder(tmp_path: Path) -> StudyFolder:
    made = StudyFolder(tmp_path)
    made.area(made.box(0, 0, 4000, 4000))
    north, east = np.mgrid[0:160, 0:160]
    made.raster("worms.tif", (200 + north + 2.0 * east).astype("float32"), 25.0)
    return made
