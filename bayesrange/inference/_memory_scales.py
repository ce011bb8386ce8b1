"""The frozen scales of a fit of steps, and priors in the units of its numerics."""

from dataclasses import asdict, dataclass
from typing import Any

import numpy as np

from bayesrange._errors import StudyError
from bayesrange.inference._memory_study import Tracks
from bayesrange.inference._priors import Prior
from bayesrange.inference._scales import LayerScale
from bayesrange.study import Study

TAIL = 3.3
"""Prior sds (of the logarithm) that the table of decay times covers: 99.9 % of the prior."""
RANGE_TAIL = 2.0
"""The same for an estimated encoding range, whose prior is cut off there."""


@dataclass(frozen=True)
class MemoryScales:
    """The frozen scales of a fit of steps.

    Attributes:
        median_step_m: median step [m]; the unit of some priors.
        encoding_range_m: encoding range, or the middle of its prior where it is estimated [m].
        area_length_km: root of the habitable area [km].
        shortest_step_m: steps below it count as rest [m].
        interval_h: nominal sampling interval [h].
        home_eps_m: softening of the distance to a centre, half a cell [m].
        layers: scale of each layer, in the model's order.
    """

    median_step_m: float
    encoding_range_m: float
    area_length_km: float
    shortest_step_m: float
    interval_h: float
    home_eps_m: float
    layers: dict[str, LayerScale]

    def as_json(self) -> dict[str, Any]:
        """Plain numbers for run.json."""
        return asdict(self)

    @classmethod
    def from_json(cls, table: dict[str, Any]) -> "MemoryScales":
        """The scales that a run.json holds."""
        layers = {name: LayerScale(**scale) for name, scale in table["layers"].items()}
        return cls(**{**table, "layers": layers})


def memory_scales(study: Study, tracks: Tracks, layers: dict[str, LayerScale]) -> MemoryScales:
    """Scales of a study, from its grid, its tracks and what the study file gives."""
    given = study.settings.model.encoding_range_m
    return MemoryScales(
        median_step_m=tracks.median_step_m,
        encoding_range_m=float(given) if isinstance(given, int | float) else tracks.median_step_m,
        area_length_km=float(np.sqrt(study.grid.habitable_km2)),
        shortest_step_m=tracks.shortest_m, interval_h=tracks.interval_h, home_eps_m=study.grid.cell_m / 2,
        layers=layers,
    )  # fmt: skip


def prior_in_km(prior: Prior, name: str, scales: MemoryScales) -> Prior:
    """The prior in the units of the numerics: lengths in km."""
    if prior.scaled_by == "median_step":
        return prior.times(scales.median_step_m / 1000)
    if prior.scaled_by == "1/area_length":
        return prior.times(1 / scales.area_length_km)
    return prior.times(1 / 1000) if name in ("step_scale", "encoding_range") else prior


def upper_end(prior: Prior, between: float = 0.0) -> float:
    """Value that a positive prior, of an animal whose logarithm spreads by `between`, hardly ever passes (99.9 %)."""
    if prior.family == "log-normal":
        return prior.numbers[0] * float(np.exp(TAIL * np.hypot(prior.numbers[1], between)))
    tail = {"half-normal": TAIL, "exponential": 7.0}.get(prior.family, 1.0)
    return tail * prior.numbers[-1] * float(np.exp(TAIL * between))


def range_limits_of(priors: dict[str, Prior], scales: MemoryScales) -> tuple[float, float]:
    """Between which encoding ranges a table is made [km]; twice the same where it is known.

    Raises:
        StudyError: a prior without an end on both sides.
    """
    prior = priors.get("encoding_range")
    if prior is None:
        return scales.encoding_range_m / 1000, scales.encoding_range_m / 1000
    if prior.family != "log-normal":
        raise StudyError(
            f'[model.priors] encoding_range: expected family = "log-normal", because its table needs an end on both '
            f"sides; got {prior.family}."
        )
    median, spread = prior.numbers
    return float(median * np.exp(-RANGE_TAIL * spread)), float(median * np.exp(RANGE_TAIL * spread))
