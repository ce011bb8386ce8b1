"""NumPyro model of the memory cards: priors, then one tested likelihood; and what is derived from a draw.

Site names are those of the tables, apart from the excesses (see `_memory_data.py`), which carry the priors of the
decay times. Pooled animals follow `_hierarchy.py`; the recall's half point, the rhythm and the encoding range are
common to all. Animals that travel together share one unit.
"""

from typing import Any

import jax.numpy as jnp
import numpy as np
import numpyro
import numpyro.distributions as dist
from jaxtyping import Array, Float

from bayesrange.inference._cards import SIGNED
from bayesrange.inference._hierarchy import Layout, distribution, sample_units
from bayesrange.inference._memory_data import EXCESS, MemoryData, MemorySpec
from bayesrange.memory import (
    StepParameters,
    animal_log_likelihood,
    recall_surfaces,
    step_log_likelihood,
)

KERNEL = ("step_shape", "step_scale", "turn_concentration")
"""Coefficients of the movement kernel: a record tells them so well that a correlation between them is not modelled."""
COMMON = ("recall_half", "encoding_range", "step_rhythm")
"""Parameters that pooled animals share."""
HARMONICS = 4


def animal_layout(spec: MemorySpec) -> Layout | None:
    """The hierarchy of animals; None where each stands alone."""
    if not spec.pooled:
        return None
    names = [EXCESS.get(name, name) for name in spec.parameters if name not in COMMON]
    names = [name for name in KERNEL if name in names] + [name for name in names if name not in KERNEL]
    copies = {"selection": len(spec.layers)}
    coefficients = tuple((name, spec.family(name), copies.get(name, 1)) for name in names)
    return Layout("animal", len(spec.units), coefficients, spec.covariates, independent=len(KERNEL))


class MemoryModel:
    """The memory cards as `Program` sees a model."""

    has_other_states = False

    def __init__(self, spec: MemorySpec) -> None:
        self.spec = spec
        self.layout = animal_layout(spec)

    def prior(self, data: MemoryData) -> StepParameters:
        """Parameters from their priors, laid out one value an animal."""
        spec, animals = self.spec, len(self.spec.animals)
        values = self._pooled(data) if self.layout is not None else self._alone(data)
        values |= self._decays(values, data)
        common = {name: self._common(name, data) for name in COMMON if name in dict(spec.families)}
        nothing = jnp.zeros((animals,))
        scale = common.get("encoding_range", jnp.asarray(data.fixed_range))
        return StepParameters(
            shape=values["step_shape"],
            scale=values["step_scale"],
            concentration=values["turn_concentration"],
            rhythm=jnp.broadcast_to(common.get("step_rhythm", 0.0), (animals, HARMONICS)),
            selection=values["selection"].T if "selection" in values else jnp.zeros((animals, 0)),
            reference_strength=values.get("reference_strength", nothing),
            reference_decay=values.get("reference_decay", nothing + 1.0),
            working_strength=values.get("working_strength", nothing),
            working_decay=values.get("working_decay", nothing + 1.0),
            recall_half=jnp.broadcast_to(common.get("recall_half", 1.0), (animals,)),
            encoding_range=jnp.reshape(scale, ()),
            home_pull=values.get("home_pull", nothing),
            home=self._homes(data),
            home_eps=jnp.asarray(data.home_eps),
        )

    def joint(self, data: MemoryData) -> None:
        """Priors and likelihood."""
        numpyro.factor("steps", animal_log_likelihood(self.prior(data), data.steps).sum())

    def centre(self, name: str, usual: Array, data: MemoryData) -> Array:
        """Where the search for the mode begins, for sites whose prior alone does not say."""
        if name in ("home_x", "home_y"):
            axis = ("home_x", "home_y").index(name)
            low, high = data.box[:, axis], data.box[:, axis + 2]
            margin = 1e-3 * (high - low)
            return jnp.clip(jnp.asarray(data.home)[:, axis], low + margin, high - margin)
        if name == "log_encoding_range":
            return jnp.mean(jnp.log(jnp.array(self.spec.range_limits)))
        return usual

    def derive(self, parameters: StepParameters, data: MemoryData) -> tuple[dict[str, Array], dict[str, Array]]:
        """Of a draw, what is kept (log-likelihood of each step) and what is only summed (recall over the area)."""
        terms = step_log_likelihood(parameters, data.steps)
        weight = jnp.asarray(data.steps.weight)[data.steps.animal]
        kept = {"log_likelihood": (terms * weight[:, None]).astype(jnp.float32)}
        if not self.spec.remembers:
            return kept, {}
        reference, working = recall_surfaces(parameters, data.surface, data.steps)
        return kept, {"recall": reference, "recall_squared": reference**2, "working": working}

    def extras(self, program: Any, positions: np.ndarray, data: MemoryData, extra: Any) -> dict[str, np.ndarray]:
        """What more nodes would do to the log-likelihood, at some of the chain's draws."""
        from bayesrange.inference._memory_nodes import difference_with_more_nodes

        return difference_with_more_nodes(program, positions, data, extra)

    def other_state(self, parameters: StepParameters, data: MemoryData) -> Array:
        """Steps have one likelihood: there is no other."""
        return jnp.zeros((), bool)

    def _pooled(self, data: MemoryData) -> dict[str, Array]:
        """Values of each animal: (animals,), or (layers, animals) for `selection`."""
        assert self.layout is not None
        eta = sample_units(self.layout, data)[jnp.asarray(data.unit)]
        values: dict[str, Array] = {}
        for name, own in self.layout.rows.items():
            value = eta[:, own].T if name == "selection" else eta[:, own.start]
            value = value if name in SIGNED else jnp.exp(value)
            values[name] = value if name in EXCESS.values() else numpyro.deterministic(name, value)
        return values

    def _alone(self, data: MemoryData) -> dict[str, Array]:
        animals = len(self.spec.animals)
        values = {}
        for name in (EXCESS.get(name, name) for name in self.spec.parameters if name not in COMMON):
            prior = distribution(self.spec.family(name), data.priors[name])
            shape = [len(self.spec.layers), animals] if name == "selection" else [animals]
            values[name] = numpyro.sample(name, prior.expand(shape).to_event(len(shape)))
        return values

    def _decays(self, values: dict[str, Array], data: MemoryData) -> dict[str, Array]:
        """Decay times [h] from their excesses; those of the population, the median animal's, along with them."""
        if not self.spec.remembers:
            return {}
        working = numpyro.deterministic("working_decay", data.least_decay + values["working_excess"])
        found = {"working_decay": working}
        found["reference_decay"] = numpyro.deterministic("reference_decay", working + values["reference_excess"])
        return found

    def _common(self, name: str, data: MemoryData) -> Array:
        numbers = data.priors[name]
        if name == "encoding_range":  # a log-normal, cut off where its table ends
            low, high = (jnp.log(limit) for limit in self.spec.range_limits)
            cut = dist.TruncatedNormal(jnp.log(numbers[0]), numbers[1], low=low, high=high)
            return numpyro.deterministic(name, jnp.exp(numpyro.sample("log_encoding_range", cut)))
        prior = distribution(self.spec.family(name), numbers)
        if name == "step_rhythm":
            return numpyro.sample(name, prior.expand([HARMONICS]).to_event(1))
        if self.layout is None:
            return numpyro.sample(name, prior.expand([len(self.spec.animals)]).to_event(1))
        return numpyro.sample(name, prior)

    def _homes(self, data: MemoryData) -> Float[Array, "animals 2"]:
        if "home_pull" not in self.spec.parameters:
            return jnp.asarray(data.home)
        west, south, east, north = jnp.asarray(data.box).T
        x = numpyro.sample("home_x", dist.Uniform(west, east).to_event(1))
        y = numpyro.sample("home_y", dist.Uniform(south, north).to_event(1))
        return jnp.stack([x, y], axis=1)
