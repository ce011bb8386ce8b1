"""Densities of step length and turn, and the chance that a step is short.

Gamma lengths [km], von Mises turns [rad] about straight on. JAX, double precision, finite derivatives everywhere.
"""

import jax
import jax.numpy as jnp
from jax.scipy.special import gammaln, i0e, i1e
from jaxtyping import Array, Bool, Float

LONGEST_SERIES = 2_000
"""Most terms of the series of `log_short_chance`; 60 are enough where the short length is below ten scales."""


@jax.custom_jvp
def log_bessel(concentration: Float[Array, "*shape"]) -> Float[Array, "*shape"]:
    """Log I₀(κ), even in κ, without overflow."""
    return jnp.log(i0e(concentration)) + jnp.abs(concentration)


@log_bessel.defjvp
def _log_bessel_jvp(primals: tuple, tangents: tuple) -> tuple[Array, Array]:
    (concentration,), (change,) = primals, tangents  # the slope of |κ| alone is 1 at 0 here, not 0
    return log_bessel(concentration), i1e(concentration) / i0e(concentration) * change


def log_step_density(
    length: Float[Array, " steps"],
    cos_turn: Float[Array, " steps"],
    turn_known: Bool[Array, " steps"],
    shape: Float[Array, ""],
    log_scale: Float[Array, " steps"],
    concentration: Float[Array, ""],
) -> Float[Array, " steps"]:
    """Log of the movement kernel on the plane, Gamma(r)/r × vonMises(turn) [log 1/km²]; turn uniform where unknown.

    Args:
        length: r > 0 [km].
        cos_turn: cosine of the turn.
        turn_known: where it is known.
        shape: of the gamma law.
        log_scale: log of its scale, step by step [log km].
        concentration: of the von Mises law.
    """
    log_gamma = (shape - 2) * jnp.log(length) - length * jnp.exp(-log_scale) - gammaln(shape) - shape * log_scale
    turning = jnp.where(turn_known, concentration * cos_turn - log_bessel(concentration), 0.0)
    return log_gamma + turning - jnp.log(2 * jnp.pi)


def log_short_chance(shape: Float[Array, ""], log_ratio: Float[Array, " steps"]) -> Float[Array, " steps"]:
    """Log P(r < shortest) of a gamma law, by the convergent series of the incomplete gamma function.

    P(a, x) = xᵃ e⁻ˣ / Γ(a + 1) · Σₙ xⁿ / ((a + 1) … (a + n)) (Abramowitz & Stegun 1964, 6.5.29). JAX's own incomplete
    gamma function is slower by far, and so is its derivative in the shape.

    Args:
        shape: a > 0.
        log_ratio: log x, x = shortest / scale. Held where P is 1 to rounding, x = a + 10√a + 50.
    """
    log_x = jnp.minimum(log_ratio, jnp.log(shape + 10 * jnp.sqrt(shape) + 50))
    x = jnp.exp(log_x)
    chance = shape * log_x - x - gammaln(shape + 1) + _log_series(jnp.broadcast_to(shape, x.shape), x)
    return jnp.minimum(chance, 0.0)


@jax.custom_jvp
def _log_series(shape: Float[Array, " steps"], x: Float[Array, " steps"]) -> Float[Array, " steps"]:
    """Log Σₙ xⁿ / ((a + 1) … (a + n))."""
    return jnp.log(_series(shape, x)[0])


@_log_series.defjvp
def _log_series_jvp(primals: tuple, tangents: tuple) -> tuple[Array, Array]:
    shape, x = primals
    total, by_shape, by_x = _series(shape, x)
    return jnp.log(total), (by_shape * tangents[0] + by_x * tangents[1]) / total


def _series(shape: Float[Array, " steps"], x: Float[Array, " steps"]) -> tuple[Array, Array, Array]:
    """The sum, and its derivatives in a and x; summed until no step gains a rounding."""

    def more(state: tuple) -> Array:
        n, term, _, total, _, _ = state
        return (n < LONGEST_SERIES) & jnp.any((term > 1e-17 * total) | (n < x))

    def add(state: tuple) -> tuple:
        n, term, harmonic, total, by_shape, by_x = state
        n = n + 1
        by_x = by_x + term * n / (shape + n)  # d(xⁿ)/dx = n xⁿ⁻¹
        term = term * x / (shape + n)
        harmonic = harmonic + 1 / (shape + n)
        return n, term, harmonic, total + term, by_shape - term * harmonic, by_x

    one, zero = jnp.ones_like(x), jnp.zeros_like(x)
    return jax.lax.while_loop(more, add, (jnp.zeros((), x.dtype), one, zero, one, zero, zero))[3:]
