"""The convergence gates: published draws that fail and pass, and figures that cannot be computed."""

import re
from importlib.resources import files

import numpy as np
import pytest
import xarray as xr

from bayesrange.inference._diagnostics import ESS_PER_CHAIN, diagnose
from bayesrange.inference._program import MAX_TREE_DEPTH
from bayesrange.inference._summary import Row, parameter_table


def sampler_stats(chains, draws, seed=0, **changes):
    rng = np.random.default_rng(seed)
    stats = {
        "potential": rng.normal(size=(chains, draws)), "energy": rng.normal(size=(chains, draws)),
        "diverging": np.zeros((chains, draws), bool), "gradients": np.full((chains, draws), 7),
        "step_size": np.full((chains, draws), 0.5),
    }  # fmt: skip
    return {**stats, **changes}


def judge(columns, stats, individual=(), failed=0, two_states=0):
    prior = np.random.default_rng(1).normal(size=(1, 500))
    found = [Row(name, "1", draws, prior, name in individual) for name, draws in columns.items()]
    return diagnose(parameter_table(found), found, stats, failed, two_states)


def noise(chains=4, draws=600, seed=2):
    return np.random.default_rng(seed).normal(size=(chains, draws))


def eight_schools(kind):
    """Draws of the eight schools model (Rubin 1981) that come with arviz_base: 4 chains of 500, its own sampler."""
    tree = xr.open_datatree(files("arviz_base") / "example_data" / "data" / f"{kind}_eight.nc", engine="h5netcdf")
    posterior, stats = tree["posterior"].dataset, tree["sample_stats"].dataset
    columns = {"mu": posterior["mu"].values, "tau": posterior["tau"].values}
    columns |= {f"theta {k}": posterior["theta"].values[:, :, k] for k in range(8)}
    given = {
        "potential": -stats["lp"].values, "energy": stats["energy"].values, "diverging": stats["diverging"].values,
        "gradients": stats["n_steps"].values, "step_size": stats["step_size"].values,
    }  # fmt: skip
    columns = {name: np.array(value) for name, value in columns.items()}
    tau = parameter_table([Row("tau", "1", columns["tau"], columns["tau"])]).iloc[0]
    return judge(columns, given), tau


def test_centred_eight_schools_fail():
    # With arviz 1.3's own functions on the bundled file: 19 divergences, R-hat of tau 1.0284, its ESS 128
    found, tau = eight_schools("centered")
    assert not found.converged
    assert found.divergences == 19
    assert tau["rhat"] == pytest.approx(1.0284, abs=5e-5)
    assert min(tau["ess_bulk"], tau["ess_tail"]) == pytest.approx(128, abs=0.5)
    for words in ("R-hat reaches 1.0", "effective sample size", "19 transition(s) diverged"):
        assert sum(words in problem for problem in found.problems) == 1


def test_non_centred_eight_schools_pass():
    # With arviz 1.3's own functions: no divergence, all R-hat below 1.004
    found, _ = eight_schools("non_centered")
    assert found.problems == [] and found.converged
    assert found.max_rhat < 1.004


def test_independent_draws_pass():
    assert judge({"a": noise(), "b": noise(seed=3)}, sampler_stats(4, 600)).problems == []


def test_chains_apart_are_named():
    apart = noise() + np.array([0, 0, 0, 1.0])[:, None]
    found = judge({"a": noise(), "localising": apart}, sampler_stats(4, 600))
    assert "worst parameter localising" in found.problems[0] and not found.converged


def test_single_groups_have_a_gate_of_their_own():
    slightly = noise(seed=4) + np.array([0, 0, 0.0, 0.4])[:, None]
    assert 1.01 < float(judge({"g": slightly}, sampler_stats(4, 600)).max_rhat) < 1.05
    assert judge({"a": noise(), "g": slightly}, sampler_stats(4, 600), individual=("g",)).problems == []
    far = noise(seed=4) + np.array([0, 0, 0.0, 1.5])[:, None]
    problems = judge({"a": noise(), "g": far}, sampler_stats(4, 600), individual=("g",)).problems
    assert any("R-hat of a single group or animal reaches" in problem for problem in problems)


def test_few_draws_miss_the_effective_sample_size():
    found = judge({"a": noise(4, 60)}, sampler_stats(4, 60))
    assert any(f"wanted at least {4 * ESS_PER_CHAIN}" in problem for problem in found.problems)


def test_log_density_is_judged_too():
    drift = noise() + np.array([0, 0, 0, 2.0])[:, None]
    assert judge({"a": noise()}, sampler_stats(4, 600, potential=drift)).max_rhat > 1.05


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"diverging": np.eye(4, 600, dtype=bool)}, "4 transition.s. diverged"),
        ({"gradients": np.full((4, 600), 2**MAX_TREE_DEPTH - 1)}, "2400 transition.s. reached the deepest tree"),
        ({"energy": np.cumsum(noise(), axis=1)}, "Energy BFMI is 0.0"),
    ],
)
def test_each_gate_has_its_sentence(changes, words):
    problems = judge({"a": noise()}, sampler_stats(4, 600, **changes)).problems
    assert len(problems) == 1 and re.search(words, problems[0])


def test_failed_solves_and_second_states_count_against_a_run():
    found = judge({"a": noise()}, sampler_stats(4, 600), failed=2, two_states=1)
    assert (found.failed_solves, found.two_states, found.converged) == (2, 1, False)
    assert "2 of the divergences ended where no steady state" in found.problems[0]
    assert "At 1 of the checked draws" in found.problems[1]


def test_one_chain_never_counts_as_converged_and_can_be_written():
    found = judge({"a": noise(1), "g": noise(1)}, sampler_stats(1, 600), individual=("g",))
    assert found.problems == ["R-hat cannot be computed from one chain; set chains to at least 2, better 4."]
    assert found.as_json()["max_rhat"] is None
    assert found.as_json()["min_ess_bulk"] > 100


def test_parameter_that_never_moved_is_not_passed_over():
    found = judge({"a": noise(), "stuck": np.ones((4, 600))}, sampler_stats(4, 600))
    assert found.problems[0].startswith("R-hat of stuck cannot be computed")


@pytest.mark.parametrize("draws", [2, 3])
def test_a_handful_of_draws_is_judged_without_numbers(draws):
    found = judge({"a": noise(2, draws)}, sampler_stats(2, draws))
    assert not found.converged and found.as_json()["min_ess_tail"] is None
