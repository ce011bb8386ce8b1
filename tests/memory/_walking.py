"""Grounds and parameters to walk with, and log ω of a place written out in NumPy."""

import jax.numpy as jnp
import numpy as np
from scipy import ndimage

from bayesrange.memory import Landscape, StepParameters

SUB = 8


def plain(width: float) -> Landscape:
    """One wide cell [km] about (0, 0), no layers: ω is 1 wherever an animal can come to."""
    half = jnp.asarray(-width / 2)
    return Landscape(
        half, half, jnp.asarray(width), jnp.zeros((0, 1, 1)), jnp.ones((1, 1), bool), jnp.ones((SUB, SUB), bool)
    )


def ground(layers, land, cell: float, west: float = 0.0, south: float = 0.0) -> Landscape:
    """Landscape from layers by cell and land by sub-cell."""
    land = np.asarray(land, bool)
    inside = land.reshape(land.shape[0] // SUB, SUB, land.shape[1] // SUB, SUB).any((1, 3))
    layers = np.where(inside, np.asarray(layers, float), 0.0)
    return Landscape(*map(jnp.asarray, (west, south, cell)), *map(jnp.asarray, (layers, inside, land)))


def patchy(seed: int = 0, n: int = 40, cell: float = 0.1) -> Landscape:
    """Two random layers on a square with a round pond, from (0, 0) to (n cell, n cell) [km]."""
    rng = np.random.default_rng(seed)
    layers = np.array([ndimage.gaussian_filter(rng.normal(size=(n, n)), grain) for grain in (1.5, 4.0)])
    layers = (layers - layers.mean((1, 2), keepdims=True)) / layers.std((1, 2), keepdims=True)
    at = (np.arange(n * SUB) + 0.5) / SUB * cell
    pond = (at[None] - 0.7 * n * cell) ** 2 + (at[:, None] - 0.6 * n * cell) ** 2 < (0.1 * n * cell) ** 2
    return ground(layers, ~pond, cell)


def parameters(layers: int = 0, **values) -> StepParameters:
    """One animal's parameters; what is not given is without effect."""
    given = {
        "shape": 1.6, "scale": 0.12, "concentration": 0.35, "rhythm": [0.0] * 4, "selection": [0.0] * layers,
        "reference_strength": 0.0, "reference_decay": 300.0, "working_strength": 0.0, "working_decay": 10.0,
        "recall_half": 3.0, "encoding_range": 0.15, "home_pull": 0.0, "home": [0.0, 0.0], "home_eps": 0.01,
    }  # fmt: skip
    assert set(values) <= set(given), values
    return StepParameters(**{name: jnp.asarray(value, float) for name, value in (given | values).items()})


def log_omega(p: StepParameters, landscape: Landscape, stays, now: float, x, y) -> np.ndarray:
    """Log ω at some places: every stay (time, duration, x, y) begun before `now`, one by one."""
    total = read_by_hand(landscape, x, y) @ np.asarray(p.selection)
    total = total - float(p.home_pull) * np.sqrt(
        (x - float(p.home[0])) ** 2 + (y - float(p.home[1])) ** 2 + float(p.home_eps) ** 2
    )
    signed = (
        (float(p.reference_strength), float(p.reference_decay)),
        (-float(p.working_strength), float(p.working_decay)),
    )
    for strength, decay in signed:
        trace = np.zeros_like(x)
        for time, duration, at_x, at_y in stays:
            if time < now:
                far = (x - at_x) ** 2 + (y - at_y) ** 2
                trace = trace + duration * np.exp(-(now - time) / decay - far / (2 * float(p.encoding_range) ** 2))
        total = total + strength * trace / (trace + float(p.recall_half))
    return total


def read_by_hand(landscape: Landscape, x, y) -> np.ndarray:
    """Layers at some places, corner by corner; every place must have an inside cell among its four."""
    west, south, cell = (float(a) for a in landscape[:3])
    layers, inside = np.pad(np.asarray(landscape.layers), ((0, 0), (1, 1), (1, 1))), np.pad(landscape.inside, 1)
    along, up = (x - west) / cell + 0.5, (y - south) / cell + 0.5
    j, i = np.floor(along).astype(int), np.floor(up).astype(int)
    read, total = np.zeros((x.size, layers.shape[0])), np.zeros(x.size)
    for di in (0, 1):
        for dj in (0, 1):
            weight = abs(1 - di - (up - i)) * abs(1 - dj - (along - j)) * inside[i + di, j + dj]
            total += weight
            read += weight[:, None] * layers[:, i + di, j + dj].T
    return read / total[:, None]
