"""Fixes from NetCDF that keeps the CF Conventions' layout of trajectories (chapter 9).

One variable has `cf_role = "trajectory_id"`. Ragged arrays are contiguous (a count variable with `sample_dimension`)
or indexed (an index variable with `instance_dimension`); one trajectory alone needs neither. Coordinates are found by
standard_name, else by axis.
"""

from pathlib import Path

import numpy as np
import pandas as pd
import pyproj
import xarray as xr
from pyproj.exceptions import CRSError

from bayesrange._errors import StudyError
from bayesrange.study._crs import crs_text
from bayesrange.study._settings import FixesSection
from bayesrange.study._tables import shown

_NAMES = {
    "x": ("longitude", "projection_x_coordinate"),
    "y": ("latitude", "projection_y_coordinate"),
    "time": ("time",),
}
_MOST_ROWS = 20_000_000


def read_trajectories(path: Path, name: str, section: FixesSection) -> tuple[pd.DataFrame, str | None]:
    """One row a sample, and the reference system.

    Identifier, time and coordinates come as the columns that `[fixes]` names; other variables keep their names.

    Raises:
        StudyError: not NetCDF, or a part of the layout is missing, which is named.
    """
    with _open(path, name) as data:
        if str(data.attrs.get("featureType", "")).lower() != "trajectory":
            raise StudyError(f'{name}: expected the global attribute featureType = "trajectory" (CF, chapter 9).')
        if max(data.sizes.values(), default=0) > _MOST_ROWS:
            raise StudyError(f"{name}: the file says it has more than {_MOST_ROWS:,} rows; split it.")
        found = {role: _coordinate(data, role, name) for role in _NAMES}
        ids = [v for v in data.variables if data[v].attrs.get("cf_role") == "trajectory_id"]
        if len(ids) != 1:
            raise StudyError(f'{name}: expected one variable with cf_role = "trajectory_id", found {len(ids)}.')
        sample = data[found["time"]].dims
        if len(sample) != 1:
            raise StudyError(f"{name}: expected samples along one dimension (ragged arrays), not {len(sample)}.")
        which = _instances(data, str(ids[0]), str(sample[0]), name)
        columns = {
            str(v): data[v].to_numpy() if data[v].dims == sample else data[v].to_numpy().reshape(-1)[which]
            for v in data.variables
            if v not in found.values() and data[v].dims in (sample, data[ids[0]].dims) and v != ids[0]
        }
        for role in ("x", "y", "time"):
            if data[found[role]].dims != sample:
                raise StudyError(f"{name}: the variable {found[role]} is not along {sample[0]}, as the times are.")
        own = {"x": section.x, "y": section.y, "time": section.time if isinstance(section.time, str) else "time"}
        columns |= {own[role]: data[found[role]].to_numpy() for role in own}
        columns[section.tag or section.animal] = data[ids[0]].to_numpy().reshape(-1)[which]
        crs = _system(data, found["x"], name)
    table = pd.DataFrame(columns)
    table[own["time"]] = _utc(table[own["time"]], found["time"], name)
    return table, crs


def _open(path: Path, name: str) -> xr.Dataset:
    first = path.read_bytes()[:3]
    try:
        return xr.open_dataset(path, engine="scipy" if first == b"CDF" else "h5netcdf")
    except Exception as error:  # each engine has its own kinds of error for a broken file
        raise StudyError(f"{name}: this cannot be read as NetCDF: {shown(str(error), 120)}.") from None


def _coordinate(data: xr.Dataset, role: str, name: str) -> str:
    named = [str(v) for v in data.variables if data[v].attrs.get("standard_name") in _NAMES[role]]
    axis = role[0].upper()
    found = named or [str(v) for v in data.variables if data[v].attrs.get("axis") == axis]
    if len(found) != 1:
        raise StudyError(f'{name}: expected one variable with standard_name = "{_NAMES[role][0]}", found {len(found)}.')
    return found[0]


def _instances(data: xr.Dataset, identifier: str, sample: str, name: str) -> np.ndarray:
    """Position of each sample's trajectory."""
    counts = [v for v in data.variables if data[v].attrs.get("sample_dimension") == sample]
    indices = [v for v in data.variables if "instance_dimension" in data[v].attrs and data[v].dims == (sample,)]
    number, samples = data[identifier].size, data.sizes[sample]
    if counts:
        rows = data[counts[0]].to_numpy().reshape(-1)
        if len(rows) != number or not np.all(rows >= 0) or rows.sum() != samples:
            raise StudyError(
                f"{name}: {counts[0]} counts {np.nansum(rows):.0f} samples in {len(rows)} trajectories, but there are "
                f"{samples} in {number}; write the file again."
            )
        return np.repeat(np.arange(number), rows.astype(int))
    if indices:
        which = data[indices[0]].to_numpy()
        if not np.all((which >= 0) & (which < number)):
            raise StudyError(f"{name}: {indices[0]} names trajectories that are not there; expected 0 to {number - 1}.")
        return which.astype(int)
    if number != 1:
        raise StudyError(
            f"{name}: nothing says which sample is of which trajectory; expected a count variable with "
            "sample_dimension or an index variable with instance_dimension."
        )
    return np.zeros(samples, dtype=int)


def _system(data: xr.Dataset, x: str, name: str) -> str | None:
    """From the grid mapping; longitude and latitude without one are EPSG:4326."""
    mappings = {str(data[v].attrs["grid_mapping"]) for v in data.variables if "grid_mapping" in data[v].attrs}
    mappings |= {str(data[v].encoding["grid_mapping"]) for v in data.variables if "grid_mapping" in data[v].encoding}
    for mapping in sorted(mappings & {str(v) for v in data.variables}):
        try:
            return crs_text(pyproj.CRS.from_cf(data[mapping].attrs))
        except (CRSError, KeyError, ValueError):
            raise StudyError(f"{name}: the grid mapping {mapping} is no reference system that is known.") from None
    return "EPSG:4326" if data[x].attrs.get("standard_name") == "longitude" else None


def _utc(times: pd.Series, variable: str, name: str) -> pd.Series:
    """CF times are in UTC unless their units say otherwise, and then they were brought there."""
    if not pd.api.types.is_datetime64_any_dtype(times.dtype):
        raise StudyError(f'{name}: {variable} is no time; expected units such as "hours since 2031-03-01 00:00:00".')
    return times.dt.tz_localize("UTC")
