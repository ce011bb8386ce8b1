"""Traces of past stays by direct summation: exact, and the slow twin of the tabulated trace.

M_τ,t(z) = Σ_{s<t} Δ_s e^{−(t−s)/τ} exp(−|z − x_s|²/2σ²) [h]: hours spent near z, forgotten exponentially. The stay that
starts at t is not spent yet and counts in no trace (s < t). Units: km, h.
"""

import numpy as np
from jaxtyping import Float

from bayesrange.memory._steps import Stays


def exact_trace(
    stays: Stays,
    time: Float[np.ndarray, " steps"],
    x: Float[np.ndarray, "steps places"],
    y: Float[np.ndarray, "steps places"],
    decay: float,
    encoding_range: float,
) -> Float[np.ndarray, "steps places"]:
    """The trace at some places at each time [h].

    Costs one exponential per place and stay before it.

    Args:
        stays: of the same animal, ascending in time.
        time: starts of steps [h].
        x: eastings [km].
        y: northings [km].
        decay: τ, the time after which a share e⁻¹ is left [h].
        encoding_range: σ, how far off a stay is remembered [km].
    """
    trace = np.zeros(x.shape)
    for step, now in enumerate(time):
        past = slice(0, int(np.searchsorted(stays.time, now, side="left")))
        kept = stays.duration[past] * np.exp(-(now - stays.time[past]) / decay)
        square = (x[step][:, None] - stays.x[past][None]) ** 2 + (y[step][:, None] - stays.y[past][None]) ** 2
        trace[step] = np.exp(-square / (2 * encoding_range**2)) @ kept
    return trace
