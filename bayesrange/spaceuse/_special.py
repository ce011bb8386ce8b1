"""Bernoulli's function, which weighs the two cells of an exponentially fitted flux.

B(z) = z/(eᶻ − 1): 1 at 0, −z far left, z e^(−z) far right. Source: Scharfetter & Gummel (1969), IEEE Trans. Electron
Devices 16:64; the series is the one of the Bernoulli numbers (Abramowitz & Stegun 1964, 23.1.1).
"""

import jax
import jax.numpy as jnp
from jaxtyping import Array, Float

SMALL = 0.25
"""|z| below which the series is summed: its first left-out term is 3e−19 there, and the closed form loses 3 bits."""

STEEPEST = 600.0
"""|z| from which B is held at B(600) ≈ 1e−258. Beyond it two neighbouring cells no longer know each other in double
precision, and a matrix with true zeros can be singular. Who reaches it must say so (`TOO_STEEP`)."""

_EVEN = (1 / 12, -1 / 720, 1 / 30240, -1 / 1209600, 1 / 47900160)
"""Coefficients of z², z⁴, … z¹⁰ in B."""


def _series(square: Float[Array, "*shape"]) -> tuple[Float[Array, "*shape"], Float[Array, "*shape"]]:
    """Even part of B beyond 1, and its derivative divided by z."""
    value, slope = jnp.zeros_like(square), jnp.zeros_like(square)
    for power, coefficient in reversed(list(enumerate(_EVEN, start=1))):
        value = (value + coefficient) * square
        slope = slope * square + 2 * power * coefficient
    return value, slope


def _right(size: Float[Array, "*shape"]) -> tuple[Float[Array, "*shape"], Float[Array, "*shape"]]:
    """B and B′ at z = size ≥ 0."""
    even, slope = _series(jnp.minimum(size, SMALL) ** 2)
    near, near_slope = 1 - 0.5 * size + even, size * slope - 0.5
    far_size = jnp.clip(size, SMALL, STEEPEST)  # keeps 0/0 out of the branch that is not taken
    decay = jnp.exp(-far_size)
    far = far_size * decay / (1 - decay)
    far_slope = far * (1 - far_size - far) / far_size
    small = size < SMALL
    return jnp.where(small, near, far), jnp.where(small, near_slope, far_slope)


@jax.custom_jvp
def bernoulli(z: Float[Array, "*shape"]) -> Float[Array, "*shape"]:
    """B(z) to a few ulps, B(−a) = a + B(a), with finite derivatives everywhere.

    Above z = 600 the value stays at B(600), see `STEEPEST`.
    """
    return _right(jnp.abs(z))[0] + jnp.maximum(-z, 0.0)


@bernoulli.defjvp
def _bernoulli_jvp(primals: tuple, tangents: tuple) -> tuple[Array, Array]:
    (z,), (dz,) = primals, tangents
    value, slope = _right(jnp.abs(z))
    left = z < 0
    return value + jnp.maximum(-z, 0.0), jnp.where(left, -1 - slope, slope) * dz
