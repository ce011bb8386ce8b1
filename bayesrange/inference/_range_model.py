"""NumPyro model of the range cards: priors, then one tested likelihood; and what is derived from a draw.

Site names are the parameter names of the cards; units are those of the numerics (km). With hierarchical pooling see
`_hierarchy.py`; `X` then holds the groups' own values.
"""

from typing import Any

import jax
import jax.numpy as jnp
import numpy as np
import numpyro
import numpyro.distributions as dist
from jaxtyping import Array, Bool, Float

from bayesrange.inference._cards import SIGNED
from bayesrange.inference._derived import ISOPLETHS, isopleth_levels, overlaps, rank_mass
from bayesrange.inference._groups_there import each_set, mean_solution
from bayesrange.inference._hierarchy import Layout, distribution, sample_units
from bayesrange.inference._range_data import RangeData, RangeSpec
from bayesrange.spaceuse import (
    SOLVED,
    Parameters,
    Setting,
    Solution,
    arrival_scent,
    gibbs,
    log_fix_density,
    steady_state,
)

MODEST_MARKING = 0.01
"""Over-marking from which the search for the mode begins at the most: steady where summed scent is below some 100."""


def sample_parameters(spec: RangeSpec, data: RangeData) -> Parameters:
    """Draw every parameter from its prior and lay them out one value per group."""
    groups = len(spec.groups)
    layout = group_layout(spec)
    if layout is not None:
        values = _by_group(layout, data)
    else:
        values = {name: _population(spec, data, name) for name in spec.parameters if name != "retreat"}
    if "retreat" in spec.parameters:
        values["retreat"] = _population(spec, data, "retreat")
    over_marking = _population(spec, data, "over_marking") if spec.over_marking else jnp.zeros(())
    resource = values.get("resource", jnp.zeros((0,)))
    return Parameters(
        localising=jnp.broadcast_to(values.get("localising", 0.0), (groups,)),
        retreat=jnp.broadcast_to(values.get("retreat", 0.0), (groups,)),
        avoidance=jnp.broadcast_to(values.get("avoidance", 0.0), (groups,)),
        resource=jnp.broadcast_to(resource[:, None] if resource.ndim == 1 else resource, (len(spec.layers), groups)),
        over_marking=over_marking,
        home=_homes(spec, data),
        marking=_marking(spec, data),
    )


def log_likelihood(spec: RangeSpec, data: RangeData, parameters: Parameters) -> tuple[Float[Array, " fixes"], Solution]:
    """Weighted log density of each fix [log 1/km²], and the solution it was read from.

    Where groups come and go, fixes are read from the steady state of the set of groups that was there; the solution
    returned is the mean over each group's time.
    """

    def solve(setting: Setting) -> Solution:
        return steady_state(parameters, setting, solver=spec.solver, coupled=spec.coupled)

    if data.share is None:
        solution = solve(data.setting)
        seen = solution.log_density
    else:
        parameters, by_set = each_set(parameters, data)

        def of_set(marking: Array) -> Solution:
            return solve(data.setting._replace(marking=marking))

        # `flux` at once: a loop would share its analysis between the sets and free it more than once.
        solutions = jax.vmap(of_set)(by_set) if spec.solver == "flux" else jax.lax.map(of_set, by_set)
        solution = mean_solution(solutions, data.share)
        seen = solutions.log_density.reshape(-1, *solution.log_density.shape[1:])
    if data.log_detection is not None:  # fixes have the density u d / ∫ u d
        seen = seen + data.log_detection
    log_density = log_fix_density(seen, data.reading)
    return jnp.where(data.weight > 0, data.weight * log_density, 0.0), solution


def range_model(spec: RangeSpec, data: RangeData) -> None:
    """Joint model; a steady state that was not found has probability 0 and shows as a divergence."""
    parameters = sample_parameters(spec, data)
    terms, solution = log_likelihood(spec, data, parameters)
    numpyro.factor("fixes", jnp.where(solution.result == SOLVED, terms.sum(), -jnp.inf))


def group_layout(spec: RangeSpec) -> Layout | None:
    """The hierarchy of groups; None where they share everything."""
    if not spec.varying:
        return None
    copies = {"resource": len(spec.layers)}
    coefficients = tuple((name, spec.family(name), copies.get(name, 1)) for name in spec.varying)
    return Layout("group", len(spec.groups), coefficients, spec.covariates)


class RangeModel:
    """The range cards as `Program` sees a model."""

    def __init__(self, spec: RangeSpec) -> None:
        self.spec = spec
        self.layout = group_layout(spec)
        self.has_other_states = spec.coupled and spec.solver == "gibbs"

    def prior(self, data: RangeData) -> Parameters:
        """Parameters from their priors."""
        return sample_parameters(self.spec, data)

    def joint(self, data: RangeData) -> None:
        """Priors and likelihood."""
        range_model(self.spec, data)

    def centre(self, name: str, usual: Array, data: RangeData) -> Array:
        """Where the search for the mode begins, for sites whose prior alone does not say."""
        if name in ("home_x", "home_y"):
            axis = ("home_x", "home_y").index(name)
            low, high = data.box[axis], data.box[axis + 2]
            margin = 1e-3 * (high - low)
            return jnp.clip(jnp.asarray(data.home)[jnp.array(self.spec.estimated), axis], low + margin, high - margin)
        if name == "over_marking":  # a wide prior has its centre where marks grow without bound
            return jnp.minimum(usual, MODEST_MARKING)
        if name == "animals" and data.animals is not None:
            return jnp.asarray(data.animals).mean(1)
        return usual

    def derive(self, parameters: Parameters, data: RangeData) -> tuple[dict[str, Array], dict[str, Array]]:
        """Of a draw, what is kept (log-likelihood, areas, overlaps) and what is only summed (densities, isopleths)."""
        terms, solution = log_likelihood(self.spec, data, parameters)
        area = data.setting.domain.area
        density = solution.density
        denser, own = rank_mass(density, area)
        inside, areas = isopleth_levels(denser, own, area, jnp.array(ISOPLETHS) / 100)
        kept = {
            "log_likelihood": terms.astype(jnp.float32), "area_km2": areas, "overlap": overlaps(density, area),
            "solved": solution.result == SOLVED,
        }  # fmt: skip
        return kept, {"density": density, "density_squared": density**2, "inside": inside}

    def extras(self, program: Any, positions: np.ndarray, data: RangeData, extra: Any) -> dict[str, np.ndarray]:
        """Nothing more at the end of a chain."""
        return {}

    def other_state(self, parameters: Parameters, data: RangeData) -> Bool[Array, ""]:
        """Whether groups that arrive one by one, in either order, settle in another steady state."""
        if data.share is None:
            return _two_states(parameters, data.setting)
        parameters, by_set = each_set(parameters, data)
        return jax.lax.map(lambda own: _two_states(parameters, data.setting._replace(marking=own)), by_set).any()


def _two_states(parameters: Parameters, setting: Setting) -> Bool[Array, ""]:
    """Whether groups that arrive one by one, in either order, settle in another steady state."""
    usual = gibbs(parameters, setting)
    order = range(setting.marking.shape[0])
    differs = jnp.zeros((), bool)
    for arrival in (order, order[::-1]):
        other = gibbs(parameters, setting, start=arrival_scent(parameters, setting, arrival))
        gap = jnp.max(jnp.abs(other.density - usual.density)) / jnp.max(usual.density)
        differs = differs | ((other.result == SOLVED) & (gap > 1e-5))
    return differs


def _population(spec: RangeSpec, data: RangeData, name: str) -> Array:
    prior = distribution(spec.family(name), data.priors[name])
    if name == "resource":
        prior = prior.expand([len(spec.layers)]).to_event(1)
    return numpyro.sample(name, prior)


def _homes(spec: RangeSpec, data: RangeData) -> Float[Array, "groups 2"]:
    if not spec.estimated:
        return jnp.asarray(data.home)
    count, index = len(spec.estimated), jnp.array(spec.estimated)
    west, south, east, north = data.box
    x = numpyro.sample("home_x", dist.Uniform(west, east).expand([count]).to_event(1))
    y = numpyro.sample("home_y", dist.Uniform(south, north).expand([count]).to_event(1))
    return jnp.asarray(data.home).at[index].set(jnp.stack([x, y], axis=1))


def _marking(spec: RangeSpec, data: RangeData) -> Float[Array, " groups"] | None:
    """n_i A₀ where some n_i is uncertain: uniform between its least and largest number, no whole one."""
    if data.animals is None or data.a0 is None:
        return None
    low, high = jnp.asarray(data.animals).T
    animals = numpyro.sample("animals", dist.Uniform(low, high).to_event(1))
    return jnp.asarray(data.setting.marking).at[jnp.array(spec.counted)].set(animals * data.a0)


def _by_group(layout: Layout, data: RangeData) -> dict[str, Array]:
    """Values of each group for the varying parameters: (groups,), or (layers, groups) for `resource`."""
    eta = sample_units(layout, data)
    values: dict[str, Array] = {}
    for name, own in layout.rows.items():
        values[name] = numpyro.deterministic(name, eta[:, own].T if name in SIGNED else jnp.exp(eta[:, own.start]))
    return values
