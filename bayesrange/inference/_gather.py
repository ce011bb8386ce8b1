"""What the chains of a run left in its checkpoint folder, put together."""

from dataclasses import dataclass
from pathlib import Path

import numpy as np
import xarray as xr

from bayesrange.inference._program import Recorded
from bayesrange.inference._task import chain_folder

Sites = dict[str, np.ndarray]


@dataclass(frozen=True)
class Derived:
    """What all chains derived from their draws.

    Attributes:
        sites: constrained values by site, leading (chain, draw).
        stats: sampler records, leading (chain, draw).
        kept: what was kept of each draw, leading (chain, draw).
        means: what was summed, over all draws.
        extras: what a kind of model adds at the end of a chain, leading (chain).
        failed_solves: divergences that ended where there was no solution.
        two_states: draws with a second solution.
        states_checked: draws at which one was looked for.
        seconds: sampling time of each chain.
    """

    sites: Sites
    stats: dict[str, np.ndarray]
    kept: dict[str, np.ndarray]
    means: dict[str, np.ndarray]
    extras: dict[str, np.ndarray]
    failed_solves: int
    two_states: int
    states_checked: int
    seconds: list[float]

    def spread(self, name: str) -> np.ndarray:
        """Standard deviation over draws of a quantity whose square was summed too, under `<name>_squared`."""
        return np.sqrt(np.maximum(self.means[f"{name}_squared"] - self.means[name] ** 2, 0.0))


def gather(folder: Path, chains: int) -> Derived:
    """Read what every chain left in the checkpoint folder.

    Args:
        folder: checkpoint folder.
        chains: number of chains.
    """
    parts = []
    for chain in range(1, chains + 1):
        with np.load(chain_folder(folder, chain) / "derived.npz") as file:
            parts.append({name: file[name] for name in file.files})

    def stacked(prefix: str) -> dict[str, np.ndarray]:
        named = [name for name in parts[0] if name.startswith(prefix)]
        return {name.removeprefix(prefix): np.stack([part[name] for part in parts]) for name in named}

    stats = stacked("stat_")
    count = stats["potential"].size
    return Derived(
        stacked("site_"), stats, stacked("kept_"),
        {name: value.sum(axis=0) / count for name, value in stacked("sum_").items()}, stacked("extra_"),
        *(int(sum(part[name] for part in parts)) for name in ("failed_solves", "two_states", "states_checked")),
        [float(part["seconds"]) for part in parts],
    )  # fmt: skip


def sampler_dataset(stats: dict[str, np.ndarray]) -> xr.Dataset:
    """ArviZ's sample statistics from what the sampler recorded."""
    names = dict(
        zip(
            Recorded._fields,
            ("", "", "", "diverging", "energy", "", "n_steps", "acceptance_rate", "step_size"),
            strict=True,
        )
    )
    columns = {names[name]: value for name, value in stats.items() if names.get(name)}
    columns["lp"] = -stats["potential"]
    columns["tree_depth"] = np.ceil(np.log2(stats["gradients"] + 1)).astype(int)
    return xr.Dataset({name: (("chain", "draw"), value) for name, value in columns.items()})


def numbered(dataset: xr.Dataset) -> xr.Dataset:
    """The same with numbers along chain, draw, fix and step."""
    along = ("chain", "draw", "fix", "step")
    return dataset.assign_coords({dim: np.arange(dataset.sizes[dim]) for dim in along if dim in dataset.dims})
