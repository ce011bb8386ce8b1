"""Prior families against SciPy's distributions of the same name."""

import jax
import jax.numpy as jnp
import numpy as np
import pytest
from scipy import stats

from bayesrange.inference._priors import FAMILIES, Prior, read_prior
from bayesrange.inference._range_model import distribution

FAMILY = {
    "normal": ((0.4, 1.7), stats.norm(0.4, 1.7)),
    "half-normal": ((0.8,), stats.halfnorm(scale=0.8)),
    "log-normal": ((8.0, 0.6), stats.lognorm(s=0.6, scale=8.0)),
    "exponential": ((2.5,), stats.expon(scale=2.5)),
    "uniform": ((0.5, 3.0), stats.uniform(0.5, 2.5)),
}


def test_every_family_is_tested():
    assert set(FAMILY) == set(FAMILIES)


@pytest.mark.parametrize("family", FAMILY)
def test_density_is_scipys(family):
    numbers, reference = FAMILY[family]
    x = reference.ppf([0.01, 0.2, 0.5, 0.8, 0.99])
    # Both are closed forms: rounding only.
    np.testing.assert_allclose(distribution(family, jnp.array(numbers)).log_prob(x), reference.logpdf(x), rtol=1e-12)


@pytest.mark.parametrize("family", FAMILY)
def test_draws_have_scipys_quantiles(family):
    numbers, reference = FAMILY[family]
    draws = np.asarray(distribution(family, jnp.array(numbers)).sample(jax.random.key(3), (20_000,)))
    # The draws' places in SciPy's distribution are uniform: the Kolmogorov distance of 20 000 is below 0.0138 in 999
    # of 1000 samples (1.95/√n, Smirnov 1948, from memory).
    assert stats.kstest(draws, reference.cdf).statistic < 1.95 / np.sqrt(draws.size)


@pytest.mark.parametrize("family", FAMILY)
def test_prior_scaled_by_the_home_length_is_that_of_the_scaled_quantity(family):
    numbers, reference = FAMILY[family]
    scaled = Prior(family, numbers, "1/home_length", "why").scaled(2.0)
    x = reference.ppf([0.05, 0.5, 0.9])
    # X = Y/2: its density at x/2 is twice that of Y at x
    ours = distribution(family, jnp.array(scaled.numbers)).log_prob(x / 2)
    np.testing.assert_allclose(ours, reference.logpdf(x) + np.log(2), rtol=1e-12)
    assert (scaled.scaled_by, scaled.reason) == ("", "why")


def test_spread_of_a_log_normal_has_no_unit():
    assert Prior("log-normal", (8.0, 0.8), "1/home_length").scaled(4.0).numbers == (2.0, 0.8)


def test_prior_without_a_scale_stays():
    prior = Prior("half-normal", (1.0,))
    assert prior.scaled(7.0) == prior


def test_prior_in_words_names_its_numbers():
    assert Prior("log-normal", (8.0, 0.8)).in_words() == "log-normal (median 8, spread 0.8)"
    assert Prior("half-normal", (2.0,)).in_words("1/km") == "half-normal (scale 2 1/km)"


def test_reason_is_kept_on_one_line():
    assert read_prior({"family": "exponential", "mean": 1, "reason": "so\n  it is"}, "x", True).reason == "so it is"


def test_whole_numbers_do():
    assert read_prior({"family": "uniform", "low": 0, "high": 2}, "x", True).numbers == (0.0, 2.0)
