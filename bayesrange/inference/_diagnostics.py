"""Whether the draws can be trusted, and what to do where not.

Gates: rank-normalised split R-hat < 1.01 and bulk and tail ESS ≥ 100 a chain (Vehtari et al. 2021, Bayesian Analysis
16:667); no divergences; energy BFMI ≥ 0.3 (Betancourt 2016, arXiv:1604.00695). Values of single groups: R-hat < 1.05.
"""

from dataclasses import asdict, dataclass, field
from typing import Any

import numpy as np
import pandas as pd
from arviz_stats.base import array_stats

from bayesrange.inference._program import MAX_TREE_DEPTH
from bayesrange.inference._summary import Row

RHAT, RHAT_INDIVIDUAL, ESS_PER_CHAIN, BFMI = 1.01, 1.05, 100, 0.3


@dataclass(frozen=True)
class Diagnostics:
    """Convergence figures of a run, and its problems as sentences that say what to do."""

    divergences: int
    failed_solves: int
    two_states: int
    max_rhat: float
    min_ess_bulk: float
    min_ess_tail: float
    min_bfmi: float
    deepest_trees: int
    gradients: int
    step_size: list[float]
    problems: list[str] = field(default_factory=list)

    @property
    def converged(self) -> bool:
        """No gate was missed."""
        return not self.problems

    def as_json(self) -> dict[str, Any]:
        """Plain numbers for run.json; null where a figure cannot be computed (JSON knows no NaN)."""
        return {k: v if not isinstance(v, float) or np.isfinite(v) else None for k, v in asdict(self).items()}


def diagnose(
    table: pd.DataFrame,
    found: list[Row],
    stats: dict[str, np.ndarray] | list[dict[str, np.ndarray]],
    failed: int,
    two_states: int,
) -> Diagnostics:
    """Read the gates.

    Args:
        table: parameters.csv.
        found: the rows it was made from, in the same order.
        stats: sampler records, leading (chain, draw); one set a posterior, where animals are fitted alone.
        failed: divergent transitions that ended at a steady state that was not found.
        two_states: draws at which another start led to another steady state.
    """
    sets = stats if isinstance(stats, list) else [stats]
    chains = sets[0]["potential"].shape[0]
    individual = np.array([row.individual for row in found])
    axes = {"chain_axis": 0, "draw_axis": 1}
    lps = [-one["potential"] for one in sets]
    # A figure that cannot be computed (NaN) must not be passed over: np.max and np.min keep it.
    rhat = float(np.max([*table["rhat"][~individual], *(float(array_stats.rhat(lp, **axes)) for lp in lps)]))
    bulk = float(np.min([*table["ess_bulk"], *(float(array_stats.ess(lp, **axes)) for lp in lps)]))
    tail = float(np.min(table["ess_tail"]))
    bfmi = float(np.min([np.min(array_stats.bfmi(one["energy"], **axes)) for one in sets]))
    divergences = int(sum(one["diverging"].sum() for one in sets))
    deepest = int(sum((one["gradients"] >= 2**MAX_TREE_DEPTH - 1).sum() for one in sets))
    problems = list(
        _problems(table, individual, rhat, bulk, tail, chains, divergences, bfmi, deepest, failed, two_states)
    )
    return Diagnostics(
        divergences, failed, two_states, rhat, bulk, tail, bfmi, deepest,
        int(sum(one["gradients"].sum() for one in sets)),
        [float(value) for one in sets for value in one["step_size"][:, -1]], problems,
    )  # fmt: skip


def _problems(
    table: pd.DataFrame, individual: np.ndarray, rhat: float, bulk: float, tail: float, chains: int, divergences: int,
    bfmi: float, deepest: int, failed: int, two_states: int,
) -> list[str]:  # fmt: skip
    said = []
    if np.isnan(rhat):
        said.append(_no_rhat(table, individual, chains))
    elif not rhat < RHAT:
        worst = table.loc[table["rhat"].where(~individual).idxmax(), "parameter"]
        said.append(
            f"R-hat reaches {rhat:.3f} (wanted below {RHAT}; worst parameter {worst}): the chains disagree; raise "
            "warmup and draws."
        )
    of_groups = float(np.max([0.0, *table["rhat"][individual]]))
    if not of_groups < RHAT_INDIVIDUAL and chains > 1:
        said.append(
            f"R-hat of a single group or animal reaches {of_groups:.3f} (wanted below {RHAT_INDIVIDUAL}); raise draws."
        )
    wanted = ESS_PER_CHAIN * chains
    if not min(bulk, tail) >= wanted:
        said.append(
            f"The smallest effective sample size is {min(bulk, tail):.0f} (wanted at least {wanted}); raise draws."
        )
    if divergences:
        said.append(
            f"{divergences} transition(s) diverged: part of the posterior may be missing; raise target_accept towards "
            "0.99, or look at "
            "tighter priors for the parameters with the widest intervals."
        )
    if failed:
        said.append(
            f"{failed} of the divergences ended where no steady state was found; the posterior reaches where groups' "
            "coupling is too strong."
        )
    if two_states:
        said.append(
            f"At {two_states} of the checked draws another start led to another steady state; raise perception_m or "
            "give home centres."
        )
    if not bfmi >= BFMI:
        said.append(
            f"Energy BFMI is {bfmi:.2f} (wanted at least {BFMI}): the sampler moves slowly between energies; raise "
            "warmup."
        )
    if deepest:
        said.append(f"{deepest} transition(s) reached the deepest tree; raise warmup so that the step size can adapt.")
    return said


def _no_rhat(table: pd.DataFrame, individual: np.ndarray, chains: int) -> str:
    if chains == 1:
        return "R-hat cannot be computed from one chain; set chains to at least 2, better 4."
    unknown = [*table["parameter"][table["rhat"].isna() & ~individual], "the log-density"][0]
    return f"R-hat of {unknown} cannot be computed: its draws never change, or they are fewer than 4; raise draws."
