"""Derivative of the steady state of `flux`: one adjoint fixed point on the factor of the forward solve.

The forward step is x ↦ T(x, θ), x the log densities: u less M⁰⁻¹ M u, then mass 1. What depends on x with derivative ḡ
depends on θ with derivative T_θᵀ μ, μ = ḡ + T_xᵀ μ. The factor M⁰ changes the number of steps, not the result.
"""

from typing import Any

import jax
import jax.numpy as jnp
from jaxtyping import Array, Float

from bayesrange.spaceuse._coupling import Theta, balance, gradient_adjoint
from bayesrange.spaceuse._fixed_point import anderson
from bayesrange.spaceuse._operator import drift_terms
from bayesrange.spaceuse._pinned import Pinned

FAINT = 1e-280
"""Densities below this share of the pinned cell's count as 0: quotients of them are no longer numbers."""
TOLERANCE = 1e-7
"""Relative residual of μ; the gradient inherits it, and 1e−5 is what its users ask for."""
STEPS = 60
"""As many as two factors of the forward solve may take."""


def quotient(
    value: Float[Array, "groups ny nx"], density: Float[Array, "groups ny nx"]
) -> Float[Array, "groups ny nx"]:
    """value/density, 0 where nobody is."""
    somebody = density > FAINT
    return jnp.where(somebody, value / jnp.where(somebody, density, 1.0), 0.0)


def adjoint(
    theta: Theta,
    coupled: bool,
    pinned: Pinned,
    factor: Any,
    log_density: Float[Array, "groups ny nx"],
    from_above: Float[Array, "groups ny nx"],
) -> tuple[Theta, Float[Array, "groups ny nx"]]:
    """θ̄, and the result of the last solve.

    Where the adjoint misses its tolerance the derivative is NaN, so that a sampler rejects the point instead of
    following a wrong slope.

    Args:
        theta: parameters and setting.
        coupled: as in `flux`.
        pinned: solver, pattern and pinned cells.
        factor: of the forward solve.
        log_density: the steady state, −inf outside.
        from_above: ḡ, derivative by the log densities.
    """
    u = jnp.exp(log_density)
    share = u * theta[1].domain.area[None]
    above = jnp.where(u > FAINT, from_above, 0.0)
    size = jnp.maximum(jnp.abs(above).max(), 1e-300)
    above = above / size
    terms = drift_terms(*theta)
    _, pull = jax.vjp(lambda u: balance(u, theta, coupled, terms)[0], u)

    def duals(mu: Array) -> tuple[Array, Array]:
        centred = mu - share * mu.sum((1, 2), keepdims=True)  # transpose of "mass back to 1"
        return centred, pinned.solve_transposed(factor, quotient(centred, u))

    def step(flat: Array) -> Array:
        centred, dual = duals(flat.reshape(u.shape))
        return (above + centred - u * pull(dual)[0]).ravel()

    start = gradient_adjoint(theta, coupled, log_density, above)
    found = anderson(step, start.ravel(), tolerance=TOLERANCE, max_steps=STEPS)
    mu = found.value.reshape(u.shape)
    _, dual = duals(mu)
    trusted = jnp.where(found.residual <= 100 * TOLERANCE, size, jnp.nan)
    _, pull_theta = jax.vjp(lambda theta: balance(u, theta, coupled), theta)
    return pull_theta((-dual * trusted, -mu.sum((1, 2)) * trusted))[0], dual
