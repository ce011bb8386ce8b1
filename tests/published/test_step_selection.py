"""Step selection with sampled availability is conditional logistic regression.

Data and stored fit: data/SOURCE.md (ssf_K10.npz). McFadden (1974), *Conditional logit analysis of qualitative choice
behavior*, from memory. The likelihood is the package's own; without the lower sum and with the used place among the
nodes it must be the conditional logit.
"""

from pathlib import Path

import jax
import jax.numpy as jnp
import numpy as np
import pytest
from scipy.optimize import brentq
from statsmodels.discrete.conditional_models import ConditionalLogit

from bayesrange.memory import step_log_ratio

STORED = np.load(Path(__file__).parent / "data" / "ssf_K10.npz")
Z = STORED["Z"]  # (400 strata, used + 10 available, 5 covariates)


def log_likelihood(coefficients, z):
    """Of strata whose used place comes first."""
    log_omega = jnp.asarray(z) @ jnp.atleast_1d(coefficients)
    everywhere = jnp.ones(log_omega.shape, bool)
    return step_log_ratio(log_omega[:, 0], log_omega, jnp.zeros_like(log_omega), everywhere, below=False).sum()


def maximum(z):
    value, slope, curve = (jax.jit(f) for f in (log_likelihood, jax.grad(log_likelihood), jax.hessian(log_likelihood)))
    b = jnp.zeros(z.shape[2])
    for _ in range(20):
        b = b - jnp.linalg.solve(curve(b, z), slope(b, z))
    return np.asarray(b), float(value(b, z)), np.sqrt(np.diag(np.linalg.inv(-np.asarray(curve(b, z)))))


def test_the_maximum_is_the_stored_fit():
    b, value, error = maximum(Z)
    assert np.allclose(b, STORED["coef"], rtol=1e-9)  # the stored fit stopped at steps of 1e-12
    assert np.allclose(error, STORED["se"], rtol=1e-9)
    assert np.isclose(value, -911.58692868, atol=1e-8)
    assert np.isclose(value, float(STORED["logL"]), atol=1e-9)
    assert np.isclose(log_likelihood(np.zeros(5), Z), -400 * np.log(11), rtol=1e-13)


def test_the_likelihood_is_that_of_statsmodels():
    used = np.zeros(Z.shape[:2], int)
    used[:, 0] = 1
    strata = np.repeat(np.arange(len(Z)), Z.shape[1])
    model = ConditionalLogit(used.ravel(), Z.reshape(-1, Z.shape[2]), groups=strata)
    for b in (
        np.zeros(5),
        STORED["coef"],
        np.array([1.0, -2.0, -0.25, 0.3, 0.8]),
        np.array([0.3, -0.1, 0.2, -0.4, 0.5]),
    ):
        assert np.isclose(log_likelihood(b, Z), model.loglike(b), atol=1e-9, rtol=0)  # 1.6e-11 was seen
    fitted = model.fit(method="newton", disp=0, maxiter=100)
    assert np.allclose(maximum(Z)[0], fitted.params, rtol=1e-9)


@pytest.mark.parametrize(
    ("coefficient", "value"), [(0.0, 2 * np.log(1 / 3)), (0.5, -2.63828976), (-0.78655708, -1.94259754)]
)
def test_two_strata_by_hand(coefficient, value):
    """Covariates (1*, 0, 2) and (0*, 1, 1), * the used one."""
    toy = np.array([[[1.0], [0.0], [2.0]], [[0.0], [1.0], [1.0]]])
    assert np.isclose(log_likelihood(np.array([coefficient]), toy), value, atol=5e-9)
    slope = jax.jit(jax.grad(lambda b: log_likelihood(b, toy)))
    assert np.isclose(brentq(lambda b: float(slope(jnp.asarray(b))), -5, 5, xtol=1e-12), -0.78655708, atol=5e-9)
