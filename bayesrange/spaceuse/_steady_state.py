"""Entry point: the steady state of all groups."""

from collections.abc import Callable

import jax
import jax.numpy as jnp
import numpy as np

from bayesrange.spaceuse._flux import flux
from bayesrange.spaceuse._gibbs import gibbs
from bayesrange.spaceuse._solution import SENTENCES, SOLVED, Solution, SolveError
from bayesrange.spaceuse._terms import Parameters, Setting

SOLVERS: dict[str, Callable[..., Solution]] = {"gibbs": gibbs, "flux": flux}


def steady_state(
    parameters: Parameters,
    setting: Setting,
    solver: str = "gibbs",
    coupled: bool = True,
    throw: bool = False,
    **options: object,
) -> Solution:
    """Solve 0 = ∇·(∇u_i − u_i s_i), ∫u_i = 1, no flux through the edge, for all groups at once.

    Args:
        parameters: drift terms [1/km, 1, per sd; see `Parameters`].
        setting: area, layers and groups.
        solver: "gibbs" (gradient drifts) or "flux" (any drift).
        coupled: False where no term of the model uses foreign scent.
        throw: raise where the solve fails, for people; in a likelihood leave it off and read `result`.
        options: further arguments of the solver, see `gibbs` and `flux`.

    Raises:
        ValueError: unknown solver, or `retreat` with "gibbs".
        SolveError: `throw` and no steady state found.
    """
    if solver not in SOLVERS:
        raise ValueError(f"`solver` must be one of {', '.join(SOLVERS)}, got {solver!r}.")
    if throw and solver == "gibbs" and np.any(np.asarray(parameters.retreat) != 0):
        raise ValueError("`retreat` is not a gradient of a potential: use solver='flux'.")
    parameters, setting = jax.tree.map(jnp.asarray, (parameters, setting))  # NumPy arrays will do
    solution = SOLVERS[solver](parameters, setting, coupled=coupled, **options)
    if throw and int(solution.result) != SOLVED:
        raise SolveError(SENTENCES[int(solution.result)])
    return solution
