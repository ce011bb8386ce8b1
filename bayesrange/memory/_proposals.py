"""Steps drawn from the movement kernel, many at once, so that the simulator can accept one of them.

Gamma lengths by Marsaglia & Tsang (2000), von Mises turns by Best & Fisher (1979), each tried once: a try that fails
is marked not valid instead of drawn again, and the exact law is that of the valid ones. Steps longer than `reach` come
from a branch of their own with as many tries as its higher ceiling asks for (docs/mathematics): a distant place
that attracts an animal strongly then does not make every nearby step wait for it.
"""

from typing import NamedTuple

import jax
import jax.numpy as jnp
from jax.scipy.special import gammaln
from jaxtyping import Array, Bool, Float


class Kernel(NamedTuple):
    """Gamma steps × von Mises turns, with what the draws need of them (a pytree of scalars).

    Attributes:
        shape: of the gamma steps.
        concentration: of the turns; below 0 the animal turns round.
        reach: length at which the branch of long steps begins [scales].
        log_odds: log odds of a try of a long step against one of a near step, where both have the same ceiling.
    """

    shape: Float[Array, ""]
    concentration: Float[Array, ""]
    reach: Float[Array, ""]
    log_odds: Float[Array, ""]


class Proposals(NamedTuple):
    """Tries of one step.

    Attributes:
        length: in units of the kernel's scale.
        cos_turn: cosine of the angle with the direction before.
        sin_turn: its sine.
        long: drawn from the branch of steps longer than the reach.
        valid: counts as a draw from the kernel.
        log_chance: log of a uniform number, for acceptance against the ceiling of the try's branch.
    """

    length: Float[Array, " tries"]
    cos_turn: Float[Array, " tries"]
    sin_turn: Float[Array, " tries"]
    long: Bool[Array, " tries"]
    valid: Bool[Array, " tries"]
    log_chance: Float[Array, " tries"]


def make_kernel(
    shape: Float[Array, ""], concentration: Float[Array, ""], reach: Float[Array, ""] | None = None
) -> Kernel:
    """Kernel with a reach that about one step in a thousand passes, unless another is given [scales].

    A near try is valid with probability v, the acceptance rate of its gamma draw; a long one has the density
    λ e^{−λ(r − q)} times a chance that leaves λ g(r)/g(q), q the reach, g the gamma density. Odds of
    v g(q)/λ (× the ratio of the ceilings) make both parts of one kernel.
    """
    q = shape + 3.0 * jnp.sqrt(shape) + 3.0 if reach is None else reach
    log_density = (shape - 1.0) * jnp.log(q) - q - gammaln(shape)
    lifted = jnp.where(shape < 1.0, shape + 1.0, shape)
    d = lifted - 1.0 / 3.0
    log_valid = d + 0.5 * jnp.log(d / (2.0 * jnp.pi)) + gammaln(lifted) - lifted * jnp.log(d)
    return Kernel(shape, concentration, q, log_valid + log_density - jnp.log(_rate(shape, q)))


def propose(
    key: Array, tries: int, kernel: Kernel, log_ceilings: Float[Array, ""], heading_known: Bool[Array, ""]
) -> Proposals:
    """Independent tries of a step.

    Args:
        key: JAX key.
        tries: how many.
        kernel: what to draw from.
        log_ceilings: log of the ceiling for long steps less that for near ones, >= 0.
        heading_known: whether there is a direction before; if not, the turn is uniform.
    """
    for_normal, for_uniform = jax.random.split(key)
    normal = jax.random.normal(for_normal, (tries,))
    branch, first, second, angle, third, last = 1.0 - jax.random.uniform(for_uniform, (6, tries))  # in (0, 1]
    long = branch <= jax.nn.sigmoid(kernel.log_odds + log_ceilings)
    near_length, near_valid = _near_steps(normal, jnp.log(first), second, kernel)
    long_length, long_valid = _long_steps(jnp.log(first), second, kernel)
    cos_turn, turn_valid = _turns(angle, jnp.log(third), kernel.concentration, heading_known)
    sin_turn = jnp.sqrt(jnp.maximum(1.0 - cos_turn**2, 0.0)) * jnp.where(angle < 0.5, 1.0, -1.0)
    length, valid = jnp.where(long, long_length, near_length), jnp.where(long, long_valid, near_valid)
    return Proposals(length, cos_turn, sin_turn, long, valid & turn_valid, jnp.log(last))


def _rate(shape: Float[Array, ""], reach: Float[Array, ""]) -> Float[Array, ""]:
    """Rate λ of the exponential that lies above the gamma density's tail and touches it at the reach [1/scale]."""
    return 1.0 - jnp.maximum(shape - 1.0, 0.0) / reach


def _near_steps(
    normal: Float[Array, " tries"], log_chance: Float[Array, " tries"], lift: Float[Array, " tries"], kernel: Kernel
) -> tuple[Float[Array, " tries"], Bool[Array, " tries"]]:
    """Gamma lengths up to the reach; shapes below 1 from the next higher one (Marsaglia & Tsang 2000, section 6)."""
    lifted = jnp.where(kernel.shape < 1.0, kernel.shape + 1.0, kernel.shape)
    d = lifted - 1.0 / 3.0
    cubed = (1.0 + normal / jnp.sqrt(9.0 * d)) ** 3
    positive = cubed > 0
    v = jnp.where(positive, cubed, 1.0)
    accepted = log_chance < 0.5 * normal**2 + d * (1.0 - v + jnp.log(v))
    length = d * v * jnp.where(kernel.shape < 1.0, lift ** (1.0 / kernel.shape), 1.0)
    return length, positive & accepted & (length <= kernel.reach)


def _long_steps(
    log_chance: Float[Array, " tries"], spacing: Float[Array, " tries"], kernel: Kernel
) -> tuple[Float[Array, " tries"], Bool[Array, " tries"]]:
    """Gamma lengths beyond the reach, from an exponential above the tail."""
    beyond = -jnp.log(spacing) / _rate(kernel.shape, kernel.reach)
    ratio = beyond / kernel.reach
    power = kernel.shape - 1.0
    return kernel.reach + beyond, log_chance < power * jnp.log1p(ratio) - jnp.maximum(power, 0.0) * ratio


def _turns(
    angle: Float[Array, " tries"], log_chance: Float[Array, " tries"],
    concentration: Float[Array, ""], heading_known: Bool[Array, ""],
) -> tuple[Float[Array, " tries"], Bool[Array, " tries"]]:  # fmt: skip
    """Cosines of von Mises turns from a wrapped Cauchy law; uniform turns where there is no direction before.

    With c = κ(s − cos), the ratio of the two densities is c e^{1 − c} for any s > 1: s decides only how many are valid.
    """
    z = jnp.cos(2.0 * jnp.pi * angle)
    turning = heading_known & (concentration != 0)
    kappa = jnp.where(turning, jnp.abs(concentration), 1.0)
    t = 1.0 + jnp.sqrt(1.0 + 4.0 * kappa**2)
    rho = (t - jnp.sqrt(2.0 * t)) / (2.0 * kappa)
    s = jnp.where(kappa > 1e-3, (1.0 + rho**2) / (2.0 * rho), 1.0 / kappa + kappa)
    cosine = (1.0 + s * z) / (s + z)
    c = kappa * (s - cosine)
    accepted = log_chance < jnp.log(c) + 1.0 - c
    return jnp.where(turning, jnp.sign(concentration) * cosine, z), ~turning | accepted
