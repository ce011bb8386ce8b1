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
from bayesrange.memory._simulate import (  # noqa: E402
    WALK_SENTENCES,
    WalkError,
    regular_timeline,
    seen_track,
    simulate,
    timeline_of,
)
from bayesrange.memory._steps import Stays, Steps, Track, make_stays, make_steps  # noqa: E402
from bayesrange.memory._table import tabulate  # noqa: E402
from bayesrange.memory._trace import exact_trace  # noqa: E402
from bayesrange.memory._walk import (  # noqa: E402
    CEILING_BROKEN,
    NO_STEP_FOUND,
    NOT_A_MODEL,
    PAST_TOO_LATE,
    START_OFF_GROUND,
    WALKED,
    Timeline,
    Walk,
)

__all__ = [
    "AnimalSteps", "BLOCK", "Basis", "CEILING_BROKEN", "Landscape", "NOT_A_MODEL", "NO_STEP_FOUND", "Nodes",
    "PAST_TOO_LATE", "Reference", "START_OFF_GROUND", "Stays", "StepData", "StepParameters", "Steps", "Timeline",
    "Track", "WALKED", "WALK_SENTENCES", "Walk", "WalkError", "allowed", "animal_log_likelihood", "choose_count",
    "decay_basis", "decay_coefficients", "exact_trace", "fit_gamma", "fixed_range", "log_bessel",
    "log_short_chance", "log_step_density", "make_blocks", "make_nodes", "make_stays", "make_steps", "no_memory",
    "places", "quadrature_error", "range_basis", "range_coefficients", "read_layers", "read_places",
    "recall_surfaces", "regular_timeline", "seen_track", "simulate", "step_log_likelihood", "step_log_ratio",
    "tabulate", "timeline_of", "traces", "wide_reference",
]  # fmt: skip
