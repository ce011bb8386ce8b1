"""The likelihood of steps written out in NumPy, double precision, from exact traces: the slow twin of the package's."""

import numpy as np
from scipy import special, stats

from bayesrange.memory import Nodes, Reference, Steps


def twin_log_likelihood(
    steps: Steps,
    nodes: Nodes,
    reference: Reference,
    shortest: float,
    *,
    shape: float,
    scale: float,
    concentration: float,
    log_omega_used: np.ndarray,
    log_omega_nodes: np.ndarray,
    allowed: np.ndarray,
    rhythm: np.ndarray | None = None,
    hour: np.ndarray | None = None,
) -> np.ndarray:
    """Log-likelihood of each step from log ω at its used place and nodes; scipy's own densities."""
    scales = np.full(len(steps.time), scale)
    if rhythm is not None and hour is not None:
        angle = 2 * np.pi * hour / 24
        waves = np.stack([np.cos(angle), np.sin(angle), np.cos(2 * angle), np.sin(2 * angle)], 1)
        scales = scale * np.exp(waves @ rhythm)

    def turning(turn: np.ndarray) -> np.ndarray:
        # log I0 by hand: scipy's von Mises loses the sign of a concentration below 0
        return concentration * np.cos(turn) - np.log(special.ive(0, abs(concentration))) - abs(concentration)

    out = np.zeros(len(steps.time))
    for i in range(len(out)):
        law = stats.gamma(shape, scale=scales[i])
        known, r = bool(steps.turn_known[i]), nodes.radius[i]
        weight = law.pdf(r) / stats.gamma(reference.shape, scale=reference.scale).pdf(r)
        if known:
            weight = weight * np.exp(turning(nodes.turn[i]))
        top = log_omega_nodes[i].max()
        above = (weight * np.exp(log_omega_nodes[i] - top))[allowed[i]].sum()
        normaliser = np.log(above) + top - np.log(weight.sum())
        if steps.short[i]:
            moved = law.logcdf(shortest)
        else:
            moved = law.logpdf(steps.length[i]) - np.log(steps.length[i]) - np.log(2 * np.pi)
            moved += float(turning(steps.turn[i])) if known else 0.0
        out[i] = moved + log_omega_used[i] - normaliser
    return out


def recall(trace: np.ndarray, half: float) -> np.ndarray:
    return trace / (trace + half)
