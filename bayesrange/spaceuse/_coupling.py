"""How the drift of every group hangs on the densities of all: scent, balance, and the same for the gradient terms.

θ is the pair (parameters, setting). Without coupling the perceived foreign scent is 0 everywhere.
"""

import jax
import jax.numpy as jnp
from jaxtyping import Array, Float

from bayesrange.spaceuse._fixed_point import TOLERANCE, anderson
from bayesrange.spaceuse._gibbs import _law, _perceived
from bayesrange.spaceuse._operator import Terms, drift_terms, face_drift, outflow
from bayesrange.spaceuse._scent import foreign_scent
from bayesrange.spaceuse._terms import Parameters, Setting, solitary_potential

type Theta = tuple[Parameters, Setting]

ROUGH = 1e-4
"""Tolerance of a start that is not the solution."""
CLOSE = 1e-2 * TOLERANCE
"""Tolerance of a start that is: its error in the scent counts α times in the log density."""


def felt_scent(density: Float[Array, "groups ny nx"], theta: Theta, coupled: bool) -> Float[Array, "groups ny nx"]:
    """F̃ [1], 0 outside."""
    parameters, setting = theta
    if not coupled:
        return jnp.zeros_like(density)
    foreign, _ = foreign_scent(density, setting.marking, parameters.over_marking, setting.domain)
    return jnp.where(setting.domain.inside[None], foreign, 0.0)


def balance(
    density: Float[Array, "groups ny nx"], theta: Theta, coupled: bool, terms: Terms | None = None
) -> tuple[Float[Array, "groups ny nx"], Float[Array, " groups"]]:
    """M(F̃(u)) u, which is 0 in the steady state, and the log of each group's mass, which is 0 for a density.

    In a loop over densities pass the `drift_terms` of θ, made once.
    """
    parameters, setting = theta
    scent = jax.lax.optimization_barrier(felt_scent(density, theta, coupled))
    drift = jax.lax.optimization_barrier(
        face_drift(scent, drift_terms(parameters, setting) if terms is None else terms)
    )
    mass = (density * setting.domain.area[None]).sum((1, 2))
    return outflow(drift, density, setting.domain.inside), jnp.log(mass)


def gradient_state(theta: Theta, coupled: bool) -> tuple[Float[Array, "groups ny nx"], Float[Array, "groups ny nx"]]:
    """Log density and scent of the Gibbs law of all terms but `retreat`: the solution where that is 0."""
    gradient = _gradient_terms(theta)
    zero = jnp.zeros(gradient[0].shape)
    if not coupled:
        return _law(zero, gradient), zero

    def step(flat: Array) -> Array:
        return _perceived(flat.reshape(zero.shape), gradient)[0].ravel()

    first = step(zero.ravel())
    go_on = lambda: anderson(step, first, _tolerance(theta)).value  # noqa: E731
    foreign = jax.lax.cond(jnp.any(theta[0].avoidance != 0), go_on, lambda: first).reshape(zero.shape)
    return _law(foreign, gradient), foreign


def gradient_adjoint(
    theta: Theta, coupled: bool, log_density: Float[Array, "groups ny nx"], above: Float[Array, "groups ny nx"]
) -> Float[Array, "groups ny nx"]:
    """μ = ḡ + (∂ law of the scent of u / ∂ log u)ᵀ μ, the adjoint of the gradient terms, ḡ = `above`."""
    if not coupled:
        return above
    gradient, outside = _gradient_terms(theta), ~theta[1].domain.inside[None]
    _, pull = jax.vjp(lambda log_u: _law(felt_scent(jnp.exp(log_u), theta, True), gradient), log_density)

    def step(flat: Array) -> Array:
        return (above + jnp.where(outside, 0.0, pull(flat.reshape(above.shape))[0])).ravel()

    go_on = lambda: anderson(step, above.ravel(), _tolerance(theta)).value  # noqa: E731
    return jax.lax.cond(jnp.any(theta[0].avoidance != 0), go_on, above.ravel).reshape(above.shape)


def _gradient_terms(theta: Theta) -> tuple:
    parameters, setting = theta
    return solitary_potential(parameters, setting), parameters.avoidance, parameters.over_marking, setting


def _tolerance(theta: Theta) -> Float[Array, ""]:
    return jnp.where(jnp.all(theta[0].retreat == 0), CLOSE, ROUGH)
