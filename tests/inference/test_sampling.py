"""The sampler as a worker runs it (start, whitening, chunks) against dense quadrature of the same posterior."""

import jax
import jax.numpy as jnp
import numpy as np
import pytest
from arviz_stats.base import array_stats
from inference._tiny_study import HOMES, fixes_table, write_study
from inference._twin import Ground, fix_densities, log_normal, positive, solitary
from inference.conftest import build, whiten

from bayesrange.inference._worker import _first_state, _key

CARD = """
title = "Home and resources"
terms = ["localising", "resources"]
[priors.localising]
family = "log-normal"
median = 8.0
spread = 0.4
[priors.resource]
family = "normal"
mean = 0.5
sd = 0.3
"""
CHAINS, WARMUP, DRAWS = 2, 200, 1000


@pytest.fixture(scope="module")
def model(tmp_path_factory):
    """A card of the user's own with two parameters, and so few fixes that the priors and the Jacobian count."""
    folder = tmp_path_factory.mktemp("sampling")
    (folder / "home-resources.toml").write_text(CARD)
    fixes = fixes_table()[::18]
    model = {"card": "home-resources", "autocorrelation": "ignored"}
    return build(write_study(folder, fixes, model=model), warmup=WARMUP)


@pytest.fixture(scope="module")
def draws(model):
    """Draws of β and γ, each (chain, draw), in chunks of 50."""
    program, data = model.program, model.data
    whitening = whiten(program, data)
    # Coordinates askew, which may cost effort but must not move the posterior
    whitening = whitening._replace(scale=whitening.scale @ jnp.array([[1.0, 0.0], [0.9, 1.0]]))
    chains = []
    for chain in range(CHAINS):
        program.ready(data, whitening)
        state, kept = _first_state(program, _key(3, chain), data, whitening), []
        for _ in range((WARMUP + DRAWS) // 50):
            state, record = program.advance(state, 50, data, whitening)
            kept.append(jax.tree.map(np.asarray, record))
        chains.append([np.concatenate(column) for column in zip(*kept)])
    positions = np.stack([chain[2][WARMUP:] for chain in chains])
    divergences = sum(chain[3][WARMUP:].sum() for chain in chains)
    values = program.constrain(jnp.asarray(positions.reshape(-1, 2)), data)
    shape = (CHAINS, DRAWS)
    return np.asarray(values["localising"]).reshape(shape), np.asarray(values["resource"]).reshape(shape), divergences


@pytest.fixture(scope="module")
def quadrature(model):
    """Posterior means and sds of β and γ by summing the twin's log posterior over a dense grid."""
    ground, fixes = Ground.of(model.study, ["worms"]), model.study.fixes
    x, y, error = (fixes[column].to_numpy() for column in ("x", "y", "error_m"))
    owner = fixes["group"].map({name: i for i, name in enumerate(HOMES)}).to_numpy()
    homes = model.study.groups[["x", "y"]].to_numpy(float) / 1000
    log_beta, gamma = np.linspace(np.log(1.5), np.log(16), 45), np.linspace(-1.1, 1.7, 45)
    table = np.empty((45, 45))
    for i, z in enumerate(log_beta):
        # No scale of the home length in this card: the median 8 is in 1/km
        pull = solitary(ground, np.full(3, np.exp(z)), np.zeros((1, 3)), homes, 0.05)
        for j, response in enumerate(gamma):
            density = np.exp(pull + response * ground.layers[0])
            density /= (density * ground.area).sum(1, keepdims=True)
            at = fix_densities(ground, density, x, y, owner, error)
            prior = positive(log_normal(8.0, 0.4), z) - 0.5 * ((response - 0.5) / 0.3) ** 2
            table[i, j] = (model.weight * np.log(at)).sum() + prior
    weight = np.exp(table - table.max())
    weight /= weight.sum()
    edges = weight[[0, -1]].sum() + weight[:, [0, -1]].sum()
    assert edges < 1e-4  # the grid holds the posterior
    results = []
    for values, share in ((np.exp(log_beta), weight.sum(1)), (gamma, weight.sum(0))):
        mean = (share * values).sum()
        results.append((mean, np.sqrt((share * (values - mean) ** 2).sum())))
    return results


@pytest.mark.parametrize("which", [0, 1], ids=["localising", "resource"])
def test_posterior_is_that_of_dense_quadrature(draws, quadrature, which):
    sample, (mean, sd) = draws[which], quadrature[which]
    axes = {"chain_axis": 0, "draw_axis": 1}
    bulk = float(array_stats.ess(sample, method="bulk", **axes))
    ess_sd = float(array_stats.ess(sample, method="sd", **axes))
    assert min(bulk, ess_sd) > 600
    # Four standard errors: of the mean sd/√ESS, of the sd sd/√(2 ESS) for a near-normal posterior.
    assert abs(sample.mean() - mean) < 4 * sd / np.sqrt(bulk)
    assert abs(sample.std() - sd) < 4 * sd / np.sqrt(2 * ess_sd)


def test_data_do_not_drown_the_prior_and_no_transition_diverged(draws, quadrature):
    # Leaving the Jacobian of log β out would move its mean by about one variance of log β: 0.2 sd, twice the tolerance.
    (beta, beta_sd), (_, gamma_sd) = quadrature
    assert beta_sd / beta > 0.17
    assert gamma_sd > 0.5 * 0.3
    assert draws[2] == 0


def test_chains_differ_and_chunks_do_not_repeat(draws):
    beta = draws[0]
    assert not np.any(beta[0] == beta[1])
    assert np.unique(beta[0]).size > 0.8 * DRAWS
