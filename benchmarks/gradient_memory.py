"""Does the process grow while gradients are taken? 5,000 of each solver, on a small grid.

python benchmarks/gradient_memory.py
"""

import resource

import jax
from _case import case, log_likelihood, machine, say

COUNT = 5000


def resident_mb() -> float:
    """Resident memory now, or at its peak where the system does not tell."""
    try:
        with open("/proc/self/statm") as file:
            return int(file.read().split()[1]) * resource.getpagesize() / 1e6
    except OSError:
        return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1e3


def main() -> None:
    say(**machine())
    for solver, retreat in (("gibbs", 0.0), ("flux", 0.5)):
        parameters, *rest = case(32, 6, 0.2, retreat)
        both = jax.jit(jax.value_and_grad(log_likelihood(solver)))
        for k in range(COUNT + 50):
            if k == 50:
                before = resident_mb()
            moved = parameters._replace(localising=parameters.localising * (1 + 1e-4 * (k % 7)))
            jax.block_until_ready(both(moved, *rest))
        say(solver=solver, gradients=COUNT, mb_before=round(before, 1), mb_grown=round(resident_mb() - before, 2))


if __name__ == "__main__":
    main()
