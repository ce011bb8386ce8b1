"""NumPyro model of the range cards: priors, then one tested likelihood.

Site names are the parameter names of the cards; units are those of the numerics (km). With hierarchical pooling the
unconstrained values of group a are η_a = μ + C z_a + L ξ_a, ξ_a ~ N(0, 1) (non-centred); positive parameters are
exp(η). `X_population` is then the value of the median group at covariates of mean 0, `X_spread` the sd on the
unconstrained scale, `X_effect` the coefficients of the covariates, `X` the groups' own values.
"""

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


def _by_group(spec: RangeSpec, data: RangeData) -> dict[str, Array]:
    """Values of each group for the varying parameters: (groups,), or (layers, groups) for `resource`."""
    groups, size = len(spec.groups), {name: len(spec.layers) if name == "resource" else 1 for name in spec.varying}
    rows = sum(size.values())
    noise = numpyro.sample("group_noise", dist.Normal(0.0, 1.0).expand([rows, groups]).to_event(2))
    if rows > 1:
        noise = numpyro.sample("group_correlation", dist.LKJCholesky(rows, CORRELATION)) @ noise
    values: dict[str, Array] = {}
    first = 0
    for name in spec.varying:
        own = slice(first, first + size[name])
        first += size[name]
        centre = _population(spec, data, name, f"{name}_population")
        spread_prior = dist.HalfNormal(jnp.asarray(data.spread_scale)[own]).to_event(1)
        spread = numpyro.sample(f"{name}_spread", spread_prior)
        eta = (centre if name in SIGNED else jnp.log(centre)[None])[:, None] + spread[:, None] * noise[own]
        if spec.covariates:
            prior = dist.Normal(0.0, data.effect_sd).expand([size[name], len(spec.covariates)]).to_event(2)
            eta = eta + numpyro.sample(f"{name}_effect", prior) @ jnp.asarray(data.covariates).T
        values[name] = numpyro.deterministic(name, eta if name in SIGNED else jnp.exp(eta[0]))
    return values
