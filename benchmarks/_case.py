"""The case that the benchmarks share: groups on a square, known in closed terms, with fixes to read.

Units as in the package's numerics: km, and foreign scent of mean 1. All threads but one are switched off, so that a
ratio compares work and not cores; set before JAX is imported.
"""

import json
import os
import platform
import subprocess
import time
from collections.abc import Callable

os.environ.setdefault("XLA_FLAGS", "--xla_cpu_multi_thread_eigen=false intra_op_parallelism_threads=1")
os.environ.setdefault("OMP_NUM_THREADS", "1")

import jax
import jax.numpy as jnp
import numpy as np

from bayesrange.spaceuse import Parameters, Reading, Setting, log_fix_density, make_domain, steady_state

FIXES = 150
"""Fixes of each group."""


def case(cells: int, groups: int, avoidance: float, retreat: float = 0.0, perception: float = 0.3, seed: int = 0):
    """Groups of 6 km² each on a square of `cells` × `cells` and a smooth layer; perception in km, 0 for two cells.

    Returns:
        Parameters, setting and reading.
    """
    rng = np.random.default_rng(seed)
    side = np.sqrt(6.0 * groups)
    cell = side / cells
    at = (np.arange(cells) + 0.5) * cell
    across = int(np.ceil(np.sqrt(groups)))
    down = int(np.ceil(groups / across))
    home = np.array([((i % across + 0.5) / across, (i // across + 0.5) / down) for i in range(groups)]) * side
    home += rng.normal(0, 0.25, home.shape)
    x, y = np.meshgrid(at, at)
    waves = [rng.normal(size=4) for _ in range(12)]
    layer = sum(a * np.cos(1.2 * (b * x + c * y) + 3 * d) for a, b, c, d in waves)
    layer = (layer - layer.mean()) / layer.std()
    animals = rng.integers(2, 8, groups).astype(float)
    domain = make_domain(at, at, np.full((cells, cells), cell**2), perception or 2 * cell)
    setting = Setting(
        domain, jnp.asarray(layer)[None], jnp.asarray(animals * side**2 / animals.sum()), jnp.asarray(cell / 2)
    )
    parameters = Parameters(
        jnp.full(groups, 3.3), jnp.full(groups, retreat), jnp.full(groups, avoidance), jnp.full((1, groups), 0.6),
        jnp.zeros(()), jnp.asarray(home),
    )  # fmt: skip
    places = np.repeat(home, FIXES, axis=0) + rng.normal(0, 0.5, (groups * FIXES, 2))
    column, row = np.clip((places / cell).astype(int), 0, cells - 2).T
    corner = row * cells + column
    entries = np.stack([corner, corner + 1, corner + cells, corner + cells + 1], axis=1)
    reading = Reading(
        jnp.asarray(entries, jnp.int32), jnp.full(entries.shape, np.log(0.25)),
        jnp.repeat(jnp.arange(groups, dtype=jnp.int32), FIXES), domain.area,
    )  # fmt: skip
    return parameters, setting, reading


def log_likelihood(solver: str) -> Callable:
    """The log-likelihood of the case as a function of (parameters, setting, reading)."""

    def value(parameters: Parameters, setting: Setting, reading: Reading) -> jax.Array:
        return log_fix_density(steady_state(parameters, setting, solver=solver).log_density, reading).sum()

    return value


def milliseconds(call: Callable[[], object], repeats: int = 9) -> float:
    """Median time of a call after one that is not counted."""
    jax.block_until_ready(call())
    times = []
    for _ in range(repeats):
        begun = time.perf_counter()
        jax.block_until_ready(call())
        times.append(time.perf_counter() - begun)
    return 1000 * float(np.median(times))


def machine() -> dict[str, object]:
    """What the figures were measured on."""
    try:
        command = ["git", "rev-parse", "--short", "HEAD"]
        commit = subprocess.run(command, capture_output=True, text=True, check=True).stdout.strip()
    except (OSError, subprocess.CalledProcessError):
        commit = "unknown"
    return {
        "commit": commit, "date": time.strftime("%Y-%m-%d"), "python": platform.python_version(),
        "jax": jax.__version__, "cpus": os.cpu_count(), "device": jax.devices()[0].platform,
    }  # fmt: skip


def say(**row: object) -> None:
    """One result a line, as JSON."""
    print(json.dumps({k: float(f"{v:.4g}") if isinstance(v, float) else v for k, v in row.items()}), flush=True)
