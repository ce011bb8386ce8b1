"""How much faster is value and gradient with the compressed past than with the exact one, per 1,000 steps?

    python benchmarks/memory_gradient.py

The exact one is the best plain form: Gaussians of all distances worked out beforehand (the encoding range is fixed),
and a scan over the steps that sums each step's past with its decay and is differentiated as it stands. Same nodes, same
data, single precision for what is per node in both.
"""

import tempfile
from pathlib import Path

import jax
import jax.numpy as jnp
import numpy as np
from _case import machine, milliseconds, say
from _tracks import write_tracks  # sets the threads: before JAX

from bayesrange.inference._prepare import prepare
from bayesrange.memory import StepParameters, animal_log_likelihood, make_nodes, places, step_log_likelihood
from bayesrange.study import read_study

FIXES, NODES = 1032, 64


def main() -> None:
    say(**machine())
    with tempfile.TemporaryDirectory() as folder:
        write_tracks(Path(folder), 1, FIXES, missing=0.0, nodes=NODES)
        task = prepare(read_study(folder)).task
    inputs, data = task.extra["inputs"], jax.tree.map(jnp.asarray, task.data.steps)
    track = inputs.animals[0]
    nodes = make_nodes(track.steps, inputs.reference, NODES, inputs.seed)
    x, y = places(track.steps, nodes)
    parameters = StepParameters(
        shape=jnp.array([1.4]), scale=jnp.array([0.11]), concentration=jnp.array([0.35]), rhythm=jnp.zeros((1, 4)),
        selection=jnp.array([[0.5]]), reference_strength=jnp.array([2.5]), reference_decay=jnp.array([700.0]),
        working_strength=jnp.array([1.2]), working_decay=jnp.array([8.0]), recall_half=jnp.array([6.0]),
        encoding_range=jnp.array(0.15), home_pull=jnp.zeros(1), home=jnp.zeros((1, 2)), home_eps=jnp.array(0.05),
    )  # fmt: skip
    compressed = jax.jit(jax.value_and_grad(lambda p: animal_log_likelihood(p, data).sum()))
    exact = jax.jit(jax.value_and_grad(exact_log_likelihood(track, x, y, data)))
    one, other = compressed(parameters), exact(parameters)
    times = [milliseconds(lambda f=f: f(parameters)) for f in (compressed, exact)]
    steps = track.steps.time.size
    slopes = [float(g.reference_decay[0]) for _, g in (one, other)]
    say(
        steps=steps, nodes=NODES, columns=int(data.decay_basis.columns.shape[1]),
        compressed_ms_per_1000=times[0] * 1000 / steps, exact_scan_ms_per_1000=times[1] * 1000 / steps,
        ratio=times[1] / times[0], difference_in_log_likelihood=abs(float(one[0] - other[0])),
        relative_difference_in_slope=abs(slopes[0] / slopes[1] - 1),
    )  # fmt: skip


def exact_log_likelihood(track, x, y, data):
    """Log-likelihood by a scan over steps that sums the past exactly; the rest is the package's own."""
    stays, steps = track.stays, track.steps
    square = (x[:, :, None] - stays.x) ** 2 + (y[:, :, None] - stays.y) ** 2
    near = jnp.asarray(np.exp(-square / (2 * 0.15**2)), jnp.float32)
    age = steps.time[:, None] - stays.time[None]
    spent = jnp.asarray(np.where(age > 0, stays.duration, 0.0), jnp.float32)
    ages = jnp.asarray(np.maximum(age, 1e-3), jnp.float32)

    def value(p: StepParameters) -> jax.Array:
        decay = jnp.stack([p.reference_decay[0], p.working_decay[0]]).astype(jnp.float32)

        def one(_, row):
            gauss, since, share = row
            return None, gauss @ (share[:, None] * jnp.exp(-since[:, None] / decay))

        trace = jax.lax.scan(one, None, (near, ages, spent))[1]  # (steps, places, 2)
        recall = trace / (trace + p.recall_half[0].astype(jnp.float32))
        pull = recall @ jnp.stack([p.reference_strength[0], -p.working_strength[0]]).astype(jnp.float32)
        # The package's likelihood without memory, and the pull in the place of a layer of selection 1.
        blocks, size = data.counted.shape
        padded = jnp.zeros((blocks * size, pull.shape[1]), jnp.float32).at[: pull.shape[0]].set(pull)
        laid = padded.reshape(blocks, size, -1)
        with_pull = data._replace(
            layers_used=jnp.concatenate([data.layers_used, laid[:, :, :1]], axis=-1),
            layers_nodes=jnp.concatenate([data.layers_nodes, laid[:, :, 1:, None]], axis=-1),
            table_used=data.table_used[..., :0], table_nodes=data.table_nodes[:, :0],
        )  # fmt: skip
        selection = jnp.concatenate([p.selection, jnp.ones((1, 1))], axis=1)
        return step_log_likelihood(p._replace(selection=selection), with_pull).sum()

    return value


if __name__ == "__main__":
    main()
