"""The draws behind each row of a run's tables: parameters by the names of parameters.csv, and range areas.

Brackets exist only in tables; posterior.nc has dimensions. What a row is called is told from them here, so that draws
of two runs can be set against each other row by row.
"""

from collections.abc import Iterator
from dataclasses import dataclass
from itertools import product
from typing import Any

import pandas as pd
import xarray as xr
from jaxtyping import Float
from numpy.typing import NDArray

from bayesrange.inference._cards import SIGNED
from bayesrange.inference._run import Run
from bayesrange.inference._scales import LayerScale
from bayesrange.inference._summary import raw_layer_unit

AREA = "area"
BY_A0 = ("avoidance", "retreat", "over_marking")
"""Parameters that are counted in units of one animal per A₀."""

WITHOUT_RATIO = (*SIGNED, "home_x", "home_y", "animals")
_LEAD = ("chain", "draw")
_INNER = ("layer", "harmonic", "group", "animal", "home_group", "animals_group", "covariate")


@dataclass(frozen=True)
class Reported:
    """One row of a run's tables, with its draws.

    Attributes:
        name: as in parameters.csv, or `area_95[GROUP]`.
        unit: its unit.
        base: the parameter, `area` for areas.
        part: "", "population", "spread" or "effect".
        layer: the layer it is about; "" without.
        raw: whether it is in raw units.
        single: whether it is of one group or animal of a population.
        draws: chains one after the other.
    """

    name: str
    unit: str
    base: str
    part: str
    layer: str
    raw: bool
    single: bool
    draws: Float[NDArray, " draws"]

    @property
    def has_ratio(self) -> bool:
        """Whether it is above 0 by nature, so that the ratio of two means something."""
        return self.base not in WITHOUT_RATIO and self.part in ("", "population")


def reported(run: Run) -> dict[str, Reported]:
    """Rows of a finished run by name, in the order of its tables: parameters, then areas.

    Rows of a group or animal that was not tracked are left out: their draws are made for the table only.
    """
    with xr.open_datatree(run.folder / "posterior.nc", engine="h5netcdf") as tree:
        posterior = tree["posterior"].to_dataset().load()
        areas = tree["space_use"]["area_km2"].load() if "space_use" in tree.children else None
    units = _units(run)
    known = {row.name: row for row in _parameters(posterior, units, run.info)}
    found = {name: known[name] for name in units.index if name in known}
    return found | ({row.name: row for row in _areas(areas)} if areas is not None else {})


def table_names(run: Run) -> list[str]:
    """Names of the rows of parameters.csv."""
    return [str(name) for name in _units(run).index]


def _units(run: Run) -> "pd.Series[str]":
    """Unit of each row; text stays text, also a unit of 1."""
    file = run.folder / "tables" / "parameters.csv"
    table = pd.read_csv(file, dtype=str, keep_default_na=False, usecols=["parameter", "unit"])
    return table.set_index("parameter")["unit"]


def _parameters(posterior: xr.Dataset, units: "pd.Series[str]", info: dict[str, Any]) -> Iterator[Reported]:
    pooled = any(str(name).endswith("_population") for name in posterior)
    for variable, array in posterior.data_vars.items():
        base, part = _split(str(variable), posterior)
        inner = [str(dim) for dim in array.dims if dim not in _LEAD]
        if not set(inner) <= set(_INNER):
            continue  # correlations: of no row
        single = not part and (f"{base}_population" in posterior or (pooled and "animal" in inner))
        for place in product(*(array[dim].values for dim in inner)):
            at = dict(zip(inner, map(str, place), strict=True))
            name = _name(base, part, at)
            draws = array.sel(at).transpose(*_LEAD).values.astype(float).ravel()
            layer = at.get("layer", "").removesuffix(", day").removesuffix(", night")
            if name in units.index:
                yield Reported(name, units[name], base, part, layer, False, single, draws)
            factor = _raw_factor(base, layer, info["scales"])
            if f"{name} raw" in units.index and factor is not None:
                unit = units[f"{name} raw"]
                yield Reported(f"{name} raw", unit, base, part, layer, True, single, draws * factor)


def _split(variable: str, posterior: xr.Dataset) -> tuple[str, str]:
    """Parameter and part: `resource_spread` is (resource, spread) where there is a `resource`."""
    base, _, part = variable.rpartition("_")
    of_population = part in ("population", "spread", "effect") and base in posterior
    return (base, part) if of_population else (variable, "")


def _name(base: str, part: str, at: dict[str, str]) -> str:
    """The row's name in parameters.csv."""
    inside = [value for dim, value in at.items() if dim != "covariate"]
    name = f"{base}[{', '.join(inside)}]" if inside else base
    end = {"spread": " spread", "effect": f":{at.get('covariate', '')}"}.get(part, "")
    return name + end


def _raw_factor(base: str, layer: str, scales: dict[str, Any]) -> float | None:
    """What turns a scaled parameter into raw units; None where nothing is scaled."""
    if layer:
        return raw_layer_unit(LayerScale(**scales["layers"][layer]))[0] if layer in scales["layers"] else None
    return float(scales["a0_km2"]) if base in BY_A0 else None


def _areas(areas: xr.DataArray) -> Iterator[Reported]:
    for group in areas["group"].values:
        for isopleth in areas["isopleth"].values:
            draws = areas.sel(group=group, isopleth=isopleth).transpose(*_LEAD).values.astype(float).ravel()
            yield Reported(f"{AREA}_{int(isopleth)}[{group}]", "km²", AREA, "", "", True, False, draws)
