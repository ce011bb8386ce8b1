"""Steady state of any drift: finite volumes, one sparse factor per group, and a fixed point on the log densities.

The unknown is x = log(u/û), û the null vector of the balance matrix M⁰ at the scent of a start. One step takes
M⁰⁻¹ M(F̃(u)) u off u and puts the mass back to 1. Anderson acceleration does the rest; only what stalls factorises
again. The start is the Gibbs law of the terms that are gradients, a function of θ alone; without `retreat` it is the
solution, because the fluxes are exact for gradients. Steps: 10 to 15 as a rule, 30 where homes nearly coincide.
"""

from functools import partial
from typing import Any, NamedTuple

import jax
import jax.numpy as jnp
from jaxtyping import Array, Float, Int

from bayesrange.spaceuse._coupling import Theta, balance, felt_scent, gradient_state
from bayesrange.spaceuse._fixed_point import TOLERANCE, Iteration, anderson
from bayesrange.spaceuse._flux_adjoint import FAINT, adjoint, quotient
from bayesrange.spaceuse._operator import Faces, Terms, drift_terms, face_drift, rates, steepest
from bayesrange.spaceuse._pinned import Pinned
from bayesrange.spaceuse._scent import foreign_scent
from bayesrange.spaceuse._solution import NO_STEADY_SCENT, NOT_FINITE, TOO_STEEP, Solution, result_code
from bayesrange.spaceuse._sparse import Linear, choose, five_point, pinned_values
from bayesrange.spaceuse._special import STEEPEST
from bayesrange.spaceuse._terms import Parameters, Setting, as_marked

ROUNDS = 5
"""Factors made before a solve is given up; over the prior 3 were needed, 4 from groups without neighbours."""
STEPS = 30
"""Steps on one factor: what needs more gains by a new one."""
STARTS = ("gibbs", "uncoupled")


class Found(NamedTuple):
    """Log densities, their scent, and how they were found (a pytree of arrays)."""

    log_density: Float[Array, "groups ny nx"]
    foreign: Float[Array, "groups ny nx"]
    steps: Int[Array, ""]
    residual: Float[Array, ""]
    rounds: Int[Array, ""]


@partial(jax.jit, static_argnames=("coupled", "linear", "start"))
def flux(
    parameters: Parameters, setting: Setting, coupled: bool = True, linear: str | None = None, start: str = "gibbs"
) -> Solution:
    """Steady state of any drift.

    Args:
        parameters: the terms.
        setting: area, layers, groups. The cells inside must be connected.
        coupled: False where no term uses foreign scent.
        linear: sparse solver, "klu" or "superlu"; default: klu where klujax is installed.
        start: "gibbs", the law of the gradient terms, or "uncoupled", groups without neighbours (slower; what it
            finds owes nothing to the `gibbs` solver).

    Returns:
        The solution; differentiable in `parameters` once (reverse mode). Its `residual` is relative to the range of the
        log densities.

    Raises:
        ValueError: an unknown name in `linear` or `start`, or "klu" that is not installed.
    """
    if start not in STARTS:
        raise ValueError(f"`start` must be one of {', '.join(STARTS)}, got {start!r}.")
    setting = as_marked(parameters, setting)
    domain, theta = setting.domain, (parameters, setting)
    coupled = coupled and setting.marking.shape[0] > 1
    log_density, found = _log_density(theta, choose(linear), coupled, start)
    scent, load = foreign_scent(jnp.exp(log_density), setting.marking, parameters.over_marking, domain)
    foreign = jnp.where(domain.inside[None], scent, 0.0) if coupled else jnp.zeros_like(scent)
    code = result_code(log_density, found.residual, load, TOLERANCE, domain.inside)
    steep = steepest(face_drift(found.foreign, drift_terms(parameters, setting)), domain.inside)
    worse = (code == NO_STEADY_SCENT) | (code == NOT_FINITE)
    code = jnp.where((steep > STEEPEST) & ~worse, TOO_STEEP, code)
    return Solution(log_density, foreign, code, found.steps, found.residual, load)


def _log_density(theta: Theta, linear: Linear, coupled: bool, start: str) -> tuple[Array, Found]:
    """Log densities, differentiable in θ, and how they were found (not differentiable)."""

    @jax.custom_vjp
    def solve(theta: Theta) -> tuple[Array, Found]:
        found, pinned, factor = _iterate(theta, linear, coupled, start)
        linear.release(pinned.analysis, factor, found.log_density)
        return found.log_density, found

    def forward(theta: Theta) -> tuple[tuple[Array, Found], tuple]:
        found, pinned, factor = _iterate(theta, linear, coupled, start)
        return (found.log_density, found), (theta, pinned.analysis, pinned.pin, factor, found.log_density)

    def backward(kept: tuple, cotangent: tuple) -> tuple[Theta]:
        theta, analysis, pin, factor, log_density = kept
        pinned = Pinned(linear, five_point(*log_density.shape[1:]), analysis, pin)
        theta_bar, last = adjoint(theta, coupled, pinned, factor, log_density, cotangent[0])
        linear.release(analysis, factor, last)
        return (theta_bar,)

    solve.defvjp(forward, backward)
    return solve(theta)


def _iterate(theta: Theta, linear: Linear, coupled: bool, start: str) -> tuple[Found, Pinned, Any]:
    """What was found, and what it was found with, to be released by the caller."""
    inside, terms = theta[1].domain.inside, drift_terms(*theta)
    law, foreign = gradient_state(theta, coupled and start == "gibbs")
    pattern = five_point(*inside.shape)
    analysis = linear.analyse(pattern)
    pinned = Pinned(linear, pattern, analysis, jnp.argmax(law.reshape(law.shape[0], -1), axis=1))
    too_steep = steepest(face_drift(foreign, terms), inside) > STEEPEST  # then the start is all there is
    first_steps = 0 if coupled and start == "uncoupled" else STEPS  # there it only looks where groups would be

    def values(foreign: Array) -> Array:
        drift = Faces(*(jnp.where(too_steep, 0.0, w) for w in face_drift(foreign, terms)))
        return pinned_values(pattern, rates(drift, inside), pinned.pin, inside)

    def unfinished(state: tuple[Found, Any]) -> Array:
        return (state[0].rounds < ROUNDS) & (state[0].residual > TOLERANCE) & ~too_steep

    def advance(state: tuple[Found, Any]) -> tuple[Found, Any]:
        found, factor = state
        first = found.rounds == 0
        anew = lambda: linear.refactor(pattern, analysis, factor, values(found.foreign))  # noqa: E731
        factor = jax.lax.cond(first, lambda: factor, anew)
        log_density, ended = _on_one_factor(theta, coupled, terms, pinned, factor, jnp.where(first, first_steps, STEPS))
        foreign = felt_scent(jnp.exp(log_density), theta, coupled)
        return Found(log_density, foreign, found.steps + ended.steps, ended.residual, found.rounds + 1), factor

    none = jnp.zeros((), int)
    begin = Found(law, foreign, none, jnp.asarray(jnp.inf), none)
    factor = linear.factor(pattern, analysis, values(foreign))
    found, factor = jax.lax.while_loop(unfinished, advance, (begin, factor))
    return found, pinned, factor


def _on_one_factor(
    theta: Theta, coupled: bool, terms: Terms, pinned: Pinned, factor: Any, max_steps: Int[Array, ""]
) -> tuple[Float[Array, "groups ny nx"], Iteration]:
    """Log densities after at most `max_steps` with one factor, from the null vector of its matrix."""
    area = theta[1].domain.area[None]
    shape = (theta[1].marking.shape[0], *area.shape[1:])
    null = pinned.null(factor, shape)
    null = jnp.where(null > FAINT, null, 0.0)

    def normal(x: Array) -> Array:
        return x - jnp.log((null * jnp.exp(x) * area).sum((1, 2), keepdims=True))

    def step(flat: Array) -> Array:
        x = flat.reshape(shape)
        u = null * jnp.exp(x)
        change = pinned.solve(factor, balance(u, theta, coupled, terms)[0])
        return normal(x - jnp.clip(quotient(change, u), -1.0, 1.0)).ravel()

    log_null = jnp.where(null > 0, jnp.log(jnp.where(null > 0, null, 1.0)), -jnp.inf)
    span = 1.0 - log_null.min(initial=0.0, where=null > 0)
    ended = anderson(step, normal(jnp.zeros(shape)).ravel(), max_steps=max_steps, size=span)
    return log_null + ended.value.reshape(shape), ended
