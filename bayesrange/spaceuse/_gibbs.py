"""Steady state where every drift is a gradient: a Gibbs law, and a fixed point without a matrix.

u_i = exp(−βρ_i + Σ γ_k h_k − α F̃_i[u]) / Z_i. The unknown is F̃, which is as smooth as perception makes it. The
discrete law is exact at any cell size: it is the state of zero flux on every edge of the `flux` solver too.
"""

import jax
import jax.numpy as jnp
from jaxtyping import Array, Float

from bayesrange.spaceuse._fixed_point import TOLERANCE, implicit_fixed_point
from bayesrange.spaceuse._scent import foreign_scent
from bayesrange.spaceuse._solution import Solution, result_code
from bayesrange.spaceuse._terms import Parameters, Setting, as_marked, solitary_potential


def gibbs(
    parameters: Parameters,
    setting: Setting,
    coupled: bool = True,
    start: Float[Array, "groups ny nx"] | None = None,
) -> Solution:
    """Steady state of the gradient terms.

    Args:
        parameters: the terms; `retreat` must be 0 (it is not a gradient: use `flux`).
        setting: area, layers, groups.
        coupled: False where no term uses foreign scent: then the law is explicit.
        start: foreign scent to begin from [1]; default: that of groups without neighbours. Only for checks that the
            steady state is the only one.

    Returns:
        The solution; differentiable in `parameters` once (reverse mode).
    """
    domain, setting = setting.domain, as_marked(parameters, setting)
    shape = setting.marking.shape + domain.area.shape
    theta = (solitary_potential(parameters, setting), parameters.avoidance, parameters.over_marking, setting)
    if not coupled or shape[0] == 1:
        zero = jnp.zeros(shape)
        law = _law(zero, theta)
        _, load = foreign_scent(jnp.exp(law), setting.marking, parameters.over_marking, domain)
        residual, steps = jnp.zeros(()), jnp.zeros((), int)
        foreign = zero
    else:

        def step(flat: Float[Array, " n"], theta: tuple) -> Float[Array, " n"]:
            return _perceived(flat.reshape(shape), theta)[0].ravel()

        first = jnp.zeros(shape) if start is None else start
        flat, found = implicit_fixed_point(step, theta, step(first.ravel(), jax.lax.stop_gradient(theta)))
        foreign = flat.reshape(shape)
        law = _law(foreign, theta)
        load = jax.lax.stop_gradient(_perceived(foreign, theta)[1])
        residual, steps = found.residual, found.steps
    code = result_code(law, residual, load, TOLERANCE, domain.inside)
    return Solution(law, jnp.where(domain.inside[None], foreign, 0.0), code, steps, residual, load)


def _law(foreign: Float[Array, "groups ny nx"], theta: tuple) -> Float[Array, "groups ny nx"]:
    """Log density of each group given the foreign scent, normalised over the habitable area."""
    potential, avoidance, _, setting = theta
    domain = setting.domain
    exponent = jnp.where(domain.inside[None], potential - avoidance[:, None, None] * foreign, -jnp.inf)
    top = jax.lax.stop_gradient(exponent.max((1, 2), keepdims=True))
    mass = (jnp.exp(exponent - top) * domain.area[None]).sum((1, 2), keepdims=True)
    return exponent - top - jnp.log(mass)


def _perceived(foreign: Float[Array, "groups ny nx"], theta: tuple) -> tuple[Array, Array]:
    """One step of the fixed point: scent perceived where groups live by the law of `foreign`; and the marking load."""
    setting = theta[3]
    density = jnp.exp(_law(foreign, theta))
    scent, load = foreign_scent(density, setting.marking, theta[2], setting.domain)
    return jnp.where(setting.domain.inside[None], scent, 0.0), load
