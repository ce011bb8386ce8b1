"""A study as far as a look at the data needs it: the fixes must be sound, all else may be missing.

What is missing or wrong beside the fixes is left out and said, never guessed. Nothing is removed: duplicates stay.
"""

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd
import pyproj
import shapely
from jaxtyping import Float
from numpy.typing import NDArray

from bayesrange._errors import StudyError
from bayesrange.study._area import read_area
from bayesrange.study._cell_size import choose_cell
from bayesrange.study._classes import classes_on_cells
from bayesrange.study._crs import scale_warnings
from bayesrange.study._deployments import assign_animals
from bayesrange.study._epochs import Epochs
from bayesrange.study._fixes import RawFixes, read_fixes
from bayesrange.study._grid import LARGEST, Grid, area_sub_cells, build_grid, frame_of
from bayesrange.study._layer_keys import class_names
from bayesrange.study._periods import Span, period_spans
from bayesrange.study._placing import placed, placed_groups, reference_systems
from bayesrange.study._raster import read_raster
from bayesrange.study._settings import DropSection, StudySettings
from bayesrange.study._settings_file import NOT_GIVEN, locate_study, read_settings_to_screen
from bayesrange.study._times import read_times


@dataclass(frozen=True)
class ClassMap:
    """A layer of classes on the grid: positions in `names`, NaN where there is none."""

    names: list[str]
    cells: Float[NDArray, "ny nx"]


@dataclass(frozen=True)
class BareStudy:
    """Fixes with what could be read beside them.

    Attributes:
        path: the study file.
        settings: its content; sections that are wrong are left out.
        crs: the reference system of all coordinates, in metres.
        fixes: sorted by animal and time, duplicates among them; as in `Study`.
        failed: animal and time of failed fixes, as far as both can be read.
        area: the study area, if it can be read.
        groups: as in `Study`, if they can be read.
        grid: over the area, where there is a layer of classes.
        classes: layers of classes by name.
        spans: the study's periods.
        counts: what was read.
        warnings: sentences for the user.
    """

    path: Path
    settings: StudySettings
    crs: pyproj.CRS
    fixes: pd.DataFrame
    failed: pd.DataFrame
    area: shapely.Polygon | shapely.MultiPolygon | None
    groups: pd.DataFrame | None
    grid: Grid | None
    classes: dict[str, ClassMap]
    spans: dict[str, Span]
    counts: dict[str, int]
    warnings: list[str]


def read_bare(path: str | Path) -> BareStudy:
    """Read the fixes of a study, and of the rest what is there and sound.

    Raises:
        StudyError: the study file or the fixes are wrong.
    """
    path = locate_study(path)
    settings, said = read_settings_to_screen(path)
    folder = path.parent
    kept = settings.fixes.model_copy(update={"drop": DropSection(flags=["duplicate"])})  # so that none is refused
    raw = read_fixes(folder, kept, settings.animals, settings.study.crs, settings.bearings)
    crs, fixes_crs, said_of_crs = reference_systems(settings, raw)
    fixes = placed(raw.table, fixes_crs, crs).drop(columns=["minutes", "kept_by_column"])
    nothing: list[str] = []
    no_spans: dict[str, Span] = {}
    said += said_of_crs + raw.warnings + _tried(lambda: scale_warnings(crs, *_middle(fixes)), nothing, said)
    spans = _tried(lambda: period_spans(settings, path.name), no_spans, said)
    area = _area(settings, folder, crs, said)
    span = Span(fixes["time"].min(), fixes["time"].max())
    groups: pd.DataFrame | None = None
    if settings.groups is not None:
        none: tuple[pd.DataFrame | None, Epochs | None, list[str]] = (None, None, [])
        groups, _, of_groups = _tried(lambda: placed_groups(settings, folder, fixes, fixes_crs, crs, span), none, said)
        said += of_groups
    grid, classes = _classes(settings, folder, fixes, area, crs, said)
    return BareStudy(
        path, settings, crs, fixes, _failed(raw, settings, said), area, groups, grid, classes, spans,
        raw.counts | {"fixes": len(fixes), "animals": fixes["animal"].nunique()}, said,
    )  # fmt: skip


def _tried[T](read: Callable[[], T], otherwise: T, said: list[str]) -> T:
    """What a reader gives, or `otherwise`, and then its complaint is said."""
    try:
        return read()
    except StudyError as error:
        said.append(str(error))
        return otherwise


def _middle(fixes: pd.DataFrame) -> tuple[float, float]:
    return float(fixes["x"].median()), float(fixes["y"].median())


def _area(
    settings: StudySettings, folder: Path, crs: pyproj.CRS, said: list[str]
) -> shapely.Polygon | shapely.MultiPolygon | None:
    name = settings.study.area
    if name == NOT_GIVEN:
        said.append("[study] area: none is given, so that fixes outside it cannot be told; a fit needs one.")
        return None
    return _tried(lambda: read_area(folder / name, name, crs), None, said)


def _failed(raw: RawFixes, settings: StudySettings, said: list[str]) -> pd.DataFrame:
    """Failed fixes with their animal and time in UTC."""
    nothing = pd.DataFrame({"animal": pd.Series(dtype="str"), "time": pd.Series(dtype="datetime64[ns, UTC]")})
    if raw.failed.empty:
        return nothing
    rows = raw.failed[(raw.failed["animal"] != "") & (raw.failed["when"] != "")]
    times: list[pd.Series] = []
    for name, own in rows.groupby("file"):
        try:
            found, _ = read_times(own["when"].set_axis(own["row"]), settings.fixes.zone, str(name))
        except StudyError as error:
            said.append(str(error))
            continue
        times.append(pd.Series(found.array, index=own.index))
    if not times:
        return nothing
    failed = rows.assign(time=pd.concat(times)).dropna(subset="time")
    if raw.deployments is not None:
        known = failed[failed["animal"].isin(set(raw.deployments["wearer"]))].assign(group="").reset_index(drop=True)
        if known.empty:
            return nothing
        try:
            failed = assign_animals(known, raw.deployments, "")[0]
        except StudyError:  # none of them within a deployment
            return nothing
    return failed[["animal", "time"]].reset_index(drop=True)


def _classes(
    settings: StudySettings,
    folder: Path,
    fixes: pd.DataFrame,
    area: shapely.Polygon | shapely.MultiPolygon | None,
    crs: pyproj.CRS,
    said: list[str],
) -> tuple[Grid | None, dict[str, ClassMap]]:
    """The layers of classes, on the study's cells (or coarser ones, if those are too many)."""
    wanted = {name: layer for name, layer in settings.layers.items() if layer.classes and layer.file}
    if not wanted or area is None:
        return None, {}
    given = settings.study.cell_m
    try:
        cell_m = choose_cell(fixes, area)[0] if given == "auto" else float(given)
    except StudyError as error:
        said.append(str(error))
        return None, {}
    west, south, east, north = area.bounds
    frame = frame_of(area, max(cell_m, (max(east - west, north - south) / LARGEST)))
    grid = _tried(lambda: build_grid(frame, crs, area_sub_cells(area, frame)), None, said)
    if grid is None:
        return None, {}
    maps: dict[str, ClassMap] = {}
    for name, layer in wanted.items():
        where = f"[layers.{name}] {layer.file}"
        try:
            raster = read_raster(folder / str(layer.file), str(layer.file), frame, crs, layer.band)
            cells, problem = classes_on_cells(raster, layer.classes or {}, grid, where)
        except StudyError as error:
            said.append(str(error))
            continue
        said += [problem] if problem else []
        maps[name] = ClassMap(class_names(layer.classes or {}), np.where(grid.inside, cells, np.nan))
    return grid, maps
