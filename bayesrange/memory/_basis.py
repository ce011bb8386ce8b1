"""A short orthonormal basis for the functions that forgetting and distance follow.

e^{−age/τ}, as a function of age, changes smoothly with τ: over a prior range of τ some twenty orthonormal columns,
the leading left singular vectors of the functions sampled on a grid, hold them all. A trace then is a table of the past
against the columns (built once) times coefficients that depend on τ alone. The same holds for exp(−d²/2σ²) over σ.
Units: km, h.
"""

from typing import NamedTuple

import jax.numpy as jnp
import numpy as np
from jaxtyping import Array, Float
from scipy.interpolate import CubicSpline

GRID = 800
"""Ages the columns are sampled at, evenly in log age."""

MEMBERS = 240
"""Decay times (or encoding ranges) the basis is made from, evenly in their log."""

FARTHEST = 7.0
"""Distance in encoding ranges beyond which a stay is not remembered: exp(−7²/2) = 2e−11."""


class Basis(NamedTuple):
    """Orthonormal columns over a grid (a pytree of arrays).

    A basis of one known member (a fixed encoding range) is a grid of that one value and the single column 1.

    Attributes:
        grid: ages [h] or distances [km], ascending.
        columns: by importance; fewer columns of the same basis are its first ones.
    """

    grid: Float[Array, " grid"] | Float[np.ndarray, " grid"]
    columns: Float[Array, "grid columns"] | Float[np.ndarray, "grid columns"]


def decay_basis(youngest: float, oldest: float, shortest: float, longest: float, columns: int) -> Basis:
    """Basis for e^{−age/τ}.

    Args:
        youngest: least age of a stay at the start of a step [h], > 0.
        oldest: greatest age [h].
        shortest: least decay time τ [h].
        longest: greatest decay time [h].
        columns: how many to keep; 0 where there is no memory.
    """
    if not (0 < youngest and 0 < shortest <= longest):
        raise ValueError(
            f"`youngest` ({youngest} h) and `shortest` ({shortest} h) must be positive and `longest` ({longest} h) not "
            "below `shortest`: they bound the ages of stays and the decay times."
        )
    grid = np.geomspace(youngest, max(oldest, youngest * 1.01), GRID)
    decay = np.geomspace(shortest, longest, MEMBERS)
    # Short decay times weigh a little more: few stays are remembered, where recall is steepest.
    members = np.exp(-grid[:, None] / decay[None]) * (decay[None] / shortest) ** -0.15
    return Basis(grid, _leading(members, columns))


def range_basis(shortest: float, longest: float, columns: int) -> Basis:
    """Basis for exp(−d²/2σ²) over distances d up to 7 × the longest range.

    Args:
        shortest: least encoding range σ [km].
        longest: greatest encoding range [km].
        columns: how many to keep.
    """
    if not 0 < shortest <= longest:
        raise ValueError(f"`shortest` ({shortest} km) must be positive and not above `longest` ({longest} km).")
    points = int(np.ceil(FARTHEST * longest / shortest * 20)) + 1
    grid = np.linspace(0.0, FARTHEST * longest, points)
    members = np.exp(-(grid[:, None] ** 2) / (2 * np.geomspace(shortest, longest, MEMBERS)[None] ** 2))
    return Basis(grid, _leading(members, columns))


def fixed_range(encoding_range: float) -> Basis:
    """The exact basis of one known encoding range [km]."""
    return Basis(np.array([encoding_range]), np.ones((1, 1)))


def no_memory() -> Basis:
    """A basis without columns."""
    return Basis(np.ones(1), np.zeros((1, 0)))


def is_fixed(basis: Basis) -> bool:
    """Whether the basis is that of one known member."""
    return basis.grid.shape[0] == 1


def decay_coefficients(basis: Basis, log_decay: Float[Array, ""]) -> Float[Array, " columns"]:
    """Coefficients of e^{−age/τ} on the columns; smooth in log τ [log h]."""
    return jnp.asarray(basis.columns).T @ jnp.exp(-basis.grid * jnp.exp(-log_decay))


def range_coefficients(basis: Basis, log_range: Float[Array, ""]) -> Float[Array, " columns"]:
    """Coefficients of exp(−d²/2σ²) on the columns; 1 where the range is fixed, whatever `log_range` [log km]."""
    if is_fixed(basis):
        return jnp.ones(basis.columns.shape[1])
    return jnp.asarray(basis.columns).T @ jnp.exp(-0.5 * (jnp.asarray(basis.grid) * jnp.exp(-log_range)) ** 2)


def decay_columns(basis: Basis) -> CubicSpline:
    """The columns as functions of log age, by cubic splines."""
    return CubicSpline(np.log(np.asarray(basis.grid)), np.asarray(basis.columns))


def range_columns(basis: Basis) -> CubicSpline:
    """The columns as functions of distance [km], by cubic splines; not for a fixed range."""
    return CubicSpline(np.asarray(basis.grid), np.asarray(basis.columns))


def _leading(members: Float[np.ndarray, "grid members"], columns: int) -> Float[np.ndarray, "grid columns"]:
    """Leading left singular vectors; members near both ends weigh more, as Chebyshev's points crowd there.

    Against even weights this takes 3–4 times off the largest error of a log-likelihood, which sits at the ends.
    """
    if columns > min(members.shape):
        raise ValueError(f"`columns` can be at most {min(members.shape)}, got {columns}.")
    weight = (1 - 0.98 * np.linspace(-1, 1, members.shape[1]) ** 2) ** -0.5
    return np.linalg.svd(members * weight[None], full_matrices=False)[0][:, :columns]
