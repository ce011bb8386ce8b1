"""From the workers' arrays to posterior.nc of a range card: an ArviZ DataTree with names, units and coordinates.

Files hold metres; the numerics hold kilometres: the only place where home centres are converted.
"""

import numpy as np
import xarray as xr

from bayesrange.inference._cards import SIGNED
from bayesrange.inference._derived import ISOPLETHS
from bayesrange.inference._gather import Derived, Sites, numbered, sampler_dataset
from bayesrange.inference._range_data import RangeSpec
from bayesrange.study import Study

UNITS = {
    "localising": "1/km",
    "retreat": "1/km",
    "avoidance": "1",
    "over_marking": "1",
    "resource": "per sd",
    "home_x": "m",
    "home_y": "m",
    "animals": "animals",
}
"""Unit of each parameter in posterior.nc and the tables."""


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
        elif name == "animals":
            variables[name] = (("animals_group",), value, {"units": UNITS[name]})
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
        "coefficient_2": _coefficients(spec), "animals_group": [spec.groups[i] for i in spec.counted],
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


def build_tree(study: Study, spec: RangeSpec, derived: Derived, prior: Sites, weight: np.ndarray) -> xr.DataTree:
    """Everything that posterior.nc holds.

    Args:
        study: what was fitted.
        spec: the model.
        derived: from `gather`.
        prior: prior draws by site, leading (draw).
        weight: weight of each fix.
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
            "animals": ("group", groups["animals"].to_numpy()),  # whole, or the middle of a range
        },
        {"group": list(spec.groups), "layer": list(spec.layers), **places},
    )  # fmt: skip
    for column in ("animals_low", "animals_high"):
        if column in groups:
            constant[column] = ("group", groups[column].to_numpy(float))
    if study.settings.fixes.detection is not None:
        constant["detection"] = (("y", "x"), study.layers[study.settings.fixes.detection].values)
    chain_draw = ("chain", "draw")
    use = xr.Dataset(
        {
            "density_mean": (("group", "y", "x"), derived.means["density"], {"units": "1/km²"}),
            "density_sd": (("group", "y", "x"), derived.spread("density"), {"units": "1/km²"}),
            "inside_probability": (("isopleth", "group", "y", "x"), derived.means["inside"], {"units": "1"}),
            "area_km2": ((*chain_draw, "isopleth", "group"), derived.kept["area_km2"], {"units": "km²"}),
            "overlap": ((*chain_draw, "group", "neighbour"), derived.kept["overlap"], {"units": "1"}),
        },
        {"group": list(spec.groups), "neighbour": list(spec.groups), "isopleth": list(ISOPLETHS), **places},
    )
    likelihood = xr.Dataset({"fixes": ((*chain_draw, "fix"), derived.kept["log_likelihood"][:, :, : len(fixes)])})
    observed = xr.Dataset({"x": ("fix", fixes["x"].to_numpy(float)), "y": ("fix", fixes["y"].to_numpy(float))})
    groups_of_tree = {
        "posterior": parameter_dataset(spec, derived.sites),
        "prior": parameter_dataset(spec, {name: value[None] for name, value in prior.items()}),
        "sample_stats": sampler_dataset(derived.stats), "log_likelihood": likelihood, "observed_data": observed,
        "constant_data": constant, "space_use": use,
    }  # fmt: skip
    return xr.DataTree.from_dict({name: numbered(dataset) for name, dataset in groups_of_tree.items()})
