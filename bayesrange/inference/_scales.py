"""What turns a study's own units into the numbers that parameters refer to; made once, at the fit.

Forecasts, scores and plans take the fitted study's `Scales`, never their own: a wider polygon, one group less or a
changed layer must not silently rescale a parameter.
"""

from dataclasses import asdict, dataclass
from typing import Any

import numpy as np

from bayesrange._errors import StudyError
from bayesrange.study import Study


@dataclass(frozen=True)
class LayerScale:
    """Mean and sd of a layer over the habitable area of the fitted study, in the layer's unit.

    A contrast of classes stays as it is, 0 or 1: its mean here is 0, its sd 1, and `reference` names the class that
    it compares with ("" of other layers).
    """

    mean: float
    sd: float
    unit: str
    reference: str = ""


@dataclass(frozen=True)
class Scales:
    """The frozen scales of a fit.

    Attributes:
        a0_km2: A₀, habitable area per marking animal [km²]; where groups come and go, per animal there on the average.
        home_length_km: L₀ = √(habitable area / groups) = √(A₀ × mean animals per group) [km].
        perception_m: sd of the Gaussian over which scent is perceived [m].
        eps_m: softening of the distance to the home centre, half a cell [m].
        layers: scale of each layer that the model uses, in the model's order.
    """

    a0_km2: float
    home_length_km: float
    perception_m: float
    eps_m: float
    layers: dict[str, LayerScale]

    def as_json(self) -> dict[str, Any]:
        """Plain numbers for run.json."""
        return asdict(self)

    @classmethod
    def from_json(cls, table: dict[str, Any]) -> "Scales":
        """The scales that a run.json holds."""
        layers = {name: LayerScale(**scale) for name, scale in table["layers"].items()}
        return cls(**{**table, "layers": layers})


def make_scales(study: Study, layers: list[str]) -> Scales:
    """Scales of a study, from its grid, groups and layers; never from its fixes.

    Raises:
        StudyError: a layer that the study lacks, or one without variation.
    """
    grid = study.grid
    area, animals, groups = grid.habitable_km2, float(study.groups["animals"].sum()), float(len(study.groups))
    if study.epochs is not None:  # on the average over the time
        animals = float(study.groups["animals"].to_numpy(float) @ study.epochs.there)
        groups = float(study.epochs.there.sum())
    perception = study.settings.model.perception_m or 2 * grid.cell_m
    home_length = float(np.sqrt(area / groups))
    return Scales(area / animals, home_length, perception, grid.cell_m / 2, layer_scales(study, layers))


def layer_scales(study: Study, layers: list[str]) -> dict[str, LayerScale]:
    """Mean and sd of layers over the habitable area.

    Raises:
        StudyError: a layer that the study lacks, or one without variation.
    """
    grid, scales = study.grid, {}
    for name in layers:
        if name not in study.layers:
            known = ", ".join(study.layers) or "none"
            raise StudyError(f"{study.path.name}, [model] layers: no layer called {name!r}; the study has {known}.")
        layer = study.layers[name]
        values, weight = layer.values[grid.inside], grid.habitable[grid.inside]
        mean = float(np.average(values, weights=weight))
        sd = float(np.sqrt(np.average((values - mean) ** 2, weights=weight)))
        if not sd > 1e-12 * max(abs(mean), 1e-300):
            raise StudyError(
                f"{layer.file}: layer {name!r} has the same value everywhere in the area, so no response to it can be "
                "told; "
                "leave it out of [model] layers."
            )
        as_it_is = LayerScale(0.0, 1.0, "", layer.reference)
        scales[name] = as_it_is if layer.reference else LayerScale(mean, sd, layer.unit)
    return scales
