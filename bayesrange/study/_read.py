"""Reads a whole study: settings, area, grid, layers, groups and fixes, checked against each other.

Nothing is written. Easting and northing are in metres of the study's reference system.
"""

import hashlib
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
import pandas as pd
import pyproj
import shapely
from jaxtyping import Bool
from numpy.typing import NDArray

from bayesrange._errors import StudyError
from bayesrange.study._area import read_area
from bayesrange.study._card_kind import card_kind
from bayesrange.study._cell_size import check_resolution, check_size, choose_cell
from bayesrange.study._crs import carry, scale_warnings
from bayesrange.study._detection import check_detection, refuse_for_tracks
from bayesrange.study._drop import without_dropped
from bayesrange.study._epochs import Epochs
from bayesrange.study._fixes import RawFixes, read_fixes
from bayesrange.study._grid import SUB, Frame, Grid, area_sub_cells, build_grid, frame_of, without_scraps
from bayesrange.study._keep import keep_fixes
from bayesrange.study._layers import Layer, no_go_sub_cells, read_layer
from bayesrange.study._periods import Span, for_period, in_period
from bayesrange.study._places import Ground, check_fixes, check_homes
from bayesrange.study._placing import placed, placed_groups, reference_systems
from bayesrange.study._rounding import rounding
from bayesrange.study._settings import StudySettings
from bayesrange.study._settings_file import locate_study, read_settings


@dataclass(frozen=True)
class Study:
    """Everything the user brings, checked and in one reference system.

    Attributes:
        path: the study file.
        settings: its content.
        crs: the reference system in which everything is computed, in metres.
        area: the study area's polygon in `crs`.
        grid: the cells over it.
        fixes: sorted by animal and time; animal, time (UTC), x, y [m], group ("" if none), error_m (standard deviation
            per axis, 0 if none), file and row (line number). Where some error is an ellipse also error_major_m and
            error_minor_m (semi-axes as standard deviations) and error_bearing_deg (of the long one, clockwise from grid
            north); error_m is then the root of their mean variance. Where places come from bearings also flag (what is
            doubtful about the place, "" if nothing).
        groups: group, x, y [m; NaN: to be estimated], animals (at least 1), then the covariates.
        layers: by name, no-go layers left out.
        counts: what was read and set aside.
        warnings: sentences for the user.
        hashes: SHA-256 of every file read, by its name relative to the study.
        period: which of the study's periods was read, if it has some.
        deployments: animal, tag, from, until (UTC), then further columns such as fate; None without them.
        rounding_m: step to which the fixes' coordinates were written [m]; 0 if not known.
        bearings: file and row (of the fix), x and y of the station [m], azimuth_deg from grid north and sd_deg of each
            bearing whose fix may be read from them instead of its ellipse; None without bearings.
        epochs: of the fitted time, where groups come and go; None where every group is there all the time.
    """

    path: Path
    settings: StudySettings
    crs: pyproj.CRS
    area: shapely.Polygon | shapely.MultiPolygon
    grid: Grid
    fixes: pd.DataFrame
    groups: pd.DataFrame
    layers: dict[str, Layer]
    counts: dict[str, int]
    warnings: list[str]
    hashes: dict[str, str]
    period: str | None = None
    deployments: pd.DataFrame | None = None
    rounding_m: float = 0.0
    bearings: pd.DataFrame | None = None
    epochs: Epochs | None = None

    @property
    def model_layers(self) -> tuple[str, ...]:
        """Names in `layers` that the model's list means: of a layer of classes all its contrasts, in their order."""
        wanted = self.settings.model.layers
        return tuple(name for listed in wanted for name, own in self.layers.items() if own.section == listed)


def read_study(path: str | Path, period: str | None = None) -> Study:
    """Read the study file (or the folder with study.toml) and all files it names.

    Args:
        path: the file or folder.
        period: which of the study's periods is meant, where it has some.

    Raises:
        StudyError: one sentence on what is wrong, where, and how to mend it.
    """
    path = locate_study(path)
    settings, folder = read_settings(path), path.parent
    settings, span = for_period(settings, period, path.name)
    raw = read_fixes(folder, settings.fixes, settings.animals, settings.study.crs, settings.bearings)
    crs, fixes_crs, said_of_crs = reference_systems(settings, raw)
    area = read_area(folder / settings.study.area, settings.study.area, crs)
    said_of_crs += scale_warnings(crs, area.representative_point().x, area.representative_point().y)
    fixes, raw = without_dropped(placed(raw.table, fixes_crs, crs), raw, settings.fixes, area)
    fixes, raw = _used(fixes, raw, settings, span, period, crs)
    span = span or Span(fixes["time"].min(), fixes["time"].max())
    groups, epochs, said_of_groups = placed_groups(settings, folder, fixes, fixes_crs, crs, span)

    cell_m, said_of_cells = _cell(settings, fixes, area)
    frame = frame_of(area, cell_m)
    of_ranges = card_kind(settings.model.card, folder) == "range"
    if not of_ranges:
        refuse_for_tracks(settings, path.name)
    said_of_cells += (
        check_size(frame, len(groups) * (1 if epochs is None else len(epochs.sets)), settings.sampling)
        if of_ranges
        else []
    )
    no_go = _no_go(settings, folder, frame, crs)
    habitable, said_of_scraps = without_scraps(area_sub_cells(area, frame) & ~no_go, frame)
    grid = build_grid(frame, crs, habitable)
    ground = Ground(area, grid, habitable, no_go, settings.model.reading)
    outside = check_fixes(fixes, ground, carry(*raw.table[["y", "x"]].to_numpy(dtype=float).T, fixes_crs, crs))
    check_homes(groups, ground, settings.groups.file if settings.groups else "groups")
    layers, said_of_layers, filled = _layers(settings, folder, grid)

    counts = raw.counts | {"fixes": len(fixes), "animals": fixes["animal"].nunique(), "groups": len(groups)}
    counts |= {"outside_within_error": outside} | ({"cells_filled": filled} if filled else {})
    warnings = said_of_crs + raw.warnings + said_of_groups + said_of_cells + said_of_scraps
    if of_ranges:
        warnings += check_resolution(fixes, grid)
    warnings += said_of_layers
    hashes = _hashes(path, settings, raw.files)
    return Study(
        path, settings, crs, area, grid, fixes, groups, layers, counts, warnings, hashes, period, raw.deployments,
        rounding(*raw.table[["x", "y"]].to_numpy(dtype=float).T, fixes_crs.is_geographic),
        None if raw.bearings is None else raw.bearings.in_system(crs), epochs,
    )  # fmt: skip


def _used(
    fixes: pd.DataFrame, raw: RawFixes, settings: StudySettings, span: Span | None, period: str | None, crs: pyproj.CRS
) -> tuple[pd.DataFrame, RawFixes]:
    """Fixes of the period that [fixes.keep] leaves; what is set aside is counted and said."""
    counts, warnings = dict(raw.counts), list(raw.warnings)
    if span is not None:
        inside, said = in_period(fixes, span, str(period))
        counts["outside_period"] = int((~inside).sum())
        warnings.append(said)
        fixes, raw = fixes[inside], replace(raw, table=raw.table[inside])
    left, not_kept, said_of_keep = keep_fixes(fixes, settings.fixes.keep, crs)
    table = raw.table[left].reset_index(drop=True)
    fixes = fixes[left].reset_index(drop=True).drop(columns=["minutes", "kept_by_column"])
    return fixes, replace(raw, table=table, counts=counts | not_kept, warnings=warnings + said_of_keep)


def _cell(
    settings: StudySettings, fixes: pd.DataFrame, area: shapely.Polygon | shapely.MultiPolygon
) -> tuple[float, list[str]]:
    """Edge of a cell [m], given or chosen; if chosen, why."""
    if settings.study.cell_m != "auto":
        return settings.study.cell_m, []
    chosen, why = choose_cell(fixes, area)
    return chosen, [f"[study] cell_m: {why}"]


def _no_go(settings: StudySettings, folder: Path, frame: Frame, crs: pyproj.CRS) -> Bool[NDArray, "rows columns"]:
    found = np.zeros((frame.ny * SUB, frame.nx * SUB), dtype=bool)
    for layer in settings.layers.values():
        if layer.no_go and layer.file:
            found |= no_go_sub_cells(folder / layer.file, layer, frame, crs)
    return found


def _layers(settings: StudySettings, folder: Path, grid: Grid) -> tuple[dict[str, Layer], list[str], int]:
    """Layers by name, what has to be said, and how many cells were filled."""
    layers: dict[str, Layer] = {}
    said: list[str] = []
    filled = 0
    for name, entry in settings.layers.items():
        if entry.no_go or (entry.file is None and entry.distance is None):
            continue
        found = read_layer(folder, name, entry, grid, wanted=name in settings.model.layers)
        twice = next(iter(found.layers.keys() & layers.keys()), None)
        if twice is not None:
            raise StudyError(f'[layers.{name}]: there would be two layers called "{twice}"; rename this section.')
        layers |= found.layers
        said += found.said
        if name == settings.fixes.detection:
            said += check_detection(found.layers[name], grid, found.said)
        filled += found.filled
    return layers, said, filled


def _hashes(path: Path, settings: StudySettings, fixes: dict[str, Path]) -> dict[str, str]:
    """SHA-256 of every file that was read, by its name as the user wrote it."""
    named = [settings.study.area]
    named += [file for layer in settings.layers.values() for file in (layer.file, layer.distance) if file]
    if settings.groups is not None:
        named.append(settings.groups.file)
    files = {path.name: path} | fixes | {name: path.parent / name for name in named}
    hashes = {}
    for name, file in files.items():
        with file.open("rb") as opened:  # piece by piece: a raster may be larger than memory
            hashes[name] = hashlib.file_digest(opened, "sha256").hexdigest()
    return hashes
