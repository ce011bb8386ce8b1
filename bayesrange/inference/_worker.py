"""One worker process of a fit: `python -m bayesrange.inference._worker FOLDER start | chain K`.

Each chain is a process of its own with one thread. It prints one JSON object a line on its standard output; the
parent reads them. The first worker (`start`) compiles every program into the compile cache, finds the mode and says
what a gradient costs; the chains then find everything compiled.
"""

import json
import os
import resource
import sys
import time
from dataclasses import replace
from pathlib import Path
from typing import Any

PARENT_GONE = 3
CHECKED = 10
"""Draws of each chain at which a second steady state is looked for."""


def _say(**message: Any) -> None:
    print(json.dumps(message), flush=True)


def main(arguments: list[str]) -> int:
    """Run one worker; returns the exit status."""
    folder = Path(arguments[0])
    if arguments[1] == "start":
        _start(folder)
        return 0
    return _chain(folder, int(arguments[2]))


def _start(folder: Path) -> None:
    import jax
    import jax.numpy as jnp
    import numpy as np
    from jax.flatten_util import ravel_pytree

    from bayesrange.inference._program import Program, Whitening, as_arrays
    from bayesrange.inference._start import curvature_at, find_start, whitening_scale
    from bayesrange.inference._task import CHUNK, load_task, save_arrays

    task = load_task(folder)
    _say(stage="compiling")
    data = as_arrays(task.data)
    task = replace(task, data=None)
    program = Program(task.spec, data, task.warmup, task.target_accept, CHUNK)
    guess = np.asarray(ravel_pytree(program.first_guess(data))[0])
    program.value_and_gradient(jnp.asarray(guess), data)
    _say(stage="mode")

    def density(z: np.ndarray) -> Any:
        return program.value_and_gradient(jnp.asarray(z), data)

    start = find_start(density, guess)
    if program.layout is not None:
        mode, data = program.centred(start.mode, start.curvature, data)
        start = start._replace(mode=mode, curvature=curvature_at(density, mode))
    scale = whitening_scale(start.curvature, program.apart(), _prior_curvature(program, task, start.mode, data))
    times = []
    for _ in range(5):
        begun = time.perf_counter()
        jax.block_until_ready(program.value_and_gradient(jnp.asarray(start.mode), data))
        times.append(time.perf_counter() - begun)
    whitening = Whitening(jnp.asarray(start.mode), jnp.asarray(scale))
    state = program.begin(jnp.zeros(program.dimension), _key(task.seed, 0), data, whitening)
    program.advance.lower(state, 1, data, whitening).compile()
    program.derive.lower(whitening.mode, data).compile()
    if program.kind.has_other_states:
        program.other_state.lower(whitening.mode, data).compile()
    program.constrain.lower(jnp.zeros((task.draws, program.dimension)), data).compile()
    arrays = {"mode": start.mode, "scale": scale, "centring": np.asarray(data.centring), "potential": start.potential}
    arrays |= {"seconds_per_gradient": np.median(times), "peak_gib": _peak_gib()}
    save_arrays(folder / "start.npz", **{name: np.asarray(value) for name, value in arrays.items()})
    _say(
        stage="started",
        label=task.label,
        seconds_per_gradient=float(np.median(times)),
        peak_gib=_peak_gib(),
        dimension=program.dimension,
    )


def _prior_curvature(program: Any, task: Any, mode: Any, data: Any) -> Any:
    """Curvature of the prior, for the models whose likelihood may curve the wrong way; None for steady states."""
    import jax.numpy as jnp

    from bayesrange.inference._memory_data import MemorySpec
    from bayesrange.inference._start import curvature_at

    if not isinstance(task.spec, MemorySpec):
        return None
    return curvature_at(lambda z: (0.0, program.prior_gradient(jnp.asarray(z), data)), mode)


def _chain(folder: Path, chain: int) -> int:
    import jax
    import jax.numpy as jnp
    import numpy as np

    from bayesrange.inference._program import Program, Whitening, as_arrays, to_numpy
    from bayesrange.inference._task import CHUNK, chain_folder, load_parts, load_task, save_part

    task = load_task(folder)
    data = as_arrays(task.data)
    task = replace(task, data=None)  # tables are large: one copy is enough
    own = chain_folder(folder, chain)
    own.mkdir(exist_ok=True)
    program = Program(task.spec, data, task.warmup, task.target_accept, CHUNK)
    with np.load(folder / "start.npz") as start:
        whitening = Whitening(jnp.asarray(start["mode"]), jnp.asarray(start["scale"]))
        data = data._replace(centring=jnp.asarray(start["centring"]))
    parts = load_parts(own)
    done = sum(part["count"] for part in parts)
    program.ready(data, whitening)
    if parts:
        state = jax.tree.map(jnp.asarray, parts[-1]["state"])
    else:
        state = _first_state(program, _key(task.seed, chain), data, whitening)
    parent = os.getppid()
    while done < task.warmup + task.draws:
        border = task.warmup if done < task.warmup else task.warmup + task.draws
        count = min(CHUNK, border - done)
        begun = time.perf_counter()
        state, kept = program.advance(state, count, data, whitening)
        record = {name: np.asarray(column)[:count] for name, column in kept._asdict().items()}
        part = {"count": count, "warmup": done < task.warmup, "record": record, "state": to_numpy(state)}
        part["seconds"] = time.perf_counter() - begun
        save_part(own, len(parts), part)
        parts.append(part)
        done += count
        _say(
            stage="warmup" if done <= task.warmup else "sampling", chain=chain, label=task.label, done=done,
            of=task.warmup + task.draws,
            divergences=int(sum(part["record"]["diverging"].sum() for part in parts if not part["warmup"])),
            gradients=int(record["gradients"].sum()), step_size=float(record["step_size"][-1]),
        )  # fmt: skip
        if os.getppid() != parent:
            return PARENT_GONE
    _derive(program, task, data, whitening, parts, own, chain)
    return 0


def _first_state(program: Any, key: Any, data: Any, whitening: Any) -> Any:
    """A start drawn around the mode by its curvature, drawn in closer until its density is finite."""
    import jax
    import numpy as np

    place, sampling = jax.random.split(key)
    w = jax.random.normal(place, (program.dimension,))
    for _ in range(20):
        state = program.begin(w, sampling, data, whitening)
        if np.isfinite(float(state.potential_energy)):
            return state
        w = w / 2
    raise FloatingPointError("No start with a finite density was found near the mode.")


def _key(seed: int, chain: int) -> Any:
    import jax

    return jax.random.key_data(jax.random.fold_in(jax.random.key(seed), chain))


def _derive(
    program: Any, task: Any, data: Any, whitening: Any, parts: list[dict[str, Any]], own: Path, chain: int
) -> None:
    """Everything the run folder holds of this chain's draws, with densities summed and never stored per draw."""
    import jax.numpy as jnp
    import numpy as np

    from bayesrange.inference._replay import failed_solves
    from bayesrange.inference._task import save_arrays

    kept = [part["record"] for part in parts if not part["warmup"]]
    stats = {name: np.concatenate([record[name] for record in kept]) for name in kept[0]}
    failed = failed_solves(program, data, whitening, parts[-1]["state"], stats)
    positions = stats.pop("position")
    del stats["before"], stats["key"]
    parameters = {name: np.asarray(value) for name, value in program.constrain(jnp.asarray(positions), data).items()}
    rows: dict[str, list[np.ndarray]] = {}
    sums: dict[str, np.ndarray] = {}
    for i, z in enumerate(positions):
        kept_of_draw, summed = program.derive(jnp.asarray(z), data)
        for name, value in kept_of_draw.items():
            rows.setdefault(name, []).append(np.asarray(value))
        for name, value in summed.items():
            sums[name] = sums.get(name, 0.0) + np.asarray(value)
        if (i + 1) % 50 == 0:
            _say(stage="deriving", chain=chain, label=task.label, done=i + 1, of=len(positions))
    every = max(1, len(positions) // CHECKED)
    checked = positions[::every][:CHECKED] if program.kind.has_other_states else []
    two_states = sum(bool(program.other_state(jnp.asarray(z), data)) for z in checked)
    arrays = {f"sum_{name}": value for name, value in sums.items()}
    arrays |= {f"kept_{name}": np.stack(column) for name, column in rows.items()}
    arrays |= {
        f"extra_{name}": value for name, value in program.kind.extras(program, positions, data, task.extra).items()
    }
    arrays |= {f"stat_{name}": value for name, value in stats.items()}
    arrays |= {f"site_{name}": value for name, value in parameters.items()}
    counts = {"failed_solves": failed, "two_states": two_states, "states_checked": len(checked)}
    counts["seconds"] = sum(part["seconds"] for part in parts)
    save_arrays(own / "derived.npz", **arrays, **{name: np.array(value) for name, value in counts.items()})
    _say(stage="finished", chain=chain, label=task.label, peak_gib=_peak_gib())


def _peak_gib() -> float:
    """Largest resident memory of this process so far [GiB]."""
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    return peak / 2**20 if sys.platform != "darwin" else peak / 2**30


if __name__ == "__main__":
    raise SystemExit(main(sys.argv[1:]))
