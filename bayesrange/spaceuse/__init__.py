"""Steady-state space use of territorial groups: drift terms, scent, solvers, and reading fixes off a density.

Pure JAX functions of arrays in double precision; no files, no sampling.
"""

import jax

jax.config.update("jax_enable_x64", True)

from bayesrange.spaceuse._domain import Domain, make_domain  # noqa: E402
from bayesrange.spaceuse._flux import flux  # noqa: E402
from bayesrange.spaceuse._gibbs import gibbs  # noqa: E402
from bayesrange.spaceuse._pinned import null_density  # noqa: E402
from bayesrange.spaceuse._reading import Reading, log_fix_density  # noqa: E402
from bayesrange.spaceuse._solution import (  # noqa: E402
    NO_STEADY_SCENT,
    NOT_CONVERGED,
    NOT_FINITE,
    SENTENCES,
    SOLVED,
    TOO_STEEP,
    Solution,
    SolveError,
)
from bayesrange.spaceuse._starts import arrival_scent  # noqa: E402
from bayesrange.spaceuse._steady_state import SOLVERS, steady_state  # noqa: E402
from bayesrange.spaceuse._terms import Parameters, Setting, home_distance, solitary_potential  # noqa: E402

__all__ = [
    "Domain", "NOT_CONVERGED", "NOT_FINITE", "NO_STEADY_SCENT", "Parameters", "Reading", "SENTENCES", "SOLVED",
    "SOLVERS", "Setting", "Solution", "SolveError", "TOO_STEEP", "arrival_scent", "flux", "gibbs", "home_distance",
    "log_fix_density", "make_domain", "null_density", "solitary_potential", "steady_state",
]  # fmt: skip
