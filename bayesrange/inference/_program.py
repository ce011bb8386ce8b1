"""The compiled functions of a fit: log-density, sampler, and what is derived from each draw.

Positions are flat vectors on the unconstrained space. The sampler moves in w, z = mode + L w, with L from the
curvature at the mode, so that NUTS meets a target near a standard normal from its first draw. Data, mode and L are
arguments of every compiled function: another data set of the same shape compiles nothing.
"""

from collections.abc import Callable
from functools import cached_property, partial
from typing import Any, NamedTuple

import jax
import jax.numpy as jnp
import numpy as np
import numpyro
from jax.flatten_util import ravel_pytree
from jaxtyping import Array, Float, Int
from numpyro.infer.hmc import hmc
from numpyro.infer.util import constrain_fn, potential_energy, unconstrain_fn

from bayesrange.inference._centring import typical
from bayesrange.inference._hierarchy import Hierarchy, place_units, sample_hierarchy, walk_coefficients
from bayesrange.inference._models import Data, Spec, model_of
from bayesrange.inference._priors import POSITIVE

MAX_TREE_DEPTH = 10


class Whitening(NamedTuple):
    """z = mode + scale @ w."""

    mode: Float[Array, " d"]
    scale: Float[Array, "d d"]


class Recorded(NamedTuple):
    """What is kept of each transition of a chunk; row i belongs to draw i.

    `before` (in w) and `key` are the state before the transition, so that a divergent one can be run again;
    `position` is z after it.
    """

    before: Float[Array, "n d"]
    key: Array
    position: Float[Array, "n d"]
    diverging: Array
    energy: Float[Array, " n"]
    potential: Float[Array, " n"]
    gradients: Int[Array, " n"]
    accept: Float[Array, " n"]
    step_size: Float[Array, " n"]


class Program:
    """Compiled functions of one model; build once a process.

    Args:
        spec: the static part of the model.
        data: any data of the right shapes; used to find the layout of the parameters.
        warmup: adaptation steps.
        target_accept: target of the step size adaptation.
        chunk: most transitions in one call of `advance`.
    """

    def __init__(self, spec: Spec, data: Data, warmup: int, target_accept: float, chunk: int) -> None:
        self.spec, self.warmup, self.target_accept, self.chunk = spec, warmup, target_accept, chunk
        self.kind = model_of(spec)
        self.model, self.prior, self.layout = self.kind.joint, self.kind.prior, self.kind.layout
        guess = self.first_guess(data)
        flat, self._unravel = ravel_pytree(guess)
        self._layout = {name: value.shape for name, value in guess.items()}
        self.dimension = flat.size
        self._init_kernel, self._sample_kernel = hmc(potential_fn_gen=self.potential_in_w, algo="NUTS")

    def first_guess(self, data: Data) -> dict[str, Array]:
        """Unconstrained parameters at prior centres and first homes; no differences between groups or animals."""
        trace = numpyro.handlers.trace(numpyro.handlers.seed(self.prior, 0)).get_trace(data)
        sites = {name: site["value"] for name, site in trace.items() if site["type"] == "sample"}
        guess = {name: self.kind.centre(name, self._centre(name, value, data), data) for name, value in sites.items()}
        return unconstrain_fn(self.prior, (data,), {}, guess)

    def _centre(self, name: str, value: Array, data: Data) -> Array:
        if self.layout is not None and name == self.layout.correlation:
            return jnp.eye(value.shape[0])
        if name.endswith("_spread"):
            return jnp.full_like(value, 0.2)
        parameter = name.removesuffix("_population")
        if parameter in data.priors:
            family, numbers = self.spec.family(parameter), data.priors[parameter]
            if family in POSITIVE:
                return jnp.full_like(value, numbers[0] * (1.0 if family == "log-normal" else 0.3))
            return jnp.full_like(value, numbers.mean() if family == "uniform" else numbers[0])
        return jnp.zeros_like(value)

    # --- log-density -------------------------------------------------------------------------------------------

    def potential(self, z: Float[Array, " d"], data: Data) -> Float[Array, ""]:
        """Negative log posterior density on the unconstrained space."""
        return potential_energy(self.model, (data,), {}, self._unravel(z))

    @cached_property
    def prior_gradient(self) -> Callable[..., Array]:
        """(z, data) → gradient of the prior's potential alone."""
        return jax.jit(jax.grad(lambda z, data: potential_energy(self.prior, (data,), {}, self._unravel(z))))

    def potential_in_w(self, data: Data, whitening: Whitening) -> Callable[[dict[str, Array]], Array]:
        """Log-density in the sampler's coordinates, as NumPyro's kernel wants it."""
        return lambda w: self.potential(whitening.mode + whitening.scale @ w["w"], data)

    def value_and_gradient(self, z: Float[Array, " d"], data: Data) -> tuple[Array, Array]:
        """Potential and its gradient; the same compiled program as `begin`, to spare a compilation."""
        plain = Whitening(jnp.zeros(self.dimension), jnp.eye(self.dimension))
        state = self.begin(z, jax.random.key_data(jax.random.key(0)), data, plain)
        return state.potential_energy, state.z_grad["w"]

    def apart(self) -> np.ndarray:
        """Which coordinates are spreads and correlations of a hierarchy."""
        correlation = self.layout.correlation if self.layout is not None else ""
        marks = {name: name.endswith("_spread") or name == correlation for name in self._layout}
        filled = {name: jnp.full(shape, marks[name], float) for name, shape in self._layout.items()}
        return np.asarray(ravel_pytree(filled)[0]) > 0

    def centred(self, z: np.ndarray, curvature: np.ndarray, data: Data) -> tuple[np.ndarray, Data]:
        """A typical point near the mode, in the coordinates that suit how much each unit's fixes say.

        Args:
            z: mode with `centring` 0.
            curvature: curvature there. For a unit's coefficient it is 1 (prior) + s² × information of the fixes.
            data: with `centring` 0.

        Returns:
            The point in the new coordinates, and the data with its `centring` (see `walk_coefficients`).
        """
        layout = self.layout
        assert layout is not None
        values = constrain_fn(self.prior, (data,), {}, self._unravel(z))
        hierarchy = numpyro.handlers.substitute(partial(sample_hierarchy, layout), values)(data)
        sites = [layout.place(k) for k in range(layout.size)]
        eta = walk_coefficients(hierarchy, jnp.asarray(data.centring), lambda k, centre, width: values[sites[k]])
        diagonal = self._unravel(jnp.diag(jnp.asarray(curvature)))
        found = []
        for k, scale in enumerate(np.asarray(data.spread_scale)):
            sd = float(hierarchy.spread[k] * hierarchy.factor[k, k])
            information = (np.asarray(diagonal[sites[k]]) - 1.0) / sd**2
            found.append(typical(*(np.asarray(v)[:, k] for v in (eta, hierarchy.expected)), sd, information, scale))
        new = data._replace(centring=jnp.stack([jnp.asarray(one.centring) for one in found], axis=1))
        spread = jnp.array([one.spread for one in found])
        at = Hierarchy(hierarchy.expected, spread, jnp.eye(layout.size))
        values |= place_units(jnp.stack([jnp.asarray(one.values) for one in found], axis=1), at, new.centring, layout)
        values |= {f"{name}_spread": spread[own] for name, own in layout.rows.items()}
        if layout.correlated:
            values[layout.correlation] = jnp.eye(layout.correlated)
        return np.asarray(ravel_pytree(unconstrain_fn(self.prior, (new,), {}, values))[0]), new

    # --- sampler -----------------------------------------------------------------------------------------------

    @cached_property
    def begin(self) -> Callable[..., Any]:
        """(w, key, data, whitening) → sampler state before the first transition."""

        def begin(w: Array, key: Array, data: Data, whitening: Whitening) -> Any:
            return self._init_kernel(
                {"w": w}, self.warmup, step_size=0.5, inverse_mass_matrix=jnp.ones(self.dimension), dense_mass=False,
                target_accept_prob=self.target_accept, max_tree_depth=MAX_TREE_DEPTH,
                model_args=(data, whitening), rng_key=key,
            )  # fmt: skip

        return jax.jit(begin)

    @cached_property
    def advance(self) -> Callable[..., tuple[Any, Recorded]]:
        """(state, count, data, whitening) → state after `count` ≤ chunk transitions, and their record."""

        def advance(state: Any, count: Array, data: Data, whitening: Whitening) -> tuple[Any, Recorded]:
            places = jnp.zeros((self.chunk, self.dimension))
            empty = Recorded(
                places, jnp.zeros((self.chunk, 2), jnp.uint32), places, jnp.zeros(self.chunk, bool),
                *(jnp.zeros(self.chunk),) * 2, jnp.zeros(self.chunk, int), *(jnp.zeros(self.chunk),) * 2,
            )  # fmt: skip

            def one(i: Array, carry: tuple[Any, Recorded]) -> tuple[Any, Recorded]:
                last, kept = carry
                state = self._sample_kernel(last, model_args=(data, whitening))
                row = Recorded(
                    last.z["w"], last.rng_key,
                    whitening.mode + whitening.scale @ state.z["w"], state.diverging, state.energy,
                    state.potential_energy,
                    state.num_steps, state.accept_prob, state.adapt_state.step_size,
                )  # fmt: skip
                return state, jax.tree.map(lambda column, value: column.at[i].set(value), kept, row)

            return jax.lax.fori_loop(0, count, one, (state, empty))

        return jax.jit(advance)

    def ready(self, data: Data, whitening: Whitening) -> None:
        """Trace `begin`: NumPyro's transition kernel learns its adaptation schedule there. Needed before `advance`."""
        jax.eval_shape(self.begin, jnp.zeros(self.dimension), jax.random.key_data(jax.random.key(0)), data, whitening)

    # --- derived quantities ------------------------------------------------------------------------------------

    @cached_property
    def constrain(self) -> Callable[..., dict[str, Array]]:
        """(z draws, data) → constrained parameters by site, deterministic sites included."""

        def one(z: Array, data: Data) -> dict[str, Array]:
            return constrain_fn(self.prior, (data,), {}, self._unravel(z), return_deterministic=True)

        return jax.jit(jax.vmap(one, in_axes=(0, None)))

    @cached_property
    def prior_draws(self) -> Callable[..., dict[str, Array]]:
        """(keys, data) → draws from the prior by site."""

        def one(key: Array, data: Data) -> dict[str, Array]:
            trace = numpyro.handlers.trace(numpyro.handlers.seed(self.prior, key)).get_trace(data)
            return {name: site["value"] for name, site in trace.items() if site["type"] in ("sample", "deterministic")}

        return jax.jit(jax.vmap(one, in_axes=(0, None)))

    @cached_property
    def other_state(self) -> Callable[..., Array]:
        """(z, data) → whether another start of the solver leads to another solution; for models that can have some."""
        return jax.jit(lambda z, data: self.kind.other_state(self.parameters(z, data), data))

    def parameters(self, z: Float[Array, " d"], data: Data) -> Any:
        """Parameters of the numerics at one unconstrained position."""
        values = constrain_fn(self.prior, (data,), {}, self._unravel(z))
        return numpyro.handlers.substitute(self.prior, values)(data)

    @cached_property
    def derive(self) -> Callable[..., tuple[dict[str, Array], dict[str, Array]]]:
        """(z, data) → what the run folder keeps of one draw, and what it only sums over draws."""
        return jax.jit(lambda z, data: self.kind.derive(self.parameters(z, data), data))


def as_arrays(data: Data) -> Data:
    """The same data on the device, once, so that calls don't copy."""
    return jax.tree.map(jnp.asarray, data)


def to_numpy(tree: Any) -> Any:
    """The same pytree with NumPy leaves."""
    return jax.tree.map(np.asarray, tree)
