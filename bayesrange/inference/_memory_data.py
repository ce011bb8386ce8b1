"""The arrays that the memory models compute with: `MemorySpec` is static, `MemoryData` an argument of what is compiled.

Coefficients that differ between animals are sampled as step_shape, step_scale [km], turn_concentration, selection,
reference_strength, reference_excess [h], working_strength, working_excess [h], home_pull [1/km]: the working memory's
decay is `least_decay` + its excess, the reference memory's that + its own, so that one is below the other.
"""

from dataclasses import dataclass
from typing import NamedTuple

from jaxtyping import Array, Float, Int

from bayesrange.memory import StepData

EXCESS = {"reference_decay": "reference_excess", "working_decay": "working_excess"}
"""Parameter → the coordinate that carries its prior."""


@dataclass(frozen=True)
class MemorySpec:
    """The static part of a memory model.

    Attributes:
        parameters: the card's parameters, in its order, under the names of the tables.
        families: coordinate → family of its prior.
        pooled: whether animals share a population.
        layers: names of the layers, with day and night apart where selection varies by them.
        animals: names of the animals.
        units: names of what counts as one in the population: an animal, or several that travel together.
        covariates: names of the covariates, after coding.
        rhythm: whether the step length follows the hour.
        estimated_range: whether the encoding range is sampled.
        range_limits: between which encoding ranges its table was made [km].
    """

    parameters: tuple[str, ...]
    families: tuple[tuple[str, str], ...]
    pooled: bool
    layers: tuple[str, ...]
    animals: tuple[str, ...]
    units: tuple[str, ...]
    covariates: tuple[str, ...]
    rhythm: bool
    estimated_range: bool
    range_limits: tuple[float, float]

    def family(self, parameter: str) -> str:
        """Family of the prior of a coordinate."""
        return dict(self.families)[parameter]

    @property
    def remembers(self) -> bool:
        """Whether the card has the memories."""
        return "reference_strength" in self.parameters


class MemoryData(NamedTuple):
    """The numbers of a memory model (a pytree of arrays).

    Attributes:
        steps: the steps with their nodes and tables.
        surface: table of the past at every cell inside the area, at the end of each animal's record.
        home: first guess of each animal's centre [km].
        box: west, south, east, north of where each animal's centre may lie [km].
        home_eps: softening of the distance to the centre [km].
        unit: which unit each animal belongs to.
        least_decay: shortest decay time [h].
        fixed_range: encoding range where it is not sampled [km].
        priors: numbers of each coordinate's prior, in the units of the numerics.
        spread_scale: half-normal scale of the spread between units of each coefficient.
        covariates: coded covariates of each unit, mean 0.
        effect_sd: prior sd of a covariate's coefficient.
        centring: share of centring of each unit's coefficients; 0 until the mode is known.
    """

    steps: StepData
    surface: Float[Array, "animals cells columns"]
    home: Float[Array, "animals 2"]
    box: Float[Array, "animals 4"]
    home_eps: Float[Array, ""]
    unit: Int[Array, " animals"]
    least_decay: Float[Array, ""]
    fixed_range: Float[Array, ""]
    priors: dict[str, Float[Array, " numbers"]]
    spread_scale: Float[Array, " coefficients"]
    covariates: Float[Array, "units covariates"]
    effect_sd: Float[Array, ""]
    centring: Float[Array, "units coefficients"]
