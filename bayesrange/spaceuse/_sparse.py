"""Direct solves with the balance matrix of each group, one row pinned.

All groups and all parameter values share one sparsity pattern, that of the whole rectangle of cells: closed faces hold
a 0 and cells outside a 1 on the diagonal. It follows from the shape alone, so one compiled program serves every
study of that shape.

The life of an analysis and its factor is the caller's business: they are released once, after the last solve.
"""

import importlib.util
from collections.abc import Callable
from functools import cache
from importlib import metadata
from typing import Any, NamedTuple

import jax.numpy as jnp
import numpy as np
from jaxtyping import Array, Bool, Float, Int

from bayesrange.spaceuse._operator import Rates, diagonal

KLU_VERSIONS = ("0.5.",)
"""Releases of klujax whose foreign functions were tried: they check neither the number nor the kind of arguments."""


LARGER = 1e-14
"""Excess of the diagonal of a pinned matrix, some tens of rounding errors."""


class Pattern(NamedTuple):
    """Compressed columns of the five-point pattern (NumPy, made at trace time).

    Attributes:
        row: row of each entry, ascending within a column.
        column: column of each entry, ascending.
        start: first entry of each column, and the number of entries.
        source: for each entry, its place in (diagonal, −onward x, −back x, −onward y, −back y).
        size: number of rows.
    """

    row: Int[np.ndarray, " entries"]
    column: Int[np.ndarray, " entries"]
    start: Int[np.ndarray, " columns"]
    source: Int[np.ndarray, " entries"]
    size: int


class Linear(NamedTuple):
    """A sparse direct solver. Its analyses and factors are arrays or pytrees of arrays.

    Attributes:
        analyse: (pattern) → analysis of the pattern.
        factor: (pattern, analysis, values) → factor of every group's matrix.
        refactor: (pattern, analysis, factor, values) → factor of new values; it replaces the old one.
        solve: (pattern, analysis, factor, right-hand side, transposed) → solution for every group.
        release: (analysis, factor, result) → None: give back what they hold, once `result` is known.
    """

    analyse: Callable[[Pattern], Any]
    factor: Callable[[Pattern, Any, Array], Any]
    refactor: Callable[[Pattern, Any, Any, Array], Any]
    solve: Callable[[Pattern, Any, Any, Array, bool], Array]
    release: Callable[[Any, Any, Array], None]


@cache
def five_point(ny: int, nx: int) -> Pattern:
    """Pattern of a rectangle of cells, row-major."""
    cell = np.arange(ny * nx, dtype=np.int32).reshape(ny, nx)
    west, east = cell[:, :-1].ravel(), cell[:, 1:].ravel()
    south, north = cell[:-1].ravel(), cell[1:].ravel()
    row = np.concatenate([cell.ravel(), east, west, north, south])
    column = np.concatenate([cell.ravel(), west, east, south, north])
    order = np.lexsort((row, column))
    start = np.concatenate([[0], np.cumsum(np.bincount(column, minlength=cell.size))])
    return Pattern(row[order], column[order], start.astype(np.int32), order.astype(np.int32), cell.size)


def matrix_values(pattern: Pattern, rate: Rates, inside: Bool[Array, "ny nx"]) -> Float[Array, "groups entries"]:
    """Entries of M, the identity outside."""
    main = jnp.where(inside[None], diagonal(rate), 1.0)
    parts = (main, -rate.onward.x, -rate.back.x, -rate.onward.y, -rate.back.y)
    return jnp.concatenate([part.reshape(main.shape[0], -1) for part in parts], axis=1)[:, pattern.source]


def pinned_values(
    pattern: Pattern, rate: Rates, pin: Int[Array, " groups"], inside: Bool[Array, "ny nx"]
) -> Float[Array, "groups entries"]:
    """Entries of M with the row of cell `pin` replaced by that of the identity.

    The diagonal is a little larger: a pivot that cancels to 0, in a well that hardly anybody leaves, would stop the
    program. If anything is not finite all is the identity, for the same reason. The solve sees to both.
    """
    values = matrix_values(pattern, rate, inside)
    identity = jnp.asarray(pattern.row == pattern.column, values.dtype)[None, :]
    values = values * (1 + LARGER * identity)
    pinned = jnp.asarray(pattern.row)[None, :] == pin[:, None]
    return jnp.where(pinned | ~jnp.isfinite(values).all(), identity, values)


def klu_found() -> bool:
    """Whether a tried release of klujax is installed."""
    if importlib.util.find_spec("klujax_cpp") is None:
        return False
    return metadata.version("klujax").startswith(KLU_VERSIONS)


def choose(linear: str | None) -> Linear:
    """The solver of a name: "klu", "superlu", or None for the faster one that is installed.

    Raises:
        ValueError: an unknown name, or "klu" without a tried release of klujax.
    """
    if linear not in (None, "klu", "superlu"):
        raise ValueError(f"`linear` must be 'klu', 'superlu' or None (the faster one installed), got {linear!r}.")
    if linear == "superlu" or (linear is None and not klu_found()):
        from bayesrange.spaceuse._superlu import SUPERLU

        return SUPERLU
    if not klu_found():
        raise ValueError(
            f"linear='klu' needs klujax {KLU_VERSIONS[0]}x: pip install 'bayesrange[fast]', or leave `linear` out."
        )
    from bayesrange.spaceuse._klu import KLU

    return KLU
