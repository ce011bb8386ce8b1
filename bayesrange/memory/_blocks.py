"""Steps of many animals as padded blocks of equal size, each of one animal, so that ragged animals waste little.

Everything that does not depend on parameters is read here once: layers, ground and past at the used place and at the
nodes of every step. What is stored per node is in single precision. Units: km, h, rad.
"""

from collections.abc import Sequence
from typing import NamedTuple

import jax.numpy as jnp
import numpy as np
from jaxtyping import Array, Bool, Float, Int

from bayesrange.memory._basis import Basis
from bayesrange.memory._landscape import Landscape, allowed, read_layers
from bayesrange.memory._nodes import Nodes, Reference
from bayesrange.memory._steps import Steps

BLOCK = 128
"""Steps in a block."""


class AnimalSteps(NamedTuple):
    """One animal's steps with all that is read at their places (NumPy).

    Attributes:
        steps: the steps that count.
        nodes: their quadrature nodes.
        hour: solar time of day at each start, for the daily rhythm [h].
        layers_used: layers at the used place [sd].
        layers_nodes: layers at the nodes [sd].
        allowed: nodes on habitable ground.
        table: the past at the used place (first) and at the nodes, from `tabulate` [h].
    """

    steps: Steps
    nodes: Nodes
    hour: Float[np.ndarray, " steps"]
    layers_used: Float[np.ndarray, "steps layers"]
    layers_nodes: Float[np.ndarray, "steps nodes layers"]
    allowed: Bool[np.ndarray, "steps nodes"]
    table: Float[np.ndarray, "steps places columns"]


class StepData(NamedTuple):
    """What the likelihood reads (a pytree of arrays).

    Attributes:
        animal: whose steps a block holds.
        counted: False for padding.
        short: enters as P(r < shortest).
        turn_known: else the turn is integrated out.
        length: [km]; 1 where short or padding.
        cos_turn: cosine of the turn; 0 where it is not used.
        hours: cos and sin of 2πh/24, cos and sin of 4πh/24 at solar time h of the start.
        layers_used: layers at the used place (a short step's is its start) [sd].
        layers_nodes: layers at the nodes [sd].
        radius: of the nodes [km].
        log_radius: its log.
        cos_nodes: cosine of the nodes' turn; 0 where the turn is unknown.
        allowed: nodes on habitable ground.
        xy_used: used place [km]; no steps unless a home is used.
        xy_nodes: nodes [km]; no steps unless a home is used. Double, for eastings and northings may be thousands of km.
        table_used: the past at the used place [h].
        table_nodes: the past at the nodes, columns first: one product then makes the traces fastest [h].
        weight: of each animal's log-likelihood.
        shortest: length below which a step is short [km].
        reference_shape: shape of the law of the radii.
        reference_scale: its scale [km].
        decay_basis: of the table.
        range_basis: of the table.
    """

    animal: Int[Array, " blocks"]
    counted: Bool[Array, "blocks steps"]
    short: Bool[Array, "blocks steps"]
    turn_known: Bool[Array, "blocks steps"]
    length: Float[Array, "blocks steps"]
    cos_turn: Float[Array, "blocks steps"]
    hours: Float[Array, "blocks steps 4"]
    layers_used: Float[Array, "blocks steps layers"]
    layers_nodes: Float[Array, "blocks steps nodes layers"]
    radius: Float[Array, "blocks steps nodes"]
    log_radius: Float[Array, "blocks steps nodes"]
    cos_nodes: Float[Array, "blocks steps nodes"]
    allowed: Bool[Array, "blocks steps nodes"]
    xy_used: Float[Array, "blocks steps_home 2"]
    xy_nodes: Float[Array, "blocks steps_home nodes 2"]
    table_used: Float[Array, "blocks steps columns"]
    table_nodes: Float[Array, "blocks columns steps nodes"]
    weight: Float[Array, " animals"]
    shortest: Float[Array, ""]
    reference_shape: Float[Array, ""]
    reference_scale: Float[Array, ""]
    decay_basis: Basis
    range_basis: Basis


def places(steps: Steps, nodes: Nodes) -> tuple[Float[np.ndarray, "steps places"], Float[np.ndarray, "steps places"]]:
    """Eastings and northings [km] of the used place (first) and the nodes; a short step's used place is its start."""
    x = np.where(steps.short, steps.x, steps.end_x)
    y = np.where(steps.short, steps.y, steps.end_y)
    return np.concatenate([x[:, None], nodes.x], axis=1), np.concatenate([y[:, None], nodes.y], axis=1)


def read_places(
    steps: Steps,
    nodes: Nodes,
    landscape: Landscape,
    hour: Float[np.ndarray, " steps"],
    table: Float[np.ndarray, "steps places columns"],
) -> tuple[AnimalSteps, int]:
    """Read layers and ground at one animal's places, and set aside steps none of whose nodes is on habitable ground.

    Such a step (off a strip of ground much narrower than a step) has no normaliser.

    Args:
        steps: the steps that count.
        nodes: their nodes.
        landscape: the ground.
        hour: solar time of day at each start [h].
        table: from `tabulate` at `places`.

    Returns:
        What the blocks are made of, and how many steps were set aside.
    """
    x, y = places(steps, nodes)
    layers = np.asarray(read_layers(landscape, jnp.asarray(x), jnp.asarray(y)), np.float32)
    ground = np.asarray(allowed(landscape, jnp.asarray(nodes.x), jnp.asarray(nodes.y)))
    kept = ground.any(1)
    animal = AnimalSteps(
        steps=Steps(*(column[kept] for column in steps)),
        nodes=Nodes(*(column[kept] for column in nodes)),
        hour=hour[kept],
        layers_used=layers[kept, 0],
        layers_nodes=layers[kept, 1:],
        allowed=ground[kept],
        table=table[kept],
    )
    return animal, int((~kept).sum())


def make_blocks(
    animals: Sequence[AnimalSteps],
    *,
    shortest: float,
    reference: Reference,
    decay_basis: Basis,
    range_basis: Basis,
    weight: Float[np.ndarray, " animals"] | None = None,
    home: bool = False,
) -> StepData:
    """Pad every animal's steps to whole blocks, animals and steps in their order.

    Args:
        animals: from `read_places`; all with the same numbers of nodes, layers and columns.
        shortest: length below which a step is short [km].
        reference: law of the nodes' radii.
        decay_basis: of the tables.
        range_basis: of the tables.
        weight: of each animal's log-likelihood; 1 if not given.
        home: keep the coordinates of all places, for a pull to a home.
    """
    owner = np.concatenate([np.full(-(-len(a.steps.time) // BLOCK), i) for i, a in enumerate(animals)])

    def pad(columns: Sequence[np.ndarray], fill: float, kind: type) -> np.ndarray:
        blocks = np.full((len(owner), BLOCK, *columns[0].shape[1:]), fill, kind)
        rows = blocks.reshape(len(owner) * BLOCK, *columns[0].shape[1:])
        for i, column in enumerate(columns):
            start = int(np.searchsorted(owner, i)) * BLOCK
            rows[start : start + len(column)] = column
        return blocks

    steps, nodes = [a.steps for a in animals], [a.nodes for a in animals]
    known = [s.turn_known & ~s.short for s in steps]
    angle = [a.hour * (2 * np.pi / 24) for a in animals]
    node = np.float32
    data = {
        "counted": pad([np.ones(len(s.time), bool) for s in steps], False, bool),
        "short": pad([s.short for s in steps], False, bool),
        "turn_known": pad([s.turn_known for s in steps], False, bool),
        "length": pad([np.where(s.short, 1.0, s.length) for s in steps], 1.0, float),
        "cos_turn": pad([np.where(k, np.cos(s.turn), 0.0) for s, k in zip(steps, known)], 0.0, float),
        "hours": pad([np.stack([np.cos(h), np.sin(h), np.cos(2 * h), np.sin(2 * h)], 1) for h in angle], 0.0, float),
        "layers_used": pad([a.layers_used for a in animals], 0.0, node),
        "layers_nodes": pad([a.layers_nodes for a in animals], 0.0, node),
        "radius": pad([n.radius for n in nodes], 1.0, node),
        "log_radius": pad([np.log(n.radius) for n in nodes], 0.0, node),
        "cos_nodes": pad([np.cos(n.turn) * s.turn_known[:, None] for s, n in zip(steps, nodes)], 0.0, node),
        "allowed": pad([a.allowed for a in animals], True, bool),
        "table_used": pad([a.table[:, 0] for a in animals], 0.0, node),
    }
    if home:
        xy = pad([np.stack(places(s, n), axis=-1) for s, n in zip(steps, nodes)], 0.0, float)
    else:
        xy = np.zeros((len(owner), 0, nodes[0].x.shape[1] + 1, 2))
    return StepData(
        animal=jnp.asarray(owner),
        xy_used=jnp.asarray(xy[:, :, 0]),
        xy_nodes=jnp.asarray(xy[:, :, 1:]),
        table_nodes=jnp.asarray(np.moveaxis(pad([a.table[:, 1:] for a in animals], 0.0, node), -1, 1)),
        weight=jnp.ones(len(animals)) if weight is None else jnp.asarray(weight),
        shortest=jnp.asarray(float(shortest)),
        reference_shape=jnp.asarray(float(reference.shape)),
        reference_scale=jnp.asarray(float(reference.scale)),
        decay_basis=Basis(*map(jnp.asarray, decay_basis)),
        range_basis=Basis(*map(jnp.asarray, range_basis)),
        **{name: jnp.asarray(values) for name, values in data.items()},
    )
