"""SuperLU of SciPy behind a host callback: always there, slower than KLU, and safe by construction.

The factor that travels through the program is the matrix itself. The host keeps the last factorisation beside the
values it was made from, and makes it anew for other values: a solve is a function of its arguments alone, and the
process holds one set of factors.

All of it happens in one thread of our own: SciPy books SuperLU's memory by Python thread state, and a thread of XLA
gets a new state for every callback, at whose end the factors it made are freed under their owner.
"""

from concurrent.futures import ThreadPoolExecutor

import jax
import numpy as np
from jaxtyping import Array, Float
from scipy.sparse import csc_array
from scipy.sparse.linalg import SuperLU, splu

from bayesrange.spaceuse._sparse import Linear, Pattern

_thread = ThreadPoolExecutor(max_workers=1, thread_name_prefix="superlu")
_kept: list[tuple[Pattern, np.ndarray, list[SuperLU | None]]] = []  # touched by that thread only


def _factors(pattern: Pattern, values: np.ndarray) -> list[SuperLU | None]:
    """Factorisation of each group's matrix; None where it is singular."""
    if _kept and _kept[0][0] is pattern and np.array_equal(_kept[0][1], values):
        return _kept[0][2]
    made: list[SuperLU | None] = []
    for entries in values:
        matrix = csc_array((entries, pattern.row, pattern.start), shape=(pattern.size, pattern.size))
        try:
            made.append(
                splu(matrix, permc_spec="MMD_AT_PLUS_A", diag_pivot_thresh=0.0, options={"SymmetricMode": True})
            )
        except RuntimeError:  # exactly singular
            made.append(None)
    _kept[:] = [(pattern, values, made)]
    return made


def _solve_groups(pattern: Pattern, values: np.ndarray, right: np.ndarray, transposed: bool) -> np.ndarray:
    """Solution of A x = b or Aᵀ x = b for every group; NaN where A is singular."""
    out = np.full_like(right, np.nan)
    for i, lu in enumerate(_factors(pattern, values)):
        if lu is not None:
            out[i] = lu.solve(right[i], "T" if transposed else "N")
    return out


def _analyse(pattern: Pattern) -> tuple[()]:
    return ()


def _factor(pattern: Pattern, analysis: tuple[()], values: Float[Array, "groups entries"]) -> Array:
    return values


def _refactor(pattern: Pattern, analysis: tuple[()], factor: Array, values: Float[Array, "groups entries"]) -> Array:
    return values


def _solve(
    pattern: Pattern, analysis: tuple[()], factor: Array, right: Float[Array, "groups cells"], transposed: bool
) -> Array:
    def on_host(values: Array, right: Array) -> np.ndarray:
        copies = np.array(values), np.array(right)
        return _thread.submit(_solve_groups, pattern, *copies, transposed).result()

    shape = jax.ShapeDtypeStruct(right.shape, right.dtype)
    return jax.pure_callback(on_host, shape, factor, right, vmap_method="sequential")


def _release(analysis: tuple[()], factor: Array, result: Array) -> None:
    """Nothing is held."""


SUPERLU = Linear(_analyse, _factor, _refactor, _solve, _release)
