"""parameters.csv: one row a parameter, with interval, convergence and what the prior said."""

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
import pandas as pd
import xarray as xr
from arviz_stats.base import array_stats

from bayesrange.inference._assemble import UNITS
from bayesrange.inference._cards import SIGNED
from bayesrange.inference._range_data import RangeSpec
from bayesrange.inference._scales import LayerScale, Scales

PROB = 0.9
"""Share of the posterior between `lower` and `upper`, equal tails."""


@dataclass(frozen=True)
class Row:
    """One reported quantity: its draws and the same quantity under the prior.

    `individual` marks values of single groups or animals of a population, `animal` whose own posterior it is from.
    """

    name: str
    unit: str
    draws: np.ndarray
    prior: np.ndarray
    individual: bool = False
    animal: str = ""


def rows(spec: RangeSpec, scales: Scales, posterior: xr.Dataset, prior: xr.Dataset, seed: int) -> list[Row]:
    """Every reported quantity, in the order of the table.

    Args:
        spec: the model.
        scales: frozen scales, for the rows in raw units.
        posterior: parameters, leading (chain, draw).
        prior: the same under the prior.
        seed: for the draws of a new group.
    """
    found: list[Row] = []
    names = spec.parameters + (("over_marking",) if spec.over_marking else ())
    rng = np.random.default_rng(seed)
    for name in names:
        for layer in spec.layers if name == "resource" else (None,):
            found += _of_parameter(name, layer, spec, scales, (posterior, prior), rng)
    for axis in ("home_x", "home_y") if spec.estimated else ():
        for group in (spec.groups[i] for i in spec.estimated):
            pick = {"home_group": group}
            found.append(
                Row(f"{axis}[{group}]", "m", _values(posterior[axis].sel(pick)), _values(prior[axis].sel(pick)))
            )
    for group in (spec.groups[i] for i in spec.counted):
        own = [_values(data["animals"].sel({"animals_group": group})) for data in (posterior, prior)]
        found.append(Row(f"animals[{group}]", UNITS["animals"], *own))
    return found


def _of_parameter(
    name: str,
    layer: str | None,
    spec: RangeSpec,
    scales: Scales,
    sets: tuple[xr.Dataset, xr.Dataset],
    rng: np.random.Generator,
) -> Iterator[Row]:
    """The rows of one parameter, or of one layer's response."""
    pick = {"layer": layer} if layer is not None else {}
    label = f"{name}[{layer}]" if layer is not None else name
    unit, (factor, raw_unit) = _unit(name, layer, scales), _raw(name, layer, scales)

    def pair(variable: str, **at: str) -> tuple[np.ndarray, np.ndarray]:
        return tuple(_values(data[variable].sel({**pick, **at})) for data in sets)  # type: ignore[return-value]

    varying = name in spec.varying
    centre = pair(f"{name}_population" if varying else name)
    yield Row(label, unit, *centre)
    if factor is not None:
        yield Row(f"{label} raw", raw_unit, *(value * factor for value in centre))
    if not varying:
        return
    on_log = name not in SIGNED
    spread = pair(f"{name}_spread")
    yield Row(f"{label} spread", "log scale" if on_log else unit, *spread)
    for covariate in spec.covariates:
        yield Row(f"{label}:{covariate}", "log scale" if on_log else unit, *pair(f"{name}_effect", covariate=covariate))
    for group in spec.groups:
        own = f"{name}[{layer}, {group}]" if layer is not None else f"{name}[{group}]"
        yield Row(own, unit, *pair(name, group=group), individual=True)
    new = [
        np.exp(np.log(c) + s * rng.standard_normal(c.shape)) if on_log else c + s * rng.standard_normal(c.shape)
        for c, s in zip(centre, spread, strict=True)
    ]
    yield Row(f"{name}[{layer}, new group]" if layer is not None else f"{name}[new group]", unit, *new)


def _unit(name: str, layer: str | None, scales: Scales) -> str:
    """Unit of a parameter; of a contrast of classes what it compares with."""
    reference = scales.layers[layer].reference if layer is not None else ""
    return f"against {reference}" if reference else UNITS[name]


def _raw(name: str, layer: str | None, scales: Scales) -> tuple[float | None, str]:
    """Factor and unit that turn a scaled parameter into raw units, where it is scaled."""
    if layer is not None:
        return raw_layer_unit(scales.layers[layer])
    raw_units = {"avoidance": "km² per animal", "retreat": "km per animal", "over_marking": "km² per animal"}
    return (scales.a0_km2, raw_units[name]) if name in raw_units else (None, "")


def raw_layer_unit(scale: LayerScale) -> tuple[float | None, str]:
    """Factor and unit from per sd to per unit of a layer; none for a contrast of classes."""
    if scale.reference:
        return None, ""
    unit = scale.unit if scale.unit.isalnum() or not scale.unit else f"({scale.unit})"
    return 1 / scale.sd, f"1/{unit}" if unit else "per unit of the layer"


def _values(array: xr.DataArray) -> np.ndarray:
    return np.asarray(array.values, float)


def parameter_table(found: list[Row]) -> pd.DataFrame:
    """The table parameters.csv; empty where a figure cannot be computed, such as R-hat of one chain."""
    with np.errstate(invalid="ignore", divide="ignore"):
        return pd.DataFrame([_describe(row) for row in found])


def _describe(row: Row) -> dict[str, object]:
    draws, tail = row.draws, (1 - PROB) / 2
    lower, median, upper = np.quantile(draws, [tail, 0.5, 1 - tail])
    prior_lower, prior_upper = np.quantile(row.prior, [tail, 1 - tail])
    prior_variance = row.prior.var()
    axes = {"chain_axis": 0, "draw_axis": 1}
    return {
        "parameter": row.name, "unit": row.unit, "mean": draws.mean(), "sd": draws.std(ddof=1), "median": median,
        "lower": lower, "upper": upper, "prob": PROB,
        "ess_bulk": float(array_stats.ess(draws, method="bulk", **axes)),
        "ess_tail": float(array_stats.ess(draws, method="tail", prob=(0.05, 0.95), **axes)),
        "rhat": float(array_stats.rhat(draws, **axes)), "mcse_mean": float(array_stats.mcse(draws, **axes)),
        "prior_lower": prior_lower, "prior_upper": prior_upper,
        "contraction": 1 - draws.var() / prior_variance if prior_variance > 0 else np.nan,
    }  # fmt: skip
