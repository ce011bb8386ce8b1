"""Fixes from files that are no text: Parquet, GeoPackage and CF trajectory NetCDF, as tables of text cells.

They go through the same checks as CSV. Their rows are numbered from 1. Source of the NetCDF layout: CF Conventions,
chapter 9 and appendix H.4 (ragged arrays, contiguous and indexed).
"""

from pathlib import Path
from typing import NamedTuple

import numpy as np
import pandas as pd

from bayesrange._errors import StudyError
from bayesrange.study._crs import crs_text
from bayesrange.study._settings import FixesSection
from bayesrange.study._tables import read_table, shown

ENDINGS = (".csv", ".txt", ".tsv", ".parquet", ".gpkg", ".nc")
MOST_ROWS = 20_000_000
"""More rows than any tracking study has: a small file that claims to hold more is not unpacked."""


class Source(NamedTuple):
    """A table of text cells with line or row numbers as index, and the file's own reference system."""

    table: pd.DataFrame
    crs: str | None


def read_source(path: Path, name: str, section: FixesSection) -> Source:
    """Any file of fixes; text is read by `read_table`.

    Raises:
        StudyError: missing, unreadable, or not of the layout that its ending promises.
    """
    ending = path.suffix.lower()
    if ending not in (".parquet", ".gpkg", ".nc"):
        return Source(read_table(path, name), None)
    if path.is_dir():
        raise StudyError(f"{name}: this is a folder; expected a file.")
    if not path.is_file():
        raise StudyError(f"{name}: there is no such file beside the study file.")
    if path.stat().st_size == 0:
        raise StudyError(f"{name}: the file is empty; save it again.")
    if ending == ".parquet":
        return Source(_parquet(path, name), None)
    if ending == ".gpkg":
        return _geopackage(path, name, section)
    from bayesrange.study._trajectories import read_trajectories

    table, crs = read_trajectories(path, name, section)
    return Source(as_text(table, name), crs)


def as_text(table: pd.DataFrame, name: str) -> pd.DataFrame:
    """Every column as text, missing values blank, numbers to their last digit, times in ISO 8601.

    Raises:
        StudyError: a column name that stands twice.
    """
    columns = [str(column).strip() for column in table.columns]
    twice = sorted({column for column in columns if columns.count(column) > 1})
    if twice:
        raise StudyError(f'{name}: the column "{shown(twice[0])}" stands twice; rename one of them.')
    index = pd.RangeIndex(1, len(table) + 1, name="row")
    texts = {column: _texts(table.iloc[:, k]) for k, column in enumerate(columns)}
    return pd.DataFrame(texts, index=index, columns=columns, dtype=str)


def _texts(values: pd.Series) -> np.ndarray:
    missing = values.isna().to_numpy()
    if isinstance(values.dtype, pd.DatetimeTZDtype):
        texts = values.dt.tz_convert("UTC").dt.strftime("%Y-%m-%dT%H:%M:%S.%fZ")
    elif pd.api.types.is_datetime64_any_dtype(values.dtype):
        texts = values.dt.strftime("%Y-%m-%dT%H:%M:%S.%f")
    else:
        texts = values.map(_text, na_action="ignore")
    return np.where(missing, "", texts.to_numpy(dtype=object))


def _text(value: object) -> str:
    if isinstance(value, bytes):
        value = value.decode("utf-8", errors="replace")
    if isinstance(value, float | np.floating):
        number = float(value)
        return str(int(number)) if number.is_integer() and abs(number) < 1e15 else repr(number)
    return str(value.isoformat() if hasattr(value, "isoformat") else value).strip()


def _few_enough(rows: int, name: str) -> None:
    if rows > MOST_ROWS:
        raise StudyError(f"{name}: the file says it has {rows:,} rows; expected at most {MOST_ROWS:,}: split it.")


def _parquet(path: Path, name: str) -> pd.DataFrame:
    import pyarrow
    from pyarrow import parquet

    try:
        with parquet.ParquetFile(path) as file:
            _few_enough(file.metadata.num_rows, name)
            table = file.read().to_pandas().reset_index()
    except (pyarrow.ArrowException, OSError, ValueError) as error:
        raise StudyError(f"{name}: this cannot be read as Parquet: {shown(str(error), 120)}.") from None
    return as_text(table.drop(columns=["index"], errors="ignore"), name)


def _geopackage(path: Path, name: str, section: FixesSection) -> Source:
    """Attributes of the one table of points, with the points' coordinates as the columns that [fixes] x and y name."""
    import geopandas
    import pyogrio

    try:
        layers = [str(layer) for layer in pyogrio.list_layers(path)[:, 0]]
        if len(layers) != 1:
            raise StudyError(f"{name}: there are {len(layers)} tables in it; expected one with the fixes as points.")
        _few_enough(pyogrio.read_info(path)["features"], name)
        table = geopandas.read_file(path)
    except (pyogrio.errors.DataSourceError, pyogrio.errors.DataLayerError, ValueError) as error:
        if isinstance(error, StudyError):
            raise
        raise StudyError(f"{name}: this cannot be read as a GeoPackage: {shown(str(error), 120)}.") from None
    if not isinstance(table, geopandas.GeoDataFrame):
        return Source(as_text(table, name), None)
    kinds = sorted(set(table.geom_type.dropna()) - {"Point"})
    if kinds:
        raise StudyError(f"{name}: there are shapes of the kind {kinds[0]} in it; expected one point a fix.")
    points = table.geometry
    rest = pd.DataFrame(table.drop(columns=[table.geometry.name, section.x, section.y], errors="ignore"))
    crs = crs_text(points.crs) if points.crs is not None else None
    return Source(as_text(rest.assign(**{section.x: points.x, section.y: points.y}), name), crs)
