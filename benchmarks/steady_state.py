"""How does one value and gradient compare with one numeric KLU factorisation a group, timed in the same run?

python benchmarks/steady_state.py            all sizes, groups and couplings
python benchmarks/steady_state.py --quick    64 × 64 cells and 6 groups only
"""

import sys

import jax
import jax.numpy as jnp
import numpy as np
from _case import case, log_likelihood, machine, milliseconds, say

from bayesrange.spaceuse import SOLVED, Parameters, steady_state
from bayesrange.spaceuse._operator import drift_terms, face_drift, rates
from bayesrange.spaceuse._sparse import choose, five_point, pinned_values

COUPLINGS = (0.2, 2.0, 4.0)
STEP = 1e-4


def klu_milliseconds(parameters: Parameters, setting) -> float:
    """One numeric KLU factorisation of every group's balance matrix; the analysis is timed apart and taken off."""
    klu = choose("klu")
    pattern = five_point(*setting.domain.area.shape)
    found = steady_state(parameters, setting)
    drift = face_drift(found.foreign, drift_terms(parameters, setting))
    pin = jnp.argmax(found.log_density.reshape(found.log_density.shape[0], -1), axis=1)
    values = pinned_values(pattern, rates(drift, setting.domain.inside), pin, setting.domain.inside)

    @jax.jit
    def both(values: jax.Array) -> jax.Array:
        analysis = klu.analyse(pattern)
        factor = klu.factor(pattern, analysis, values)
        klu.release(analysis, factor, values)
        return factor

    @jax.jit
    def analysis_of_one(values: jax.Array) -> jax.Array:
        analysis = klu.analyse(pattern)
        factor = klu.factor(pattern, analysis, values[:1])
        klu.release(analysis, factor, values)
        return factor

    groups = values.shape[0]
    return (milliseconds(lambda: both(values)) - milliseconds(lambda: analysis_of_one(values))) * groups / (groups - 1)


def gradient_error(function, gradient: Parameters, arguments: tuple) -> float:
    """Largest relative error against central differences, one entry of each parameter in use."""
    parameters, *rest = arguments
    worst = 0.0
    for name in ("localising", "avoidance", "retreat", "resource", "home"):
        value, slope = getattr(parameters, name), getattr(gradient, name)
        if name in ("avoidance", "retreat") and not np.any(value):
            continue
        at = (0,) * value.ndim
        ahead, behind = (function(parameters._replace(**{name: value.at[at].add(s * STEP)}), *rest) for s in (1, -1))
        central = (ahead - behind) / (2 * STEP)
        worst = max(worst, abs(float(slope[at] - central)) / abs(float(central)))
    return worst


def measure(cells: int, groups: int, avoidance: float, retreat: float, solver: str, perception: float = 0.3) -> float:
    """Print one row; returns milliseconds of value and gradient."""
    arguments = case(cells, groups, avoidance, retreat, perception)
    function = jax.jit(log_likelihood(solver))
    both = jax.jit(jax.value_and_grad(log_likelihood(solver)))
    _, gradient = both(*arguments)
    time = milliseconds(lambda: both(*arguments))
    klu = klu_milliseconds(arguments[0]._replace(retreat=jnp.zeros(groups)), arguments[1])
    solution = jax.jit(lambda p, s: steady_state(p, s, solver=solver))(*arguments[:2])
    say(
        solver=solver, cells=cells, groups=groups, avoidance=avoidance, retreat=retreat,
        perception=perception or "two cells", ms=round(time, 2),
        klu_ms=round(klu, 2), ratio=round(time / klu, 2), steps=int(solution.steps),
        solved=bool(solution.result == SOLVED), gradient_error=gradient_error(function, gradient, arguments),
    )  # fmt: skip
    return time


def exponent(size: list[int], time: list[float]) -> float:
    """Slope of log time on log cells."""
    return float(np.polyfit(2 * np.log(size), np.log(time), 1)[0])


def main() -> None:
    quick = "--quick" in sys.argv
    say(**machine())
    for solver, retreats in (("gibbs", ()), ("flux", (0.5, 2.0))):
        for avoidance in COUPLINGS:
            sizes = [64] if quick else [32, 64, 96, 128]
            times = [measure(cells, 6, avoidance, 0.0, solver) for cells in sizes]
            if not quick:
                say(solver=solver, avoidance=avoidance, exponent_in_cells=round(exponent(sizes, times), 2))
        for retreat in retreats:
            measure(64, 6, 0.0, retreat, solver)
        if not quick:
            times = [measure(cells, 6, 2.0, 0.0, solver, perception=0.0) for cells in sizes]
            say(
                solver=solver, avoidance=2.0, perception="two cells", exponent_in_cells=round(exponent(sizes, times), 2)
            )
            groups = [2, 12, 24]
            times = [measure(64, g, 2.0, 0.0, solver) for g in groups]
            slope = float(np.polyfit(np.log(groups), np.log(times), 1)[0])
            say(solver=solver, exponent_in_groups=round(slope, 2))


if __name__ == "__main__":
    main()
