"""Anderson-accelerated fixed points, forward and adjoint.

The solution is a function of the arguments alone: the start is given by the caller as a function of the parameters,
never carried over from an earlier call, because a sampler's log-density must not remember where it has been.
Source: Anderson (1965), J. ACM 12:547; Walker & Ni (2011), SIAM J. Numer. Anal. 49:1715.
"""

from collections.abc import Callable
from typing import NamedTuple

import jax
import jax.numpy as jnp
from jaxtyping import Array, Float, Int

MEMORY = 5
"""Past steps that are combined: 5 needed 10–31 iterations over the prior, 4 stalls sooner, 10 costs more time."""
KEPT = jnp.float32
"""Precision of the past steps."""
MAX_STEPS = 200
TOLERANCE = 1e-10
"""Largest change of one more step, relative to the largest value."""
ADJOINT_TOLERANCE = 1e-8
"""The same for the adjoint: gradients good to about 1e-8, far below what a leapfrog step could notice."""


class Iteration(NamedTuple):
    """Outcome of `anderson`: the point, steps taken and the last relative residual."""

    value: Float[Array, " n"]
    steps: Int[Array, ""]
    residual: Float[Array, ""]


def anderson(
    step: Callable[[Float[Array, " n"]], Float[Array, " n"]],
    start: Float[Array, " n"],
    tolerance: float | Float[Array, ""] = TOLERANCE,
    max_steps: int | Int[Array, ""] = MAX_STEPS,
    size: float | Float[Array, ""] | None = None,
) -> Iteration:
    """Find x = step(x).

    Past steps are kept in single precision: they only steer, the residual that ends the iteration is in double. It
    halves the memory that is streamed in every step, which is most of its time, and takes no more steps.

    The residual is relative to `size`, or where that is left out to the largest value of x. Not differentiable: see
    `implicit_fixed_point`. Needs MEMORY × 2 vectors of working memory; each step costs one call and MEMORY inner
    products. A NaN stops the iteration and stays in `residual`.
    """

    def relative(residual: Float[Array, " n"], x: Float[Array, " n"]) -> Float[Array, ""]:
        largest = jnp.maximum(jnp.max(jnp.abs(x)), 1e-300) if size is None else size
        return jnp.max(jnp.abs(residual)) / largest

    def unfinished(state: tuple) -> Array:
        count, error = state[0], state[-1]
        return (count < max_steps) & (error > tolerance)

    def advance(state: tuple) -> tuple:
        count, x, residual, moves, changes, gram, _ = state
        used = jnp.arange(MEMORY) < count
        ridge = 1e-12 * jnp.trace(gram) / MEMORY
        normal = jnp.where(used[:, None] & used[None, :], gram, 0.0) + jnp.diag(jnp.where(used, ridge, 1.0))
        mix = jnp.linalg.solve(normal, jnp.where(used, changes @ residual.astype(KEPT), 0.0))
        new = x + residual - mix.astype(KEPT) @ moves
        new_residual = step(new) - new
        slot = count % MEMORY
        moves = moves.at[slot].set((new + new_residual - x - residual).astype(KEPT))
        changes = changes.at[slot].set((new_residual - residual).astype(KEPT))
        products = (changes @ changes[slot]).astype(gram.dtype)
        gram = gram.at[slot].set(products).at[:, slot].set(products)
        return count + 1, new, new_residual, moves, changes, gram, relative(new_residual, new)

    residual = step(start) - start
    history = jnp.zeros((MEMORY, start.size), KEPT)
    first = (0, start, residual, history, history, jnp.zeros((MEMORY, MEMORY), start.dtype), relative(residual, start))
    count, value, _, _, _, _, error = jax.lax.while_loop(unfinished, advance, first)
    return Iteration(value, jnp.asarray(count), error)


def implicit_fixed_point(step: Callable, theta, start: Float[Array, " n"]) -> tuple[Float[Array, " n"], Iteration]:
    """Solve x = step(x, theta), with derivatives by the implicit function theorem.

    One adjoint fixed point serves every parameter: λ = x̄ + (∂step/∂x)ᵀ λ, θ̄ = (∂step/∂θ)ᵀ λ. The start has no
    derivative: at the solution nothing depends on it. Where the adjoint misses its tolerance the gradient is NaN, so
    that a sampler rejects the point instead of following a wrong slope.

    Args:
        step: pure function of x and θ; everything it needs is an argument of it.
        theta: pytree of arrays.
        start: first x.

    Returns:
        The solution (differentiable in θ) and the `Iteration` (not differentiable).
    """

    @jax.custom_vjp
    def solve(theta, start):
        found = anderson(lambda x: step(x, theta), start)
        return found.value, found

    def forward(theta, start):
        found = anderson(lambda x: step(x, theta), start)
        return (found.value, found), (theta, found.value)

    def backward(kept, cotangent):
        theta, x = kept
        from_above = cotangent[0]
        _, pull = jax.vjp(step, x, theta)
        size = jnp.maximum(jnp.max(jnp.abs(from_above)), 1e-300)
        adjoint = anderson(lambda lam: from_above / size + pull(lam)[0], from_above / size, ADJOINT_TOLERANCE)
        trusted = jnp.where(adjoint.residual <= 100 * ADJOINT_TOLERANCE, size, jnp.nan)
        theta_bar = pull(adjoint.value * trusted)[1]
        return theta_bar, jnp.zeros_like(x)

    solve.defvjp(forward, backward)
    return solve(theta, jax.lax.stop_gradient(start))
