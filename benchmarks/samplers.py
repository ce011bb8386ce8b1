"""How many effective draws a second on one posterior: NUTS, NUTS with finite differences, an ensemble sampler?

    python benchmarks/samplers.py [--quick]

Five groups on the bundled heath with estimated home centres: 13 parameters. Everything runs in this process on one
core. NUTS with finite differences is not run: SciPy's `approx_fprime` is timed on the same log-density and NUTS's
count of gradients is charged at that price. The ensemble sampler is emcee (Foreman-Mackey et al. 2013) on the same
log-density, started from draws of NUTS, so that it needs no burn-in. ESS is arviz's bulk ESS, the least over the
parameters.
"""

import sys
import tempfile
import time
from pathlib import Path

import emcee
import jax
import jax.numpy as jnp
import numpy as np
import pandas as pd
from _case import machine, milliseconds, say
from arviz_stats.base import array_stats
from jax.flatten_util import ravel_pytree
from scipy.optimize import approx_fprime

from bayesrange._demo import copy_study
from bayesrange.inference import Program, Whitening, as_arrays, find_start
from bayesrange.inference._fit import prepare
from bayesrange.inference._start import whitening_scale
from bayesrange.study import read_study


def least_ess(draws: np.ndarray) -> float:
    """Least bulk ESS over the parameters of draws (chain, draw, parameter)."""
    return min(
        float(array_stats.ess(draws[:, :, k], chain_axis=0, draw_axis=1, method="bulk")) for k in range(draws.shape[2])
    )


def main() -> None:
    quick = "--quick" in sys.argv
    warmup, kept = (100, 100) if quick else (200, 500)
    say(**machine())
    with tempfile.TemporaryDirectory() as folder:
        study = copy_study(Path(folder))
        groups = pd.read_csv(study / "groups.csv")
        groups.assign(x="", y="").to_csv(study / "groups.csv", index=False)
        task = prepare(read_study(study)).task
    data = as_arrays(task.data)
    program = Program(task.spec, data, warmup, 0.8, max(warmup, kept))

    def density(z: np.ndarray):
        return program.value_and_gradient(jnp.asarray(z), data)

    start = find_start(density, np.asarray(ravel_pytree(program.first_guess(data))[0]))
    whitening = Whitening(jnp.asarray(start.mode), jnp.asarray(whitening_scale(start.curvature, program.apart())))
    gradient_s = milliseconds(lambda: density(start.mode)) / 1000

    key = jax.random.key_data(jax.random.key(1))
    state = program.begin(jnp.zeros(program.dimension), key, data, whitening)
    program.advance(state, 1, data, whitening)  # compiles
    begun = time.perf_counter()
    state, _ = program.advance(state, warmup, data, whitening)
    state, record = jax.block_until_ready(program.advance(state, kept, data, whitening))
    nuts_s = time.perf_counter() - begun
    draws = np.asarray(record.position)[:kept]
    gradients = int(np.asarray(record.gradients)[:kept].sum())
    ess = least_ess(draws[None])
    say(sampler="NUTS", seconds=round(nuts_s, 1), ess=round(ess), ess_per_s=round(ess / nuts_s, 2), gradients=gradients,
        gradient_ms=round(1000 * gradient_s, 2))  # fmt: skip

    potential = jax.jit(lambda z: program.potential(z, data))
    value_s = milliseconds(lambda: potential(jnp.asarray(start.mode))) / 1000
    begun = time.perf_counter()
    approx_fprime(start.mode, lambda z: float(potential(jnp.asarray(z))), 1e-6)
    difference_s = time.perf_counter() - begun
    charged = nuts_s + (difference_s - gradient_s) * gradients * (warmup + kept) / kept
    say(sampler="NUTS, finite differences (charged)", seconds=round(charged, 1), ess_per_s=round(ess / charged, 3),
        gradient_ms=round(1000 * difference_s, 1), value_ms=round(1000 * value_s, 2))  # fmt: skip

    walkers = 2 * program.dimension + 2
    first = draws[np.random.default_rng(2).choice(kept, walkers, replace=False)]
    ensemble = emcee.EnsembleSampler(walkers, program.dimension, lambda z: -float(potential(jnp.asarray(z))))
    steps = 200 if quick else 2000
    begun = time.perf_counter()
    ensemble.run_mcmc(first, steps)
    ensemble_s = time.perf_counter() - begun
    chain = np.swapaxes(ensemble.get_chain(), 0, 1)
    ess_emcee = least_ess(chain)
    say(sampler="emcee", seconds=round(ensemble_s, 1), ess=round(ess_emcee), ess_per_s=round(ess_emcee / ensemble_s, 3),
        evaluations=walkers * steps, nuts_over_emcee=round((ess / nuts_s) / (ess_emcee / ensemble_s), 1))  # fmt: skip
    gap = np.abs(chain.reshape(-1, program.dimension).mean(0) - draws.mean(0)) / draws.std(0)
    say(largest_difference_of_means_in_posterior_sd=round(float(gap.max()), 2))


if __name__ == "__main__":
    main()
