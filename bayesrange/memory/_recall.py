"""Recall over the area at one moment: what an animal remembers of each place, from 0 (nothing) to 1 (everything).

Units: km, h.
"""

import jax
import jax.numpy as jnp
from jaxtyping import Array, Float

from bayesrange.memory._blocks import StepData
from bayesrange.memory._likelihood import StepParameters, traces


def recall_surfaces(
    parameters: StepParameters, surface: Float[Array, "animals cells columns"], data: StepData
) -> tuple[Float[Array, "animals cells"], Float[Array, "animals cells"]]:
    """Recall ρ(R) of the reference memory and ρ(W) of the working memory, ρ(M) = M/(M + m₀).

    Args:
        parameters: of every animal.
        surface: table of the past at the cells at the moment that is meant, from `tabulate` [h].
        data: whose bases the table was made with.
    """
    log_range = jnp.log(parameters.encoding_range)

    def one(table: Array, reference: Array, working: Array, half: Array) -> Array:
        log_decay = jnp.log(jnp.stack([reference, working]))
        trace = jnp.maximum(traces(table, log_decay, log_range, data.decay_basis, data.range_basis), 0.0)
        return trace / (trace + half)

    recall = jax.vmap(one)(
        surface, parameters.reference_decay, parameters.working_decay, jnp.asarray(parameters.recall_half)
    )
    return recall[..., 0], recall[..., 1]
