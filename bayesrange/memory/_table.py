"""The past of each step, tabulated against a basis: what the sampler reads instead of scanning the past.

Table columns are the products decay column × range column, range running fastest; so fewer decay columns of the same
basis are a slice. Summed directly in double precision, stored in single. Units: km, h.
"""

from collections.abc import Sequence

import numpy as np
from jaxtyping import Float

from bayesrange.memory._basis import FARTHEST, Basis, decay_columns, is_fixed, range_columns
from bayesrange.memory._steps import Stays

Exponentials = Sequence[tuple[float, float]]
"""Pairs of decay time [h] and encoding range [km]."""


def tabulate(
    stays: Stays,
    time: Float[np.ndarray, " steps"],
    x: Float[np.ndarray, "steps places"],
    y: Float[np.ndarray, "steps places"],
    decay_basis: Basis,
    range_basis: Basis,
    exact_at: Exponentials = (),
) -> tuple[Float[np.ndarray, "steps places columns"], Float[np.ndarray, "steps places exact"]]:
    """The table, and exact traces at a few decay times from the same pass to prove it by.

    Stays more than 7 of the longest encoding ranges away are left out (they weigh below 3e−11).

    Args:
        stays: of the same animal, ascending in time.
        time: starts of steps [h].
        x: eastings of the places [km].
        y: northings [km].
        decay_basis: must span the ages of all stays at all steps.
        range_basis: of the encoding range.
        exact_at: where to sum exactly too.

    Returns:
        The table (single precision) [h] and the exact traces (double) [h].
    """
    n = decay_basis.columns.shape[1]
    table = np.zeros((*x.shape, n * range_basis.columns.shape[1]), np.float32)
    exact = np.zeros((*x.shape, len(exact_at)))
    if not n and not exact_at:
        return table, exact
    columns = decay_columns(decay_basis) if n else None
    encode = _Encoding(range_basis)
    by_range = {sigma: [i for i, pair in enumerate(exact_at) if pair[1] == sigma] for _, sigma in exact_at}
    decays = np.array([decay for decay, _ in exact_at])
    for step, past in enumerate(_near(stays, time, x, y, FARTHEST * max([encode.longest, *by_range]))):
        age, duration = time[step] - stays.time[past], stays.duration[past]
        square = _squares(x[step], y[step], stays.x[past], stays.y[past])
        if columns is not None:
            kept = columns(np.log(age)) * duration[:, None]
            table[step] = np.stack([weight @ kept for weight in encode(square)], axis=-1).reshape(x.shape[1], -1)
        for sigma, which in by_range.items():
            kept = np.exp(-age[:, None] / decays[None, which]) * duration[:, None]
            exact[step][:, which] = np.exp(square / (-2 * sigma**2)) @ kept
    return table, exact


class _Encoding:
    """Weight of stays by squared distance, for each range column in turn."""

    def __init__(self, basis: Basis) -> None:
        self.fixed = is_fixed(basis)
        grid = np.asarray(basis.grid)
        self.longest = float(grid[-1]) if self.fixed else float(grid[-1]) / FARTHEST
        self.columns = None if self.fixed else range_columns(basis)

    def __call__(self, square: Float[np.ndarray, "places stays"]) -> Sequence[Float[np.ndarray, "places stays"]]:
        if self.columns is None:
            return [np.exp(square / (-2 * self.longest**2))]
        distance = np.sqrt(square)
        far = distance > FARTHEST * self.longest
        weights = self.columns(np.where(far, 0.0, distance))
        weights[far] = 0.0
        return list(np.moveaxis(weights, -1, 0))


def _squares(
    x: Float[np.ndarray, " places"],
    y: Float[np.ndarray, " places"],
    stay_x: Float[np.ndarray, " stays"],
    stay_y: Float[np.ndarray, " stays"],
) -> Float[np.ndarray, "places stays"]:
    """Squared distances [km²] as one matrix product about the first place: much faster than by differences."""
    px, py, sx, sy = x - x[0], y - y[0], stay_x - x[0], stay_y - y[0]
    left = np.stack([px, py, px**2 + py**2, np.ones_like(px)], axis=1)
    right = np.stack([-2 * sx, -2 * sy, np.ones_like(sx), sx**2 + sy**2])
    return np.maximum(left @ right, 0.0)


def _near(
    stays: Stays,
    time: Float[np.ndarray, " steps"],
    x: Float[np.ndarray, "steps places"],
    y: Float[np.ndarray, "steps places"],
    farthest: float,
) -> list[np.ndarray]:
    """Indices of earlier stays within `farthest` [km] of the box about each step's places."""
    found = []
    west, east = x.min(1) - farthest, x.max(1) + farthest
    south, north = y.min(1) - farthest, y.max(1) + farthest
    for step, now in enumerate(time):
        past = slice(0, int(np.searchsorted(stays.time, now, side="left")))
        px, py = stays.x[past], stays.y[past]
        inside = (px >= west[step]) & (px <= east[step]) & (py >= south[step]) & (py <= north[step])
        found.append(np.flatnonzero(inside))
    return found
