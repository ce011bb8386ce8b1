"""Studies of tracks that the memory benchmarks share: animals with known parameters, from the package's simulator.

Set before JAX is imported: one thread.
"""

import os

os.environ.setdefault("XLA_FLAGS", "--xla_cpu_multi_thread_eigen=false intra_op_parallelism_threads=1")
os.environ.setdefault("OMP_NUM_THREADS", "1")

from pathlib import Path

import geopandas
import jax.numpy as jnp
import numpy as np
import pandas as pd
import rasterio
import shapely
from rasterio.transform import from_origin
from scipy.ndimage import gaussian_filter

from bayesrange.memory import Landscape, StepParameters, regular_timeline, simulate

WEST, SOUTH, CELL, CELLS, CRS = 500_000.0, 5_600_000.0, 50.0, 240, "EPSG:32631"
"""South-western corner, edge of a cell [m], cells along a side, in an invented square of 12 km."""

TRUTH = {
    "step_shape": 1.4, "step_scale": 110.0, "turn_concentration": 0.35, "selection[forage]": 0.5,
    "reference_strength": 2.5, "reference_decay": 700.0, "working_strength": 1.2, "working_decay": 8.0,
    "recall_half": 6.0,
}  # fmt: skip
"""True values in the units of the tables; the encoding range is 150 m."""

SPREAD = {
    "step_shape": 0.08, "step_scale": 0.1, "turn_concentration": 0.2, "selection[forage]": 0.15,
    "reference_strength": 0.5, "reference_decay": 0.2, "working_strength": 0.3, "working_decay": 0.2,
}  # fmt: skip
"""True spreads between animals: sd on the unconstrained scale, of decay times on the log of their excess."""

STUDY = """[study]
name = "Made-up tracks"
crs = "{crs}"
cell_m = 50
area = "area.geojson"
[fixes]
file = "fixes.csv"
[layers.forage]
file = "forage.tif"
[model]
card = "{card}"
{layers}pooling = "{pooling}"
{encoding}{nodes}[sampling]
chains = {chains}
warmup = {warmup}
draws = {draws}
seed = {seed}
"""


def forage(seed: int = 1) -> np.ndarray:
    """A layer that is smooth over about 400 m, mean 0 and sd 1; row 0 south."""
    noise = gaussian_filter(np.random.default_rng(seed).normal(size=(CELLS, CELLS)), 8, mode="wrap")
    return (noise - noise.mean()) / noise.std()


def landscape() -> Landscape:
    """The square as the simulator wants it [km]."""
    inside = np.ones((CELLS, CELLS), bool)
    place = (jnp.asarray(v / 1000) for v in (WEST, SOUTH, CELL))
    ground = jnp.asarray(np.repeat(np.repeat(inside, 8, 0), 8, 1))
    return Landscape(*place, jnp.asarray(forage())[None], jnp.asarray(inside), ground)


def draw_animals(count: int, spread: float, rng: np.random.Generator) -> list[dict[str, float]]:
    """True values of each animal; `spread` scales how far they differ (0: not at all)."""
    animals = []
    for _ in range(count):
        noise = {name: spread * sd * rng.normal() for name, sd in SPREAD.items()}
        own = {"recall_half": TRUTH["recall_half"]}
        for name in ("step_shape", "step_scale", "turn_concentration"):
            own[name] = TRUTH[name] * np.exp(noise[name])
        for name in ("selection[forage]", "reference_strength", "working_strength"):
            own[name] = TRUTH[name] + noise[name]
        own["working_decay"] = 0.5 + (TRUTH["working_decay"] - 0.5) * np.exp(noise["working_decay"])
        excess = TRUTH["reference_decay"] - TRUTH["working_decay"]
        own["reference_decay"] = own["working_decay"] + excess * np.exp(noise["reference_decay"])
        animals.append(own)
    return animals


def write_tracks(
    folder: Path, animals: int, fixes: int, *, spread: float = 0.0, missing: float = 0.03, seed: int = 5,
    memory: bool = True, pooling: str = "individual", card: str = "memory-resources", chains: int = 2,
    warmup: int = 300, draws: int = 500, nodes: int | None = None,
) -> list[dict[str, float]]:  # fmt: skip
    """Write a study of simulated animals, hourly fixes in whole metres.

    Returns:
        True values of each animal.
    """
    folder.mkdir(parents=True, exist_ok=True)
    rng = np.random.default_rng(seed)
    truth, ground, tables = draw_animals(animals, spread, rng), landscape(), []
    for k, own in enumerate(truth):
        start = np.array([WEST, SOUTH]) / 1000 + CELL * CELLS / 2000 + rng.normal(0, 0.7, 2)
        walk = simulate(
            _parameters(own, memory), ground, regular_timeline(fixes - 1, 1.0), jnp.asarray(start), seed * 1000 + k
        )
        there = rng.uniform(size=fixes) >= missing
        there[0] = True
        time = pd.date_range("2031-03-01", periods=fixes, freq="h", tz="UTC").strftime("%Y-%m-%dT%H:%MZ")
        x, y = (np.round(np.asarray(v) * 1000) for v in (walk.x, walk.y))
        tables.append(pd.DataFrame({"animal": f"A{k + 1}", "time": time, "x": x, "y": y})[there])
    pd.concat(tables).to_csv(folder / "fixes.csv", index=False)
    side = CELL * CELLS
    box = geopandas.GeoSeries([shapely.box(WEST, SOUTH, WEST + side, SOUTH + side)], crs=CRS)
    box.to_file(folder / "area.geojson", driver="GeoJSON")
    profile = {"crs": CRS, "transform": from_origin(WEST, SOUTH + side, CELL, CELL), "count": 1, "dtype": "float32"}
    with rasterio.open(folder / "forage.tif", "w", driver="GTiff", height=CELLS, width=CELLS, **profile) as file:
        file.write(forage()[::-1].astype("float32")[None])
    text = STUDY.format(
        crs=CRS, card=card, layers="" if card == "memory" else 'layers = ["forage"]\n', pooling=pooling,
        encoding="encoding_range_m = 150\n" if card.startswith("memory") else "",
        nodes=f"nodes = {nodes}\n" if nodes else "", chains=chains, warmup=warmup, draws=draws, seed=seed,
    )  # fmt: skip
    (folder / "study.toml").write_text(text, encoding="utf-8")
    return truth


def _parameters(own: dict[str, float], memory: bool) -> StepParameters:
    return StepParameters(
        shape=jnp.asarray(own["step_shape"]), scale=jnp.asarray(own["step_scale"] / 1000),
        concentration=jnp.asarray(own["turn_concentration"]), rhythm=jnp.zeros(4),
        selection=jnp.array([own["selection[forage]"]]),
        reference_strength=jnp.asarray(own["reference_strength"] * memory),
        reference_decay=jnp.asarray(own["reference_decay"]),
        working_strength=jnp.asarray(own["working_strength"] * memory),
        working_decay=jnp.asarray(own["working_decay"]), recall_half=jnp.asarray(own["recall_half"]),
        encoding_range=jnp.asarray(0.15), home_pull=jnp.asarray(0.0), home=jnp.zeros(2), home_eps=jnp.asarray(0.05),
    )  # fmt: skip
