"""Groups that come and go: one steady state for each set of groups that are there together.

The parameters are those of the whole time. A group that is not there marks nothing; its own density in such a state is
computed along, so that all states have one shape and one compiled program, and counts nowhere.
"""

import jax.numpy as jnp
from jaxtyping import Array, Float

from bayesrange.inference._range_data import RangeData
from bayesrange.spaceuse import Parameters, Solution


def each_set(parameters: Parameters, data: RangeData) -> tuple[Parameters, Float[Array, "sets groups"]]:
    """The parameters without marking of their own, and the marking n_i A₀ of the groups of each set, 0 of others."""
    assert data.share is not None
    marking = data.setting.marking if parameters.marking is None else parameters.marking
    return parameters._replace(marking=None), jnp.where(jnp.asarray(data.share) > 0, marking, 0.0)


def mean_solution(solutions: Solution, share: Float[Array, "sets groups"]) -> Solution:
    """Densities and scent averaged over the time of each group; of the rest what is worst.

    Args:
        solutions: with a leading axis over sets.
        share: of each group's time in each set.
    """
    weight = jnp.asarray(share)[:, :, None, None]
    return Solution(
        log_density=jnp.log((weight * jnp.exp(solutions.log_density)).sum(0)),
        foreign=(weight * solutions.foreign).sum(0),
        result=solutions.result.max(),
        steps=solutions.steps.sum(),
        residual=solutions.residual.max(),
        load=solutions.load.max(),
    )
