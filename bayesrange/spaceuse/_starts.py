"""Other starts for the fixed point, to look for a second steady state."""

from collections.abc import Sequence

import jax.numpy as jnp
from jaxtyping import Array, Float

from bayesrange.spaceuse._gibbs import gibbs
from bayesrange.spaceuse._scent import perceive
from bayesrange.spaceuse._terms import Parameters, Setting, as_marked


def arrival_scent(parameters: Parameters, setting: Setting, order: Sequence[int]) -> Float[Array, "groups ny nx"]:
    """Foreign scent where groups arrive one after another, each settling among the marks of those before it.

    With strong coupling the first to arrive holds the ground: if a parameter set has several steady states, different
    orders of arrival find them.

    Args:
        parameters: drift terms; `retreat` and `over_marking` are left out of the start.
        setting: area, layers, groups.
        order: indices of the groups in their order of arrival.

    Returns:
        F̃ to begin from [1].
    """
    domain, setting = setting.domain, as_marked(parameters, setting)
    laid = jnp.zeros(domain.area.shape)
    scent = [laid] * len(order)
    for i in order:
        alone = Parameters(
            parameters.localising[i][None], jnp.zeros(1), jnp.ones(1), parameters.resource[:, i][:, None],
            jnp.zeros(()), parameters.home[i][None],
        )  # fmt: skip
        among = setting._replace(
            marking=setting.marking[i][None],
            layers=jnp.concatenate([setting.layers, -(parameters.avoidance[i] * laid)[None]]),
        )
        law = gibbs(alone._replace(resource=jnp.concatenate([alone.resource, jnp.ones((1, 1))])), among, coupled=False)
        scent[i] = perceive(setting.marking[i] * law.density, domain)[0]
        laid = laid + scent[i]
    return jnp.stack([laid - own for own in scent])
