"""Why transitions diverged: replay them and look for steady states that were not found.

NUTS keeps nothing of the points it rejects, and a compiled program that calls back to Python cannot be cached. So
transitions that diverged are run again from their recorded state with a log-density that reports where it was infinite.
"""

from typing import Any

import jax
import jax.numpy as jnp
import numpy as np
from numpyro.infer.hmc import hmc

from bayesrange.inference._models import Data
from bayesrange.inference._program import MAX_TREE_DEPTH, Program, Whitening

MOST = 50
"""Divergent transitions that are replayed at the most, the first of the chain; beyond that the run is lost anyway."""


def failed_solves(program: Program, data: Data, whitening: Whitening, state: Any, record: dict[str, np.ndarray]) -> int:
    """Number of divergent transitions that met a point without a steady state.

    Args:
        program: the chain's program.
        data: its data.
        whitening: its coordinates.
        state: sampler state after the warm-up (any draw: step size and metric no longer change).
        record: kept draws of the chain: `before` and `key`, the position in w and the random key before each
            transition, and `diverging`.
    """
    chosen = np.flatnonzero(record["diverging"])[:MOST]
    if not chosen.size:
        return 0
    infinite: list[bool] = []

    def watched(data: Data, whitening: Whitening) -> Any:
        inner = program.potential_in_w(data, whitening)

        def potential(w: dict[str, jax.Array]) -> jax.Array:
            value = inner(w)
            jax.debug.callback(lambda v: infinite.append(bool(np.isposinf(v))), value)
            return value

        return potential

    begin, transition = hmc(potential_fn_gen=watched, algo="NUTS")
    fresh = begin(
        {"w": jnp.asarray(record["before"][chosen[0]])}, program.warmup,
        inverse_mass_matrix=jnp.ones(program.dimension), max_tree_depth=MAX_TREE_DEPTH,
        model_args=(data, whitening), rng_key=jnp.asarray(record["key"][0]),
    )  # fmt: skip
    rerun = jax.jit(lambda state: transition(state, model_args=(data, whitening)))
    failed = 0
    for i in chosen:
        at = program.begin(jnp.asarray(record["before"][i]), jnp.asarray(record["key"][i]), data, whitening)
        before = fresh._replace(
            z=at.z, z_grad=at.z_grad, potential_energy=at.potential_energy, rng_key=jnp.asarray(record["key"][i]),
            adapt_state=state.adapt_state, i=state.i,
        )  # fmt: skip
        infinite.clear()
        jax.block_until_ready(rerun(before))
        jax.effects_barrier()
        failed += any(infinite)
    return failed
