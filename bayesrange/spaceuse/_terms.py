"""Drift terms: how home, resources and foreign scent move an animal.

All but `retreat` are gradients of a potential per unit diffusion, so that the steady state is a Gibbs law (Holgate
1971; Okubo 1980; Moorcroft & Lewis 2006). Units: km; potentials are pure numbers; foreign scent has mean 1 over the
area (`mathematics` in docs/). A new term is one function here and one line in a model card.
"""

from typing import NamedTuple

import jax.numpy as jnp
from jaxtyping import Array, Float

from bayesrange.spaceuse._domain import Domain


class Parameters(NamedTuple):
    """Parameters of the steady state, one value per group (a pytree of arrays).

    Attributes:
        localising: β, constant pull towards the home centre [1/km].
        retreat: κ, extra pull home per unit foreign scent [1/km].
        avoidance: α, movement down the gradient of foreign scent [1].
        resource: γ, movement up the gradient of each layer [per sd].
        over_marking: m, extra marking per unit foreign scent [1].
        home: home centres, x and y [km].
        marking: n_i A₀ where the number of animals is sampled [km²]; None: as the setting has it.
    """

    localising: Float[Array, " groups"]
    retreat: Float[Array, " groups"]
    avoidance: Float[Array, " groups"]
    resource: Float[Array, "layers groups"]
    over_marking: Float[Array, ""]
    home: Float[Array, "groups 2"]
    marking: Float[Array, " groups"] | None = None


class Setting(NamedTuple):
    """What is known about the area and the groups (a pytree of arrays).

    Attributes:
        domain: the cells.
        layers: standardised layers (mean 0, sd 1 over the habitable area of the fitted study); finite everywhere.
        marking: n_i A₀, animals of each group times the area per animal of the fitted study [km²].
        softening: ε of ρ = √(r² + ε²), half a cell [km].
    """

    domain: Domain
    layers: Float[Array, "layers ny nx"]
    marking: Float[Array, " groups"]
    softening: Float[Array, ""]


def as_marked(parameters: Parameters, setting: Setting) -> Setting:
    """The setting with the marking that the parameters have, if they have any."""
    return setting if parameters.marking is None else setting._replace(marking=parameters.marking)


def home_distance(home: Float[Array, "groups 2"], setting: Setting) -> Float[Array, "groups ny nx"]:
    """ρ = √(|x − c|² + ε²), smooth at the home centre so that c can be sampled [km]."""
    domain = setting.domain
    dx = domain.x[None, None, :] - home[:, 0, None, None]
    dy = domain.y[None, :, None] - home[:, 1, None, None]
    return jnp.sqrt(dx**2 + dy**2 + setting.softening**2)


def solitary_potential(parameters: Parameters, setting: Setting) -> Float[Array, "groups ny nx"]:
    """Potential of the terms that need no neighbours: −βρ + Σ γ_k h_k [1]."""
    pull = -parameters.localising[:, None, None] * home_distance(parameters.home, setting)
    return pull + jnp.einsum("kg,kyx->gyx", parameters.resource, setting.layers)
