"""Movement led by memory: steps, traces of past stays, likelihood of a track, and tracks drawn from the model.

Pure functions of arrays in km and hours, double precision unless said; no files, no sampling.
"""

import jax

jax.config.update("jax_enable_x64", True)

from bayesrange.memory._basis import (  # noqa: E402
    Basis,
    decay_basis,
    decay_coefficients,
    fixed_range,
    no_memory,
    range_basis,
    range_coefficients,
)
from bayesrange.memory._blocks import BLOCK, AnimalSteps, StepData, make_blocks, places, read_places  # noqa: E402
from bayesrange.memory._kernel import log_bessel, log_short_chance, log_step_density  # noqa: E402
from bayesrange.memory._landscape import Landscape, allowed, read_layers  # noqa: E402
from bayesrange.memory._likelihood import (  # noqa: E402
    StepParameters,
    animal_log_likelihood,
    step_log_likelihood,
    step_log_ratio,
    traces,
)
from bayesrange.memory._nodes import Nodes, Reference, fit_gamma, make_nodes, wide_reference  # noqa: E402
from bayesrange.memory._pilot import choose_count, quadrature_error  # noqa: E402
from bayesrange.memory._recall import recall_surfaces  # noqa: E402
from bayesrange.memory._steps import Stays, Steps, Track, make_stays, make_steps  # noqa: E402
from bayesrange.memory._table import tabulate  # noqa: E402
from bayesrange.memory._trace import exact_trace  # noqa: E402

__all__ = [
    "AnimalSteps", "BLOCK", "Basis", "Landscape", "Nodes", "Reference", "Stays", "StepData", "StepParameters",
    "Steps", "Track", "allowed", "animal_log_likelihood", "choose_count", "decay_basis", "decay_coefficients",
    "exact_trace", "fit_gamma", "fixed_range", "log_bessel", "log_short_chance", "log_step_density", "make_blocks",
    "make_nodes", "make_stays", "make_steps", "no_memory", "places", "quadrature_error", "range_basis",
    "range_coefficients", "read_layers", "read_places", "recall_surfaces", "step_log_likelihood", "step_log_ratio",
    "tabulate", "traces", "wide_reference",
]  # fmt: skip
