"""What the quadrature of steps does to a posterior: log L with four times the nodes against log L as it was fitted.

The nodes are other ones, so that the difference d over draws is the quadrature's whole error. To first order it shifts
the posterior mean of a parameter θ by cov(θ, d), that is by corr(θ, d) · sd(d) posterior sds.
"""

from typing import Any

import jax
import jax.numpy as jnp
import numpy as np

from bayesrange.inference._memory_data import MemoryData
from bayesrange.inference._memory_tables import TableInput, blocks_of, make_step_data, pad_blocks
from bayesrange.memory import StepData, StepParameters, animal_log_likelihood

MORE = 4
"""How many times the nodes."""
DRAWS = 100
"""Draws of a chain at which the difference is taken, at the most."""

_COMMON = ("encoding_range", "home_eps")


def difference_with_more_nodes(
    program: Any, positions: np.ndarray, data: MemoryData, extra: dict[str, Any]
) -> dict[str, np.ndarray]:
    """Difference log L(4K nodes) − log L(K nodes) at thinned draws of a chain.

    Returns:
        `more_nodes_draw`, indices of the draws, and `more_nodes_difference`.
    """
    every = -(-len(positions) // DRAWS)
    chosen = np.arange(0, len(positions), every)
    places = jax.jit(jax.vmap(program.parameters, in_axes=(0, None)))
    parameters: StepParameters = places(jnp.asarray(positions[chosen]), data)
    total = -np.asarray(_over_draws(parameters, data.steps))
    inputs: TableInput = extra["inputs"]
    most = max(blocks_of(inputs))
    for k in range(len(inputs.animals)):
        own = make_step_data(inputs.only(k), MORE * extra["nodes"], shift=2)
        alone = own._replace(weight=np.asarray(inputs.weight)[k : k + 1])
        total += np.asarray(_over_draws(_of_animal(parameters, k), pad_blocks(alone, most)))
    return {"more_nodes_draw": chosen, "more_nodes_difference": total}


@jax.jit
def _over_draws(parameters: StepParameters, data: StepData) -> jax.Array:
    """Weighted log-likelihood of all animals at each draw, one draw at a time."""
    return jax.lax.map(lambda one: animal_log_likelihood(one, data).sum(), parameters)


def _of_animal(parameters: StepParameters, animal: int) -> StepParameters:
    """The same draws of one animal alone."""
    own = {
        name: value if name in _COMMON else value[:, animal : animal + 1]
        for name, value in parameters._asdict().items()
    }
    return StepParameters(**own)


def shift(draws: np.ndarray, difference: np.ndarray) -> float:
    """Shift of a parameter's posterior mean that the difference implies [posterior sd].

    Args:
        draws: the parameter at the draws of `difference`.
        difference: d.
    """
    spread = draws.std()
    if not spread > 0:
        return 0.0
    return float(np.mean((draws - draws.mean()) * (difference - difference.mean())) / spread)
