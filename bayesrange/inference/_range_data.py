"""The arrays that the range models compute with.

`RangeSpec` holds what decides the shape of the program (it is hashable and static); `RangeData` holds numbers (a
pytree that is an argument of every compiled function, so that other data of the same shape need no compilation).
"""

from dataclasses import dataclass
from typing import NamedTuple

from jaxtyping import Array, Float

from bayesrange.spaceuse import Reading, Setting


@dataclass(frozen=True)
class RangeSpec:
    """The static part of a range model.

    Attributes:
        parameters: the card's parameters, in its order.
        families: family of the prior of each parameter.
        varying: parameters that differ between groups (hierarchical pooling).
        solver: "gibbs" or "flux".
        coupled: whether foreign scent plays a part.
        over_marking: whether m is sampled.
        layers: names of the layers.
        groups: names of the groups.
        covariates: names of the group covariates, after coding.
        estimated: indices of groups whose home centre is sampled.
        counted: indices of groups whose number of animals is sampled.
    """

    parameters: tuple[str, ...]
    families: tuple[tuple[str, str], ...]
    varying: tuple[str, ...]
    solver: str
    coupled: bool
    over_marking: bool
    layers: tuple[str, ...]
    groups: tuple[str, ...]
    covariates: tuple[str, ...]
    estimated: tuple[int, ...]
    counted: tuple[int, ...] = ()

    def family(self, parameter: str) -> str:
        """Family of a parameter's prior."""
        return dict(self.families)[parameter]


class RangeData(NamedTuple):
    """The numbers of a range model (a pytree of arrays).

    Attributes:
        setting: area, layers, groups.
        reading: how fixes read the cells; padded rows have weight 0.
        weight: weight of each fix [effective fixes].
        home: known home centres; those estimated hold the first guess [km].
        box: west, south, east, north of the area [km].
        priors: numbers of each parameter's prior, in the units of the numerics.
        spread_scale: half-normal scale of the spread between groups of each varying coefficient.
        covariates: coded covariates of each group, mean 0.
        effect_sd: prior sd of a covariate's coefficient.
        centring: share of centring of each group's coefficients (see `walk_coefficients`); 0 until the mode is known.
        animals: least and largest number of animals of the groups `counted`; None if there are none.
        a0: A₀ [km²], with `animals`.
        share: where groups come and go, share of each group's time in each of the sets of groups that are there
            together (columns sum to 1; 0: not there); `reading.group` is then set × groups + group. Else None.
        log_detection: log of the chance that a fix succeeds in each cell, 0 outside; None: alike everywhere.
    """

    setting: Setting
    reading: Reading
    weight: Float[Array, " fixes"]
    home: Float[Array, "groups 2"]
    box: Float[Array, " 4"]
    priors: dict[str, Float[Array, " numbers"]]
    spread_scale: Float[Array, " varying"]
    covariates: Float[Array, "groups covariates"]
    effect_sd: Float[Array, ""]
    centring: Float[Array, "groups varying"]
    animals: Float[Array, "counted 2"] | None = None
    a0: Float[Array, ""] | None = None
    log_detection: Float[Array, "ny nx"] | None = None
    share: Float[Array, "sets groups"] | None = None
