"""From the workers' arrays to posterior.nc: an ArviZ DataTree with names, units and coordinates.

Files hold metres; the numerics hold kilometres: the only place where home centres are converted.
"""

from dataclasses import dataclass
from pathlib import Path

import numpy as np
import xarray as xr

from bayesrange.inference._cards import SIGNED
from bayesrange.inference._derived import ISOPLETHS
from bayesrange.inference._program import Recorded
from bayesrange.inference._range_data import RangeSpec
from bayesrange.inference._task import chain_folder
from bayesrange.study import Study

UNITS = {
    "localising": "1/km",
    "retreat": "1/km",
    "avoidance": "1",
    "over_marking": "1",
    "resource": "per sd",
    "home_x": "m",
    "home_y": "m",
}
"""Unit of each parameter in posterior.nc and the tables."""

Sites = dict[str, np.ndarray]


@dataclass(frozen=True)
class Derived:
    """What all chains of a run derived from their draws; `sites` and `stats` lead with (chain, draw)."""

    sites: Sites
    stats: dict[str, np.ndarray]
    log_likelihood: np.ndarray
    area_km2: np.ndarray
    overlap: np.ndarray
    solved: np.ndarray
    density_mean: np.ndarray
    density_sd: np.ndarray
    inside: np.ndarray
    failed_solves: int
    two_states: int
    states_checked: int
    seconds: list[float]


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

    def stacked(name: str) -> np.ndarray:
        return np.stack([part[name] for part in parts])

    def named(prefix: str) -> dict[str, np.ndarray]:
        return {name.removeprefix(prefix): stacked(name) for name in parts[0] if name.startswith(prefix)}

    count = sum(len(part["solved"]) for part in parts)
    mean, square, inside = (
        sum(part[f"sum_{name}"] for part in parts) / count for name in ("density", "density_squared", "inside")
    )
    return Derived(
        named("site_"), named("stat_"), stacked("log_likelihood"), stacked("area_km2"), stacked("overlap"),
        stacked("solved"), mean, np.sqrt(np.maximum(square - mean**2, 0.0)), inside,
        *(int(sum(part[name] for part in parts)) for name in ("failed_solves", "two_states", "states_checked")),
        [float(part["seconds"]) for part in parts],
    )  # fmt: skip


def parameter_dataset(spec: RangeSpec, sites: Sites) -> xr.Dataset:
    """Parameters as named variables, home centres in metres.

    Args:
        spec: the model.
        sites: constrained values by site, leading (chain, draw).
    """
    variables: dict[str, tuple[tuple[str, ...], np.ndarray, dict[str, str]]] = {}
    for name, value in sites.items():
        if name.startswith("group_place_"):
            continue
        base, _, part = (
            name.partition("_") if name.split("_")[0] in SIGNED + ("localising", "avoidance") else (name, "", "")
        )
        unit = UNITS.get(base, "1") if part in ("", "population") else "1"
        if name in ("home_x", "home_y"):
            variables[name] = (("home_group",), value * 1000, {"units": "m"})
        elif name == "group_correlation":  # sampled as its Cholesky factor
            correlation = value @ np.swapaxes(value, -1, -2)
            variables[name] = (("coefficient", "coefficient_2"), correlation, {"units": "1"})
        else:
            dims, shaped = _shape(base, part, value, spec)
            variables[name] = (dims, shaped, {"units": unit})
    coords: dict[str, list[str]] = {}
    used = {dim for dims, _, _ in variables.values() for dim in dims}
    known = {
        "layer": list(spec.layers), "group": list(spec.groups), "covariate": list(spec.covariates),
        "home_group": [spec.groups[i] for i in spec.estimated], "coefficient": _coefficients(spec),
        "coefficient_2": _coefficients(spec),
    }  # fmt: skip
    coords = {dim: known[dim] for dim in used}
    leading = ("chain", "draw")
    return xr.Dataset(
        {name: (leading + dims, value, attrs) for name, (dims, value, attrs) in variables.items()}, coords
    )


def _shape(base: str, part: str, value: np.ndarray, spec: RangeSpec) -> tuple[tuple[str, ...], np.ndarray]:
    layered = base == "resource"
    if base in spec.varying:
        own: dict[str, tuple[str, ...]] = {"": ("group",), "population": (), "spread": (), "effect": ("covariate",)}
        dims = (("layer",) if layered else ()) + own[part]
        if not layered and part in ("spread", "effect"):
            value = value[:, :, 0]
        return dims, value
    return (("layer",) if layered else ()), value


def _coefficients(spec: RangeSpec) -> list[str]:
    rows = []
    for name in spec.varying:
        rows += [f"{name}[{layer}]" for layer in spec.layers] if name == "resource" else [name]
    return rows


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


def build_tree(
    study: Study, spec: RangeSpec, derived: Derived, prior: Sites, weight: np.ndarray, attrs: dict[str, str]
) -> xr.DataTree:
    """Everything that posterior.nc holds.

    Args:
        study: what was fitted.
        spec: the model.
        derived: from `gather`.
        prior: prior draws by site, leading (draw).
        weight: weight of each fix.
        attrs: global attributes.
    """
    fixes, groups, grid = study.fixes, study.groups, study.grid
    known = [i not in spec.estimated for i in range(len(groups))]
    places = {"x": grid.x_m, "y": grid.y_m}
    layers = np.array([study.layers[name].values for name in spec.layers])
    constant = xr.Dataset(
        {
            "weight": ("fix", weight), "error_m": ("fix", fixes["error_m"].to_numpy(float)),
            "group_of_fix": ("fix", fixes["group"].to_numpy(object).astype(str)),
            "animal": ("fix", fixes["animal"].to_numpy(object).astype(str)),
            "time": ("fix", fixes["time"].dt.tz_convert("UTC").dt.tz_localize(None).to_numpy("datetime64[ns]")),
            "habitable": (("y", "x"), grid.habitable),
            "layer_value": (("layer", "y", "x"), layers.reshape(-1, *grid.shape)),
            "home_x": ("group", np.where(known, groups["x"].to_numpy(float), np.nan)),
            "home_y": ("group", np.where(known, groups["y"].to_numpy(float), np.nan)),
            "animals": ("group", groups["animals"].to_numpy(int)),
        },
        {"group": list(spec.groups), "layer": list(spec.layers), **places},
    )  # fmt: skip
    chain_draw = ("chain", "draw")
    use = xr.Dataset(
        {
            "density_mean": (("group", "y", "x"), derived.density_mean, {"units": "1/km²"}),
            "density_sd": (("group", "y", "x"), derived.density_sd, {"units": "1/km²"}),
            "inside_probability": (("isopleth", "group", "y", "x"), derived.inside, {"units": "1"}),
            "area_km2": ((*chain_draw, "isopleth", "group"), derived.area_km2, {"units": "km²"}),
            "overlap": ((*chain_draw, "group", "neighbour"), derived.overlap, {"units": "1"}),
        },
        {"group": list(spec.groups), "neighbour": list(spec.groups), "isopleth": list(ISOPLETHS), **places},
    )
    likelihood = xr.Dataset({"fixes": ((*chain_draw, "fix"), derived.log_likelihood[:, :, : len(fixes)])})
    observed = xr.Dataset({"x": ("fix", fixes["x"].to_numpy(float)), "y": ("fix", fixes["y"].to_numpy(float))})
    groups_of_tree = {
        "posterior": parameter_dataset(spec, derived.sites),
        "prior": parameter_dataset(spec, {name: value[None] for name, value in prior.items()}),
        "sample_stats": sampler_dataset(derived.stats), "log_likelihood": likelihood, "observed_data": observed,
        "constant_data": constant, "space_use": use,
    }  # fmt: skip
    numbered = {name: _numbered(dataset) for name, dataset in groups_of_tree.items()}
    tree = xr.DataTree.from_dict(numbered)
    tree.attrs.update(attrs)
    return tree


def _numbered(dataset: xr.Dataset) -> xr.Dataset:
    counted = {dim: np.arange(dataset.sizes[dim]) for dim in ("chain", "draw", "fix") if dim in dataset.dims}
    return dataset.assign_coords(counted)
