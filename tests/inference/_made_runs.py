"""Run folders of made-up draws, in the format that a fit writes, as far as differences between runs need them."""

import json
from pathlib import Path

import numpy as np
import pandas as pd
import xarray as xr

from bayesrange.inference import Run

SCALES = {
    "a0_km2": 0.5, "home_length_km": 1.3, "perception_m": 200.0, "eps_m": 50.0,
    "layers": {"worms": {"mean": 40.0, "sd": 8.0, "unit": "kg/ha", "reference": ""},
               "cover=wood": {"mean": 0.0, "sd": 1.0, "unit": "", "reference": "grass"}},
}  # fmt: skip
BEGIN = {"before": "2031-03-01", "after": "2031-07-01", "later": "2031-10-01"}


def write_run(
    folder: Path,
    period: str | None,
    posterior: xr.Dataset,
    table: pd.DataFrame,
    areas: xr.DataArray | None = None,
    scales: dict | None = None,
    **changes: object,
) -> Run:
    """Write a run; `changes` are keys of run.json."""
    times = pd.date_range(BEGIN.get(str(period), "2031-01-01"), periods=20, freq="D")
    groups = {"posterior": posterior, "constant_data": xr.Dataset({"time": ("fix", times)})}
    if areas is not None:
        groups["space_use"] = xr.Dataset({"area_km2": areas})
    (folder / "tables").mkdir(parents=True)
    xr.DataTree.from_dict(groups).to_netcdf(folder / "posterior.nc", engine="h5netcdf")
    table.to_csv(folder / "tables" / "parameters.csv", index=False)
    info = {
        "format": 1, "name": "Tern Marsh", "study": {"name": "Tern Marsh", "file": "study.toml"}, "crs": "EPSG:32631",
        "cell_m": 100, "card": {"name": "avoidance-resources", "kind": "range"}, "scales": scales or SCALES,
        "period": period, "converged": True, "diagnostics": {"problems": []}, "sensitive": "no",
    } | changes  # fmt: skip
    (folder / "run.json").write_text(json.dumps(info), encoding="utf-8")
    return Run(folder)


def plain_run(
    folder: Path, period: str | None, draws: dict[str, np.ndarray], areas: np.ndarray | None = None, **changes
) -> Run:
    """A run of parameters without dimensions and, for `resource`, one layer; areas (chain, draw, isopleth, group)."""
    lead = ("chain", "draw")
    layered = {name: (*lead, "layer") for name in draws if name == "resource"}
    posterior = xr.Dataset(
        {name: (layered.get(name, lead), values[..., None] if name in layered else values)
         for name, values in draws.items()},
        {"layer": ["worms"]} if layered else {},
    )  # fmt: skip
    units = {"localising": "1/km", "avoidance": "1", "resource": "per sd"}
    raw = {"avoidance": "km² per animal", "resource": "1/(kg/ha)"}
    rows = []
    for name in draws:
        label = f"{name}[worms]" if name in layered else name
        rows.append((label, units[name], 0.9))
        rows += [(f"{label} raw", raw[name], 0.9)] if name in raw else []
    table = pd.DataFrame(rows, columns=["parameter", "unit", "contraction"])
    shaped = None
    if areas is not None:
        names = {"isopleth": [50, 95], "group": ["north", "säter, <b>low</b>"]}
        shaped = xr.DataArray(areas, dims=(*lead, "isopleth", "group"), coords=names)
    return write_run(folder, period, posterior, table, shaped, **changes)
