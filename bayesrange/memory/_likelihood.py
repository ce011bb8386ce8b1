r"""Log-likelihood of steps led by memory.

$$ f(z \mid x_t, \mathrm{past}) = k(z) \omega_t(z) / \int k \omega_t, \qquad
   \log \omega_t = b \cdot h + \kappa_R \rho(R_t) - \kappa_W \rho(W_t) - \eta |z - c|, \quad \rho(M) = M/(M + m_0) $$

The integral is taken over each step's nodes with weights w = k / k_ref, in ratio form: Σ w ω over nodes on habitable
ground divided by Σ w over all of them. ω = 1 then gives the exact gamma–von Mises likelihood with any nodes. Node
arithmetic is in single precision, sums over a step in double. Units: km, h. Derivation: docs/mathematics.
"""

from typing import NamedTuple

import jax
import jax.numpy as jnp
from jaxtyping import Array, Bool, Float

from bayesrange.memory._basis import Basis, decay_coefficients, is_fixed, range_coefficients
from bayesrange.memory._blocks import StepData
from bayesrange.memory._kernel import log_short_chance, log_step_density

NOWHERE = -1e30
"""Log weight of a node that is not on habitable ground: finite, so that no gradient is NaN."""


class StepParameters(NamedTuple):
    """Parameters of every animal (a pytree of arrays).

    Attributes:
        shape: of the gamma step length.
        scale: of the gamma step length [km].
        concentration: of the von Mises turn.
        rhythm: two harmonics of solar time, on the log of the scale.
        selection: b [per sd].
        reference_strength: κ_R, draws the animal back.
        reference_decay: τ_R [h].
        working_strength: κ_W, puts it off.
        working_decay: τ_W [h].
        recall_half: m₀, trace at which recall is half [h].
        encoding_range: σ, of all animals [km]; not read where the table's is fixed.
        home_pull: η [1/km].
        home: c [km].
        home_eps: smooths the pull at the home [km].
    """

    shape: Float[Array, " animals"]
    scale: Float[Array, " animals"]
    concentration: Float[Array, " animals"]
    rhythm: Float[Array, "animals 4"]
    selection: Float[Array, "animals layers"]
    reference_strength: Float[Array, " animals"]
    reference_decay: Float[Array, " animals"]
    working_strength: Float[Array, " animals"]
    working_decay: Float[Array, " animals"]
    recall_half: Float[Array, " animals"]
    encoding_range: Float[Array, ""]
    home_pull: Float[Array, " animals"]
    home: Float[Array, "animals 2"]
    home_eps: Float[Array, ""]


class _Traces(NamedTuple):
    """R and W [h], and their changes with log τ and (unless it is fixed) with log σ, along the axis `rows`."""

    used: Float[Array, "blocks rows steps"]
    nodes: Float[Array, "blocks rows steps nodes"]


def step_log_likelihood(parameters: StepParameters, data: StepData) -> Float[Array, "blocks steps"]:
    """Log-likelihood of each step [log 1/km²; a short step's chance is a pure number]; 0 where not counted."""

    def one(block: tuple) -> Float[Array, " steps"]:
        p, of_block, traces = block
        return _block(parameters._replace(**p), data._replace(**of_block), traces)

    return jax.lax.map(one, (*_blocks(parameters, data), _all_traces(parameters, data, slopes=False)))


def animal_log_likelihood(parameters: StepParameters, data: StepData) -> Float[Array, " animals"]:
    """Log-likelihood of each animal's steps, times the animal's weight."""
    by_block = _block_sums(parameters, data)
    return data.weight * jnp.zeros_like(data.weight).at[data.animal].add(by_block)


@jax.custom_jvp
def _block_sums(parameters: StepParameters, data: StepData) -> Float[Array, " blocks"]:
    """Log-likelihood of each block; not differentiable in the data.

    Its derivative takes value and gradient of one block after the other, so that a block's intermediate results never
    leave the cache. The traces and their changes come from one product with the table: going back never reads it.
    """
    return step_log_likelihood(parameters, data).sum(1)


@_block_sums.defjvp
def _block_sums_jvp(primals: tuple, tangents: tuple) -> tuple[Array, Array]:
    parameters, data = primals

    def one(block: tuple) -> tuple[Array, StepParameters, Array]:
        p, of_block, traces = block

        def total(p: StepParameters, traces: _Traces) -> Array:
            return _block(p, data._replace(**of_block), traces).sum()

        now = jax.tree.map(lambda rows: rows[:2], traces)
        value, (slope, by_trace) = jax.value_and_grad(total, (0, 1))(parameters._replace(**p), now)
        return value, slope, _by_row(by_trace, traces)

    traces = _all_traces(parameters, data, slopes=True)
    value, slope, by_row = jax.lax.map(one, (*_blocks(parameters, data), traces))
    by_log_decay = _log_decay(tangents[0], parameters)[data.animal]
    change = (by_row[:, :2] * by_log_decay).sum(1)
    if by_row.shape[1] > 2:
        change += by_row[:, 2:].sum(1) * tangents[0].encoding_range / parameters.encoding_range
    for name in StepParameters._fields:
        tangent = getattr(tangents[0], name)
        tangent = tangent[data.animal] if name in _PER_ANIMAL else jnp.broadcast_to(tangent, value.shape)
        change += (getattr(slope, name) * tangent).reshape(*value.shape, -1).sum(1)
    return value, change


def _log_decay(tangent: StepParameters, parameters: StepParameters) -> Float[Array, "animals 2"]:
    """Change of log τ_R and log τ_W."""
    reference = tangent.reference_decay / parameters.reference_decay
    return jnp.stack([reference, tangent.working_decay / parameters.working_decay], axis=1)


def _by_row(by_trace: _Traces, traces: _Traces) -> Float[Array, " rows"]:
    """Change of a block's log-likelihood with log τ_R, log τ_W (and log σ through R, and through W)."""
    kinds = len(traces.used) // 2 - 1
    used = by_trace.used[None] * traces.used[2:].reshape(kinds, *by_trace.used.shape)
    nodes = by_trace.nodes[None] * traces.nodes[2:].reshape(kinds, *by_trace.nodes.shape)
    return (used.sum(2) + nodes.sum(3).astype(float).sum(2)).reshape(-1)


def _blocks(parameters: StepParameters, data: StepData) -> tuple[dict, dict]:
    """What differs between blocks: the values of their animals, and their data."""
    by_animal = {name: getattr(parameters, name)[data.animal] for name in _PER_ANIMAL}
    return by_animal, {name: getattr(data, name) for name in _PER_BLOCK}


def step_log_ratio(
    log_used: Float[Array, " steps"],
    log_nodes: Float[Array, "steps nodes"],
    log_quad: Float[Array, "steps nodes"],
    allowed: Bool[Array, "steps nodes"],
    below: bool = True,
) -> Float[Array, " steps"]:
    r"""Each step's selection against what was on offer: $\log\omega(z) - \log\sum_j w_j\omega_j + \log\sum_j w_j$.

    Args:
        log_used: log ω at the used place.
        log_nodes: log ω at the nodes.
        log_quad: log w.
        allowed: nodes that count above; every node counts below.
        below: subtract the sum of w. Without it, with w = 1 and the used place among the nodes, this is conditional
            logistic regression.
    """
    above = _log_sum(jnp.where(allowed, log_nodes + log_quad, jnp.asarray(NOWHERE, log_nodes.dtype)))
    return log_used - above + (_log_sum(log_quad) if below else 0.0)


def _log_sum(terms: Float[Array, "steps nodes"]) -> Float[Array, " steps"]:
    """Log Σ exp, in double precision from the sum on."""
    top = jax.lax.stop_gradient(terms.max(1))
    return jnp.log(jnp.exp(terms - top[:, None]).sum(1).astype(float)) + top.astype(float)


_PER_ANIMAL = tuple(name for name in StepParameters._fields if name not in ("encoding_range", "home_eps"))
_SHARED = ("animal", "weight", "shortest", "reference_shape", "reference_scale", "decay_basis", "range_basis")
_PER_BLOCK = tuple(name for name in StepData._fields if name not in (*_SHARED, "table_used", "table_nodes"))


def _block(p: StepParameters, data: StepData, traces: _Traces) -> Float[Array, " steps"]:
    """One block: `p` holds one animal's values, `data` and `traces` those of one block (the leading axis taken off)."""
    log_scale = jnp.log(p.scale) + data.hours @ p.rhythm
    moved = log_step_density(
        data.length, data.cos_turn, data.turn_known & ~data.short, p.shape, log_scale, p.concentration
    )
    rested = log_short_chance(p.shape, jnp.where(data.short, jnp.log(data.shortest) - log_scale, -10.0))
    log_quad = _log_quad(p, data, log_scale)
    used, nodes = _log_weights(p, data, traces)
    value = jnp.where(data.short, rested, moved) + step_log_ratio(used, nodes, log_quad, data.allowed)
    return jnp.where(data.counted, value, 0.0)


def _log_quad(p: StepParameters, data: StepData, log_scale: Float[Array, " steps"]) -> Float[Array, "steps nodes"]:
    """Log k / k_ref at the nodes, but for a constant of the step."""

    def of_step(values: Array) -> Array:  # summed over steps in double precision on the way back
        return jnp.broadcast_to(values, log_scale.shape).astype(data.radius.dtype)[:, None]

    return (
        of_step(p.shape - data.reference_shape) * data.log_radius
        + of_step(1 / data.reference_scale - jnp.exp(-log_scale)) * data.radius
        + of_step(p.concentration) * data.cos_nodes
    )


def _log_weights(
    p: StepParameters, data: StepData, traces: _Traces
) -> tuple[Float[Array, " steps"], Float[Array, "steps nodes"]]:
    """Log ω at the used place (double) and at the nodes (single)."""
    steps, nodes = data.radius.shape
    single = data.radius.dtype
    used, at_nodes = jnp.zeros(steps), jnp.zeros((steps, nodes), single)
    if data.layers_used.shape[-1]:
        used += data.layers_used.astype(float) @ p.selection
        at_nodes += data.layers_nodes @ p.selection.astype(single)
    if traces.used.shape[-1]:
        used += _recall(traces.used, p)
        at_nodes += _recall(traces.nodes, p)
    if data.xy_used.shape[0]:
        used -= p.home_pull * _distance(data.xy_used, p, used.dtype)
        at_nodes -= p.home_pull.astype(single) * _distance(data.xy_nodes, p, single)
    return used, at_nodes


def _recall(traces: Float[Array, "2 ..."], p: StepParameters) -> Float[Array, "..."]:
    """κ_R ρ(R) − κ_W ρ(W), in the traces' precision; a trace a rounding below 0 counts as 0."""
    kind = traces.dtype
    half = p.recall_half.astype(kind)
    reference, working = jnp.maximum(traces[0], 0), jnp.maximum(traces[1], 0)
    back = p.reference_strength.astype(kind) * (reference / (reference + half))
    return back - p.working_strength.astype(kind) * (working / (working + half))


def _distance(place: Float[Array, "*places 2"], p: StepParameters, kind: jnp.dtype) -> Float[Array, "*places"]:
    """Smoothed distance to the home [km], in precision `kind` once it is taken off the place."""
    offset = (place - p.home.reshape((1,) * (place.ndim - 1) + (2,))).astype(kind)
    return jnp.sqrt((offset**2).sum(-1) + (p.home_eps**2).astype(kind))


def _all_traces(parameters: StepParameters, data: StepData, slopes: bool) -> _Traces:
    """R and W of all steps, and with `slopes` their changes too, from one product with each table."""
    blocks, columns, steps, nodes = data.table_nodes.shape
    if not columns:
        kinds = 4 if slopes else 2
        return _Traces(jnp.zeros((blocks, kinds, 0)), jnp.zeros((blocks, kinds, 0, nodes), data.table_nodes.dtype))
    log_decay = jnp.log(jnp.stack([parameters.reference_decay, parameters.working_decay], axis=1))
    log_range = jnp.log(parameters.encoding_range)

    def of_animal(log_decay: Float[Array, " 2"]) -> Float[Array, "rows columns"]:
        return _coefficient_rows(log_decay, log_range, data.decay_basis, data.range_basis, slopes)

    rows = jax.vmap(of_animal)(log_decay)[data.animal]
    at_nodes = rows.astype(data.table_nodes.dtype) @ data.table_nodes.reshape(blocks, columns, -1)
    used = rows @ data.table_used.astype(float).swapaxes(1, 2)
    return _Traces(used, at_nodes.reshape(blocks, -1, steps, nodes))


def _coefficient_rows(
    log_decay: Float[Array, " 2"],
    log_range: Float[Array, ""],
    decay_basis: Basis,
    range_basis: Basis,
    slopes: bool,
) -> Float[Array, "rows columns"]:
    """Coefficients of R and W on the table's columns; with `slopes`, their changes with log τ and log σ below."""

    def at(log_decay: Array, log_range: Array) -> Array:
        decay = jax.vmap(lambda d: decay_coefficients(decay_basis, d))(log_decay)
        reach = range_coefficients(range_basis, log_range)
        return (decay[:, :, None] * reach[None, None, :]).reshape(2, -1)

    if not slopes:
        return at(log_decay, log_range)
    value, by_decay = jax.jvp(lambda d: at(d, log_range), (log_decay,), (jnp.ones_like(log_decay),))
    if is_fixed(range_basis):
        return jnp.concatenate([value, by_decay])
    by_range = jax.jvp(lambda s: at(log_decay, s), (log_range,), (jnp.ones_like(log_range),))[1]
    return jnp.concatenate([value, by_decay, by_range])


def traces(
    table: Float[Array, "*places columns"],
    log_decay: Float[Array, " 2"],
    log_range: Float[Array, ""],
    decay_basis: Basis,
    range_basis: Basis,
) -> Float[Array, "*places 2"]:
    """R and W [h] at the places of a table from `tabulate`, in the table's precision.

    Args:
        table: any leading axes.
        log_decay: log τ_R, log τ_W [log h].
        log_range: log σ [log km]; not read where the range is fixed.
        decay_basis: of the table.
        range_basis: of the table.
    """
    return table @ _coefficient_rows(log_decay, log_range, decay_basis, range_basis, False).astype(table.dtype).T
