"""Null vectors of the balance matrix: one row is replaced by "this cell has density 1".

The pinned cell should be the densest, so that all others are at most about 1 and can only underflow.
"""

from typing import Any, NamedTuple

import jax
import jax.numpy as jnp
from jaxtyping import Array, Float, Int

from bayesrange.spaceuse._operator import Faces, rates
from bayesrange.spaceuse._sparse import Linear, Pattern, choose, five_point, pinned_values


class Pinned(NamedTuple):
    """What solves with a factor need beside it: solver, pattern, its analysis, and the pinned cell of each group."""

    linear: Linear
    pattern: Pattern
    analysis: Any
    pin: Int[Array, " groups"]

    def solve(self, factor: Any, right: Float[Array, "groups ny nx"]) -> Float[Array, "groups ny nx"]:
        """δ with M δ = `right` in all rows but the pinned one, and δ = 0 there."""
        free = right.reshape(right.shape[0], -1) * (1 - self.one())
        flat = self.linear.solve(self.pattern, self.analysis, factor, free, False)
        return flat.reshape(right.shape)

    def solve_transposed(self, factor: Any, right: Float[Array, "groups ny nx"]) -> Float[Array, "groups ny nx"]:
        """Transpose of `solve`."""
        flat = self.linear.solve(self.pattern, self.analysis, factor, right.reshape(right.shape[0], -1), True)
        return (flat * (1 - self.one())).reshape(right.shape)

    def null(self, factor: Any, shape: tuple[int, ...]) -> Float[Array, "groups ny nx"]:
        """Density with M u = 0, 1 in the pinned cell."""
        return self.linear.solve(self.pattern, self.analysis, factor, self.one(), False).reshape(shape)

    def one(self) -> Float[Array, "groups cells"]:
        """1 in the pinned cell, 0 elsewhere."""
        return jax.nn.one_hot(self.pin, self.pattern.size, dtype=jnp.float64)


def null_density(
    drift_x: Float[Array, "groups ny nx-1"],
    drift_y: Float[Array, "groups ny-1 nx"],
    area: Float[Array, "ny nx"],
    linear: str | None = None,
) -> Float[Array, "groups ny nx"]:
    """Steady density of a given drift, for drifts that no card has.

    Args:
        drift_x: drift per unit diffusion times the cell edge [1] on faces between columns, positive towards the east.
        drift_y: the same between rows, positive towards the north.
        area: habitable area of each cell [km²]; 0 outside. The cells inside must be connected.
        linear: see `flux`.

    Returns:
        u ≥ 0 [1/km²] with Σ u·area = 1; not differentiable.
    """
    solver, inside, drift = choose(linear), area > 0, Faces(drift_x, drift_y)
    pattern, shape = five_point(*area.shape), (drift_x.shape[0], *area.shape)
    rate = rates(drift, inside)
    density = jnp.zeros(shape)
    guess = _path_potential(drift, shape)
    for _ in range(2):  # the second time with the densest cell pinned
        pin = jnp.argmax(jnp.where(inside[None], guess, -jnp.inf).reshape(shape[0], -1), axis=1)
        analysis = solver.analyse(pattern)
        pinned = Pinned(solver, pattern, analysis, pin)
        factor = solver.factor(pattern, analysis, pinned_values(pattern, rate, pin, inside))
        density = guess = pinned.null(factor, shape)
        solver.release(analysis, factor, density)
    return density / (density * area[None]).sum((1, 2), keepdims=True)


def _path_potential(drift: Faces, shape: tuple[int, ...]) -> Float[Array, "groups ny nx"]:
    """Drift summed up along the south edge and from there northwards: the potential, if there is one."""
    east = jnp.concatenate([jnp.zeros((shape[0], 1, 1)), jnp.cumsum(drift.x[:, :1], axis=2)], axis=2)
    north = jnp.concatenate([jnp.zeros((shape[0], 1, shape[2])), jnp.cumsum(drift.y, axis=1)], axis=1)
    return east + north
