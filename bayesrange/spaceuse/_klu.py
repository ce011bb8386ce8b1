"""KLU (Davis & Palamadai Natarajan 2010, ACM Trans. Math. Softw. 37:36) by the foreign functions of klujax.

klujax's public functions put handles into Python objects that a compiled program must not outlive, and sort the
indices in every call; so its C++ targets are called directly, with sorted indices. A handle is an address. Rules that
keep that safe:
- analysis and factorisation are made inside the program by a call with side effects: never merged with an equal
  call, never a constant of a program that another process may load from the compilation cache;
- a factor is released by a call that takes the last result as an argument;
- under `vmap` the batch becomes more groups, and a factor is released once although many results wait for it.
A factor lives from the forward to the backward pass of one gradient. Asking for the value and the gradient in one go
(`jax.grad`, `jax.value_and_grad`, `jax.jacrev`) releases it exactly once; calling the function returned by `jax.vjp`
twice would use it after its release, and never calling it keeps its memory: use linear="superlu" there.
"""

import jax
import jax.numpy as jnp
import klujax_cpp
from jax.custom_batching import custom_vmap
from jax.typing import ArrayLike, DTypeLike
from jaxtyping import Array, Float, UInt64

from bayesrange.spaceuse._sparse import Linear, Pattern

_TARGETS = ("analyze", "factor_f64", "refactor_f64", "solve_with_numeric_f64", "tsolve_with_numeric_f64")
_TARGETS += ("free_numeric", "free_symbolic")
for _name in _TARGETS:
    jax.ffi.register_ffi_target(f"bayesrange_klu_{_name}", getattr(klujax_cpp, _name)(), platform="cpu")


def _call(name: str, shape: tuple[int, ...], dtype: DTypeLike, *arguments: Array, effect: bool = True) -> Array:
    target = jax.ffi.ffi_call(f"bayesrange_klu_{name}", jax.ShapeDtypeStruct(shape, dtype), has_side_effect=effect)
    return target(*arguments)


def _as_groups(size: int, batched: bool, array: ArrayLike) -> Array:
    """A batch of arrays led by groups, as one array with more groups."""
    array = jnp.asarray(array)
    array = array if batched else jnp.broadcast_to(array[None], (size, *array.shape))
    return array.reshape(size * array.shape[1], *array.shape[2:])


def _same(batched: list, arguments: tuple[ArrayLike, ...]) -> list[Array]:
    """What belongs to the pattern is one for a whole batch: where a loop has made a batch of it, all entries agree."""
    return [jnp.asarray(a)[0] if b else jnp.asarray(a) for b, a in zip(batched, arguments, strict=True)]


def _analyse(pattern: Pattern) -> UInt64[Array, ""]:
    return _call("analyze", (), jnp.uint64, *_indices(pattern), jnp.int32(pattern.size))


def _indices(pattern: Pattern) -> tuple[Array, Array]:
    return jnp.asarray(pattern.row), jnp.asarray(pattern.column)


def _factor(
    pattern: Pattern, analysis: UInt64[Array, ""], values: Float[Array, "groups entries"]
) -> UInt64[Array, " groups"]:
    return _numeric("factor_f64", *_indices(pattern), analysis, values)


def _refactor(
    pattern: Pattern,
    analysis: UInt64[Array, ""],
    factor: UInt64[Array, " groups"],
    values: Float[Array, "groups entries"],
) -> UInt64[Array, " groups"]:
    """In place: the pivots stay on the diagonal, as suits a matrix whose columns are diagonally dominant."""
    return _numeric("refactor_f64", *_indices(pattern), analysis, values, factor)


def _numeric(name: str, *arguments: Array) -> UInt64[Array, " groups"]:
    """Factor or refactor: row, column, analysis, values and, to be replaced, the old factor."""

    @custom_vmap
    def run(row: Array, column: Array, analysis: Array, values: Array, *old: Array) -> Array:
        return _call(name, values.shape[:1], jnp.uint64, row, column, values, analysis, *old)

    @run.def_vmap
    def _(size: int, batched: list, *arguments: ArrayLike) -> tuple[Array, bool]:
        each = [_as_groups(size, b, a) for b, a in zip(batched[3:], arguments[3:], strict=True)]
        return run(*_same(batched[:3], arguments[:3]), *each).reshape(size, -1), True

    return run(*arguments)


def _solve(
    pattern: Pattern,
    analysis: UInt64[Array, ""],
    factor: UInt64[Array, " groups"],
    right: Float[Array, "groups cells"],
    transposed: bool,
) -> Float[Array, "groups cells"]:
    name = "tsolve_with_numeric_f64" if transposed else "solve_with_numeric_f64"

    @custom_vmap
    def run(analysis: Array, factor: Array, right: Array) -> Array:
        column = right[:, :, None]
        return _call(name, column.shape, column.dtype, analysis, factor, column, effect=False)[:, :, 0]

    @run.def_vmap
    def _(size: int, batched: list, *arguments: ArrayLike) -> tuple[Array, bool]:
        each = [_as_groups(size, b, a) for b, a in zip(batched[1:], arguments[1:], strict=True)]
        solution = run(*_same(batched[:1], arguments[:1]), *each)
        return solution.reshape(size, -1, solution.shape[-1]), True

    return run(analysis, factor, right)


def _release(analysis: UInt64[Array, ""], factor: UInt64[Array, " groups"], result: Array) -> None:
    """Free both after `result`: a zero that only the finished result can give is added to the addresses."""
    _free(analysis, factor, jnp.isnan(result).sum(dtype=jnp.int64))


@custom_vmap
def _free(analysis: Array, factor: Array, count: Array) -> Array:
    zero = jnp.minimum(count, 0).astype(jnp.uint64)  # a count is never negative, but no compiler knows
    _call("free_numeric", (), jnp.int32, factor + zero)
    return _call("free_symbolic", (), jnp.int32, analysis + zero)


@_free.def_vmap
def _free_batch(size: int, batched: list, analysis: Array, factor: Array, count: Array) -> tuple[Array, bool]:
    """Every factor of the batch once: what is not batched belongs to all of it."""
    return _free(*_same(batched[:1], (analysis,)), factor.reshape(-1), count.sum()), False


KLU = Linear(_analyse, _factor, _refactor, _solve, _release)
