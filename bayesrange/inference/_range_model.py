"""NumPyro model of the range cards: priors, then one tested likelihood.

Site names are the parameter names of the cards; units are those of the numerics (km). With hierarchical pooling the
unconstrained values of group a are η_a = μ + C z_a + s L ξ_a, ξ_a ~ N(0, 1), sampled in the coordinates of
`walk_coefficients`; positive parameters are exp(η). `X_population` is then the value of the median group at covariates
of mean 0, `X_spread` the sd on the unconstrained scale, `X_effect` the coefficients of the covariates, `X` the groups'
own values.
"""

from collections.abc import Callable
from typing import NamedTuple

import jax
import jax.numpy as jnp
import numpyro
import numpyro.distributions as dist
from jaxtyping import Array, Float

from bayesrange.inference._cards import SIGNED
from bayesrange.inference._range_data import RangeData, RangeSpec
from bayesrange.spaceuse import SOLVED, Parameters, Solution, log_fix_density, steady_state

CORRELATION = 2.0
"""Concentration of the LKJ prior on correlations between a group's coefficients: mildly towards none."""


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


def sample_parameters(spec: RangeSpec, data: RangeData) -> Parameters:
    """Draw every parameter from its prior and lay them out one value per group."""
    groups = len(spec.groups)
    if spec.varying:
        values = _by_group(spec, data)
    else:
        values = {name: _population(spec, data, name, name) for name in spec.parameters if name != "retreat"}
    if "retreat" in spec.parameters:
        values["retreat"] = _population(spec, data, "retreat", "retreat")
    over_marking = _population(spec, data, "over_marking", "over_marking") if spec.over_marking else jnp.zeros(())
    resource = values.get("resource", jnp.zeros((0,)))
    return Parameters(
        localising=jnp.broadcast_to(values.get("localising", 0.0), (groups,)),
        retreat=jnp.broadcast_to(values.get("retreat", 0.0), (groups,)),
        avoidance=jnp.broadcast_to(values.get("avoidance", 0.0), (groups,)),
        resource=jnp.broadcast_to(resource[:, None] if resource.ndim == 1 else resource, (len(spec.layers), groups)),
        over_marking=over_marking,
        home=_homes(spec, data),
    )


def log_likelihood(spec: RangeSpec, data: RangeData, parameters: Parameters) -> tuple[Float[Array, " fixes"], Solution]:
    """Weighted log density of each fix [log 1/km²], and the solution it was read from."""
    solution = steady_state(parameters, data.setting, solver=spec.solver, coupled=spec.coupled)
    log_density = log_fix_density(solution.log_density, data.reading)
    return jnp.where(data.weight > 0, data.weight * log_density, 0.0), solution


def range_model(spec: RangeSpec, data: RangeData) -> None:
    """Joint model; a steady state that was not found has probability 0 and shows as a divergence."""
    parameters = sample_parameters(spec, data)
    terms, solution = log_likelihood(spec, data, parameters)
    numpyro.factor("fixes", jnp.where(solution.result == SOLVED, terms.sum(), -jnp.inf))


def _population(spec: RangeSpec, data: RangeData, name: str, site: str) -> Array:
    prior = distribution(spec.family(name), data.priors[name])
    if name == "resource":
        prior = prior.expand([len(spec.layers)]).to_event(1)
    return numpyro.sample(site, prior)


def _homes(spec: RangeSpec, data: RangeData) -> Float[Array, "groups 2"]:
    if not spec.estimated:
        return jnp.asarray(data.home)
    count, index = len(spec.estimated), jnp.array(spec.estimated)
    west, south, east, north = data.box
    x = numpyro.sample("home_x", dist.Uniform(west, east).expand([count]).to_event(1))
    y = numpyro.sample("home_y", dist.Uniform(south, north).expand([count]).to_event(1))
    return jnp.asarray(data.home).at[index].set(jnp.stack([x, y], axis=1))


class Hierarchy(NamedTuple):
    """Where groups' coefficients are expected and how far they spread, on the unconstrained scale.

    Attributes:
        expected: μ_g of each coefficient and group: the population value and the covariates' share.
        spread: sd between groups of each coefficient.
        factor: Cholesky factor of the correlation between a group's coefficients.
    """

    expected: Float[Array, "groups coefficients"]
    spread: Float[Array, " coefficients"]
    factor: Float[Array, "coefficients coefficients"]


def sample_hierarchy(spec: RangeSpec, data: RangeData) -> Hierarchy:
    """Draw what groups have in common from its prior."""
    expected, spreads = [], []
    for name, own in coefficient_rows(spec).items():
        count = own.stop - own.start
        centre = _population(spec, data, name, f"{name}_population")
        centre = jnp.broadcast_to(centre if name in SIGNED else jnp.log(centre), (count,))
        scale = jnp.asarray(data.spread_scale)[own]
        spreads.append(numpyro.sample(f"{name}_spread", dist.HalfNormal(scale).to_event(1)))
        mean = jnp.broadcast_to(centre, (len(spec.groups), count))
        if spec.covariates:
            prior = dist.Normal(0.0, data.effect_sd).expand([count, len(spec.covariates)]).to_event(2)
            mean = mean + jnp.asarray(data.covariates) @ numpyro.sample(f"{name}_effect", prior).T
        expected.append(mean)
    mean, spread = jnp.concatenate(expected, axis=1), jnp.concatenate(spreads)
    if spread.size == 1:
        return Hierarchy(mean, spread, jnp.ones((1, 1)))
    return Hierarchy(mean, spread, numpyro.sample("group_correlation", dist.LKJCholesky(spread.size, CORRELATION)))


def coefficient_rows(spec: RangeSpec) -> dict[str, slice]:
    """Which coefficients of the hierarchy belong to each varying parameter: one, or one a layer for `resource`."""
    rows, first = {}, 0
    for name in spec.varying:
        count = len(spec.layers) if name == "resource" else 1
        rows[name] = slice(first, first + count)
        first += count
    return rows


def walk_coefficients(
    hierarchy: Hierarchy,
    centring: Float[Array, "groups coefficients"],
    place: Callable[[int, Float[Array, " groups"], Float[Array, " groups"]], Float[Array, " groups"]],
) -> Float[Array, "groups coefficients"]:
    """Groups' coefficients η, one after another, each given those before it.

    Coefficient k has mean m = μ_k + s_k Σ_{j<k} L_kj ξ_j and sd σ = s_k L_kk given the earlier ones, ξ_j their
    innovations. It is sampled as ζ ~ N(c m, σ^c), η = m + σ^(1−c) (ζ − c m). c = 0 is the non-centred form, c = 1 the
    centred one. Where the fixes of a group say more about its coefficient than the population does, the centred form
    has the simpler geometry, and the other way round (Papaspiliopoulos, Roberts & Sköld 2007, Statistical Science
    22:59). The posterior is the same for every c.

    Args:
        hierarchy: what groups have in common.
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


def place_groups(
    eta: Float[Array, "groups coefficients"], hierarchy: Hierarchy, centring: Float[Array, "groups coefficients"]
) -> dict[str, Array]:
    """Sites ζ that `walk_coefficients` turns into given coefficients η."""
    scaled = (eta - hierarchy.expected) / hierarchy.spread
    noise = jax.scipy.linalg.solve_triangular(hierarchy.factor, scaled.T, lower=True).T
    sd = hierarchy.spread * jnp.diag(hierarchy.factor)
    mean = eta - sd * noise
    place = centring * mean + sd**centring * noise
    return {f"group_place_{k}": place[:, k] for k in range(sd.size)}


def _by_group(spec: RangeSpec, data: RangeData) -> dict[str, Array]:
    """Values of each group for the varying parameters: (groups,), or (layers, groups) for `resource`."""

    def place(k: int, centre: Array, width: Array) -> Array:
        return numpyro.sample(f"group_place_{k}", dist.Normal(centre, width).to_event(1))

    eta = walk_coefficients(sample_hierarchy(spec, data), jnp.asarray(data.centring), place)
    values: dict[str, Array] = {}
    for name, own in coefficient_rows(spec).items():
        values[name] = numpyro.deterministic(name, eta[:, own].T if name in SIGNED else jnp.exp(eta[:, own.start]))
    return values
