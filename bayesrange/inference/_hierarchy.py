"""Units (groups or animals) that differ: η_a = μ + C z_a + s L ξ_a, ξ_a ~ N(0, 1), on the unconstrained scale.

Positive coefficients are exp(η). `X_population` is the value of the median unit at covariates of mean 0, `X_spread` the
sd on the unconstrained scale, `X_effect` the coefficients of the covariates. The sites `<unit>_place_k` hold the
coordinates of `walk_coefficients`.
"""

from collections.abc import Callable
from dataclasses import dataclass
from typing import NamedTuple

import jax
import jax.numpy as jnp
import numpyro
import numpyro.distributions as dist
from jaxtyping import Array, Float

from bayesrange.inference._cards import SIGNED
from bayesrange.inference._memory_data import MemoryData
from bayesrange.inference._range_data import RangeData

CORRELATION = 2.0
"""Concentration of the LKJ prior on correlations between a unit's coefficients: mildly towards none."""


@dataclass(frozen=True)
class Layout:
    """Which coefficients differ between which units (static).

    Attributes:
        unit: "group" or "animal"; begins the names of the sites.
        count: number of units.
        coefficients: name of each varying parameter, its family and its number of coefficients (one a layer, or 1).
        covariates: names of the covariates, after coding.
        independent: how many of the first coefficients have no correlation with others.
    """

    unit: str
    count: int
    coefficients: tuple[tuple[str, str, int], ...]
    covariates: tuple[str, ...]
    independent: int = 0

    @property
    def rows(self) -> dict[str, slice]:
        """Which coefficients belong to each parameter."""
        found, first = {}, 0
        for name, _, count in self.coefficients:
            found[name] = slice(first, first + count)
            first += count
        return found

    @property
    def size(self) -> int:
        """Number of coefficients."""
        return sum(count for _, _, count in self.coefficients)

    @property
    def correlated(self) -> int:
        """Number of coefficients with a correlation between them; 0 where one would stand alone."""
        count = self.size - self.independent
        return count if count > 1 else 0

    def place(self, k: int) -> str:
        """Site of coefficient k's coordinates."""
        return f"{self.unit}_place_{k}"

    @property
    def correlation(self) -> str:
        """Site of the correlation's Cholesky factor."""
        return f"{self.unit}_correlation"


type HierarchyData = RangeData | MemoryData
"""Data with `priors`, `spread_scale`, `covariates` (units), `effect_sd` and `centring`."""


class Hierarchy(NamedTuple):
    """Where units' coefficients are expected and how far they spread, on the unconstrained scale.

    Attributes:
        expected: μ of each coefficient and unit: the population value and the covariates' share.
        spread: sd between units of each coefficient.
        factor: Cholesky factor of the correlation between a unit's coefficients.
    """

    expected: Float[Array, "units coefficients"]
    spread: Float[Array, " coefficients"]
    factor: Float[Array, "coefficients coefficients"]


def distribution(family: str, numbers: Float[Array, " numbers"]) -> dist.Distribution:
    """NumPyro distribution of a prior family."""
    if family == "normal":
        return dist.Normal(numbers[0], numbers[1])
    if family == "half-normal":
        return dist.HalfNormal(numbers[0])
    if family == "log-normal":
        return dist.LogNormal(jnp.log(numbers[0]), numbers[1])
    if family == "exponential":
        return dist.Exponential(1 / numbers[0])
    return dist.Uniform(numbers[0], numbers[1])


def sample_hierarchy(layout: Layout, data: HierarchyData) -> Hierarchy:
    """Draw what units have in common from its prior."""
    expected, spreads = [], []
    for name, family, count in layout.coefficients:
        own = layout.rows[name]
        prior = distribution(family, data.priors[name])
        several = name in ("resource", "selection")
        centre = numpyro.sample(f"{name}_population", prior.expand([count]).to_event(1) if several else prior)
        centre = jnp.broadcast_to(centre if name in SIGNED else jnp.log(centre), (count,))
        scale = jnp.asarray(data.spread_scale)[own]
        spreads.append(numpyro.sample(f"{name}_spread", dist.HalfNormal(scale).to_event(1)))
        mean = jnp.broadcast_to(centre, (layout.count, count))
        if layout.covariates:
            effect = dist.Normal(0.0, data.effect_sd).expand([count, len(layout.covariates)]).to_event(2)
            mean = mean + jnp.asarray(data.covariates) @ numpyro.sample(f"{name}_effect", effect).T
        expected.append(mean)
    mean, spread = jnp.concatenate(expected, axis=1), jnp.concatenate(spreads)
    factor = jnp.eye(layout.size)
    if layout.correlated:
        own_factor = numpyro.sample(layout.correlation, dist.LKJCholesky(layout.correlated, CORRELATION))
        factor = factor.at[layout.independent :, layout.independent :].set(own_factor)
    return Hierarchy(mean, spread, factor)


def walk_coefficients(
    hierarchy: Hierarchy,
    centring: Float[Array, "units coefficients"],
    place: Callable[[int, Float[Array, " units"], Float[Array, " units"]], Float[Array, " units"]],
) -> Float[Array, "units coefficients"]:
    """Units' coefficients η, one after another, each given those before it.

    Coefficient k has mean m = μ_k + s_k Σ_{j<k} L_kj ξ_j and sd σ = s_k L_kk given the earlier ones, ξ_j their
    innovations. It is sampled as ζ ~ N(c m, σ^c), η = m + σ^(1−c) (ζ − c m). c = 0 is the non-centred form, c = 1 the
    centred one. Where the fixes of a unit say more about its coefficient than the population does, the centred form
    has the simpler geometry, and the other way round (Papaspiliopoulos, Roberts & Sköld 2007, Statistical Science
    22:59). The posterior is the same for every c.

    Args:
        hierarchy: what units have in common.
        centring: c.
        place: (k, c m, σ^c) → ζ of coefficient k.
    """
    etas: list[Array] = []
    noise: list[Array] = []
    for k in range(hierarchy.spread.size):
        earlier = sum((hierarchy.factor[k, j] * noise[j] for j in range(k)), jnp.zeros(centring.shape[0]))
        mean = hierarchy.expected[:, k] + hierarchy.spread[k] * earlier
        sd = hierarchy.spread[k] * hierarchy.factor[k, k]
        c = centring[:, k]
        etas.append(mean + sd ** (1 - c) * (place(k, c * mean, sd**c) - c * mean))
        noise.append((etas[-1] - mean) / sd)
    return jnp.stack(etas, axis=1)


def place_units(
    eta: Float[Array, "units coefficients"],
    hierarchy: Hierarchy,
    centring: Float[Array, "units coefficients"],
    layout: Layout,
) -> dict[str, Array]:
    """Sites ζ that `walk_coefficients` turns into given coefficients η."""
    scaled = (eta - hierarchy.expected) / hierarchy.spread
    noise = jax.scipy.linalg.solve_triangular(hierarchy.factor, scaled.T, lower=True).T
    sd = hierarchy.spread * jnp.diag(hierarchy.factor)
    mean = eta - sd * noise
    place = centring * mean + sd**centring * noise
    return {layout.place(k): place[:, k] for k in range(sd.size)}


def sample_units(layout: Layout, data: HierarchyData) -> Float[Array, "units coefficients"]:
    """Draw the units' coefficients η."""

    def place(k: int, centre: Array, width: Array) -> Array:
        return numpyro.sample(layout.place(k), dist.Normal(centre, width).to_event(1))

    return walk_coefficients(sample_hierarchy(layout, data), jnp.asarray(data.centring), place)
