"""Null vectors of the balance matrix: one row is replaced by "this cell has density 1".

The pinned cell should be the densest, so that all others are at most about 1 and can only underflow.
"""

from functools import partial
from typing import Any, NamedTuple

import jax
import jax.numpy as jnp
from jaxtyping import Array, Float, Int

from bayesrange.spaceuse._operator import Faces, Rates, rates
from bayesrange.spaceuse._sparse import Linear, Pattern, choose, five_point, matrix_values, pinned_values


class Pinned(NamedTuple):
    """What solves with a factor need beside it: solver, pattern, its analysis, and the pinned cell of each group."""

    linear: Linear
    pattern: Pattern
    analysis: Any
    pin: Int[Array, " groups"]

    def solve(self, factor: Any, right: Float[Array, "groups ny nx"]) -> Float[Array, "groups ny nx"]:
        """δ with M δ = `right` in all rows but the pinned one, and δ = 0 there."""
        flat = self.linear.solve(self.pattern, self.analysis, factor, self._without(right), False)
        return flat.reshape(right.shape)

    def solve_transposed(self, factor: Any, right: Float[Array, "groups ny nx"]) -> Float[Array, "groups ny nx"]:
        """Transpose of `solve`."""
        flat = self.linear.solve(self.pattern, self.analysis, factor, right.reshape(right.shape[0], -1), True)
        return self._without(flat).reshape(right.shape)

    def null(self, factor: Any, shape: tuple[int, ...]) -> Float[Array, "groups ny nx"]:
        """Density with M u = 0, 1 in the pinned cell."""
        one = jax.nn.one_hot(self.pin, self.pattern.size, dtype=jnp.float64)
        return self.linear.solve(self.pattern, self.analysis, factor, one, False).reshape(shape)

    def _without(self, values: Array) -> Float[Array, "groups cells"]:
        """0 in the pinned cell."""
        flat = values.reshape(values.shape[0], -1)
        return flat.at[jnp.arange(flat.shape[0]), self.pin].set(0.0)


@partial(jax.jit, static_argnames="linear")
def null_density(
    drift_x: Float[Array, "groups ny faces_x"],
    drift_y: Float[Array, "groups faces_y nx"],
    area: Float[Array, "ny nx"],
    linear: str | None = None,
) -> Float[Array, "groups ny nx"]:
    """Steady density of a given drift, for drifts that no card has.

    Args:
        drift_x: drift per unit diffusion times the cell edge [1] on the nx − 1 faces between columns, positive
            towards the east.
        drift_y: the same on the ny − 1 faces between rows, positive towards the north.
        area: habitable area of each cell [km²]; 0 outside. The cells inside must be connected.
        linear: see `flux`.

    Returns:
        u ≥ 0 [1/km²] with Σ u·area = 1; not differentiable.

    Raises:
        ValueError: drifts whose shape does not fit `area`.
    """
    ny, nx = area.shape
    if drift_x.shape[1:] != (ny, nx - 1) or drift_y.shape[1:] != (ny - 1, nx):
        raise ValueError(
            f"`drift_x` and `drift_y` hold one value per face of {ny} × {nx} cells, (groups, {ny}, {nx - 1}) and "
            f"(groups, {ny - 1}, {nx}), got {drift_x.shape} and {drift_y.shape}."
        )
    solver, inside, pattern = choose(linear), area > 0, five_point(*area.shape)
    rate = rates(Faces(drift_x, drift_y), inside)
    first = _resolvent(solver, pattern, rate, area)
    groups = first.shape[0]
    analysis = solver.analyse(pattern)
    pinned = Pinned(solver, pattern, analysis, jnp.argmax(first.reshape(groups, -1), axis=1))
    factor = solver.factor(pattern, analysis, pinned_values(pattern, rate, pinned.pin, inside))
    null = pinned.null(factor, first.shape)
    solver.release(analysis, factor, null)
    # Wells too deep for each other in double precision overflow; what stays in them from everywhere does not.
    density = jnp.where(jnp.isfinite(null).all((1, 2), keepdims=True), null, first)
    return density / (density * area[None]).sum((1, 2), keepdims=True)


def _resolvent(
    solver: Linear, pattern: Pattern, rate: Rates, area: Float[Array, "ny nx"]
) -> Float[Array, "groups ny nx"]:
    """Density of animals that are now and then put down anywhere: (M + r A) u = r A/ΣA.

    Positive and of mass 1 whatever the drift; close to the null vector where groups mix faster than r, which is 1e−10
    of the fastest rate and so stands out from rounding.
    """
    values = matrix_values(pattern, rate, area > 0)
    anew = 1e-10 * values.max(1, keepdims=True) * (area / area.max()).reshape(1, -1)
    values = values + jnp.where(jnp.asarray(pattern.row == pattern.column)[None], anew[:, pattern.row], 0.0)
    right = anew / area.sum()
    analysis = solver.analyse(pattern)
    factor = solver.factor(pattern, analysis, values)
    flat = solver.solve(pattern, analysis, factor, right, False)
    solver.release(analysis, factor, flat)
    return flat.reshape(-1, *area.shape)
