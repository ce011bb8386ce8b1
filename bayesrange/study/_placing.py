"""Fixes and home centres carried into the study's reference system, which is given or chosen here."""

from pathlib import Path

import numpy as np
import pandas as pd
import pyproj

from bayesrange._errors import StudyError
from bayesrange.study._crs import carry, crs_text, look_like_degrees, metric_crs, parse_crs, utm_for
from bayesrange.study._ellipses import place_ellipses
from bayesrange.study._epochs import Epochs, make_epochs, refuse_absent
from bayesrange.study._fixes import RawFixes
from bayesrange.study._groups import groups_of_fixes, match_groups, read_groups
from bayesrange.study._periods import Span
from bayesrange.study._settings import StudySettings


def reference_systems(settings: StudySettings, raw: RawFixes) -> tuple[pyproj.CRS, pyproj.CRS, list[str]]:
    """The study's system, the fixes' system, and what has to be said."""
    x, y = raw.table["x"].to_numpy(dtype=float), raw.table["y"].to_numpy(dtype=float)
    degrees = look_like_degrees(x, y)
    given = settings.study.crs and metric_crs(settings.study.crs, "[study] crs")
    if raw.crs is None:
        if degrees:
            raise StudyError(
                '[fixes] crs: the coordinates look like longitude and latitude; say so by crs = "EPSG:4326" in [fixes].'
            )
        if not given:
            raise StudyError('[study] crs: this is missing; expected a metric system such as "EPSG:32631".')
        return given, given, []
    of_fixes = parse_crs(raw.crs, "[fixes] crs")
    if of_fixes.is_geographic and not degrees:
        row = raw.table[~((np.abs(x) <= 180) & (np.abs(y) <= 90))].iloc[0]
        raise StudyError(
            f"{row['file']}, line {row['row']}: x = {row['x']:.10g}, y = {row['y']:.10g} is no longitude and "
            f"latitude, but [fixes] crs is {raw.crs}; mend crs, or exchange x and y."
        )
    if given:
        return given, of_fixes, []
    if not of_fixes.is_geographic:
        raise StudyError('[study] crs: this is missing; expected a metric system such as "EPSG:32631".')
    chosen = utm_for(x, y, of_fixes)
    return chosen, of_fixes, [f"[study] crs was chosen from the fixes: {crs_text(chosen)} ({chosen.name})."]


def placed(table: pd.DataFrame, source: pyproj.CRS, target: pyproj.CRS) -> pd.DataFrame:
    """The fixes in the study's reference system."""
    x, y = carry(table["x"].to_numpy(dtype=float), table["y"].to_numpy(dtype=float), source, target)
    lost = ~(np.isfinite(x) & np.isfinite(y))
    if lost.any():
        row = table[lost].iloc[0]
        raise StudyError(
            f"{row['file']}, line {row['row']}: x = {row['x']:.10g}, y = {row['y']:.10g} lies where [study] crs "
            "does not reach; check [fixes] crs and the order of x and y."
        )
    return place_ellipses(table, x, y, source, target).assign(x=x, y=y)


def placed_groups(
    settings: StudySettings, folder: Path, fixes: pd.DataFrame, fixes_crs: pyproj.CRS, crs: pyproj.CRS, span: Span
) -> tuple[pd.DataFrame, Epochs | None, list[str]]:
    """Groups in the study's reference system, matched to the fixes; epochs, if groups come and go; and remarks."""
    if settings.groups is None:
        groups, said = groups_of_fixes(fixes)
        return groups, None, said + match_groups(fixes, groups, "[fixes] group")
    name = settings.groups.file
    groups, stays, said = read_groups(folder / name, name, settings.model.covariates, span, settings.fixes.zone)
    refuse_absent(fixes, stays, name)
    epochs = make_epochs(stays[stays["group"].isin(set(groups["group"]))], span)
    said += [] if epochs is None else [epochs.sentence(list(groups["group"]), name)]
    given = groups["x"].notna().to_numpy()
    x, y = groups["x"].to_numpy(dtype=float)[given], groups["y"].to_numpy(dtype=float)[given]
    source = crs if settings.study.crs else fixes_crs
    if look_like_degrees(x, y) and not source.is_geographic:
        if not fixes_crs.is_geographic:
            raise StudyError(f"{name}: the home centres look like degrees; give them in {crs_text(crs)} [m].")
        source = fixes_crs
        said.append(f"{name}: home centres look like degrees and were read in {crs_text(fixes_crs)}, as the fixes are.")
    elif source.is_geographic and len(x) and not look_like_degrees(x, y):
        raise StudyError(f"{name}: expected home centres in degrees as the fixes are, or say [study] crs.")
    groups.loc[given, "x"], groups.loc[given, "y"] = carry(x, y, source, crs)
    return groups, epochs, said + match_groups(fixes, groups, name)
