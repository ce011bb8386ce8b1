"""Fixes from bearings: a place, an error ellipse and flags for each set.

The standard deviation of a bearing is pooled over sets of three and more (`_bearing_sd.py`) or given; the ellipse is
Lenth's (1981) covariance with that concentration. A pair has nothing to spare, so pairs are used only where it is
given. What gives no place is set aside and counted; what is doubtful is counted and flagged, and used.
"""

from dataclasses import dataclass, replace
from pathlib import Path
from typing import NamedTuple

import numpy as np
import pandas as pd
import pyproj
from jaxtyping import Bool, Float
from numpy.typing import NDArray

from bayesrange._errors import StudyError
from bayesrange.study._bearing_flags import FLAGS, flags_of, sentences, why_set_aside
from bayesrange.study._bearing_sd import FEWEST_SPARE, Sets, pooled_sd
from bayesrange.study._bearings import read_bearings
from bayesrange.study._crs import carry, look_like_degrees, metric_crs, parse_crs, utm_for
from bayesrange.study._ellipses import COLUMNS, axes_of, circular_sd
from bayesrange.study._north import turned
from bayesrange.study._settings import BearingsSection
from bayesrange.study._tables import counted, first_few, shown
from bayesrange.study._triangulation import (
    crossing,
    information,
    lenth_information,
    locate,
)

_EARTH_M = 1e8  # no coordinate of a map is larger
FEWEST_TO_POOL = 5.0
"""Spare bearings of all observers together below which their standard deviation has to be given."""


class BearingRows(NamedTuple):
    """The bearings of the fixes that no observer has behind him.

    The columns are file and row (of the fix), x and y of the station [m], azimuth_deg from grid north and sd_deg.
    """

    table: pd.DataFrame
    crs: pyproj.CRS

    def in_system(self, crs: pyproj.CRS) -> pd.DataFrame:
        """The table in another reference system."""
        place = self.table["x"].to_numpy(dtype=float), self.table["y"].to_numpy(dtype=float)
        x, y = carry(*place, self.crs, crs)
        azimuth = turned(self.table["azimuth_deg"].to_numpy(dtype=float), place, self.crs, (x, y), crs)
        return self.table.assign(x=x, y=y, azimuth_deg=azimuth)


@dataclass(frozen=True)
class BearingFixes:
    """Fixes like those of tables, in metres of the study's reference system, and what they were made of."""

    table: pd.DataFrame
    rows: BearingRows
    target: pyproj.CRS
    crs: str | None  # the system chosen where the study names none
    counts: dict[str, int]
    warnings: list[str]
    files: dict[str, Path]

    def in_system(self, crs: str | None) -> pd.DataFrame:
        """The table with places and ellipses in the reference system of other fixes; None is the study's."""
        if crs is None:
            return self.table
        system = parse_crs(crs, "[fixes] crs")
        place = self.table["x"].to_numpy(dtype=float), self.table["y"].to_numpy(dtype=float)
        x, y = carry(*place, self.target, system)
        azimuth = turned(self.table["error_bearing_deg"].to_numpy(dtype=float), place, self.target, (x, y), system)
        return self.table.assign(x=x, y=y, error_bearing_deg=azimuth)


def bearing_fixes(
    folder: Path, section: BearingsSection, files: dict[str, Path], zone: str | None, study_crs: str | None
) -> BearingFixes:
    """Places of all sets of bearings that give one.

    Args:
        folder: where the study file is.
        section: `[bearings]`.
        files: of bearings, by the name the user knows them by.
        zone: of the fixes' times; that of the bearings is taken first.
        study_crs: the study's reference system, if it is given.

    Raises:
        StudyError: something in the tables is wrong, or no set gives a place.
    """
    read = read_bearings(folder, section, files, section.zone or zone)
    name = first_few(files)
    table, target = _on_the_map(read.table, section, study_crs, name)
    names = sorted(set(table["observer"]))
    sets, first = _padded(table, names)
    size = sets.taken.sum(axis=1)
    stands = table[["set", "x", "y"]].drop_duplicates().groupby("set", sort=True).size().to_numpy()
    alone, pair = stands < 2, (size == 2) & (stands == 2)
    counts = {"bearings": len(table) + read.failed, "bearings_failed": read.failed, "bearing_sets": len(size)}
    counts["single_bearings"] = int(alone.sum())
    sd, said = _sd(sets.of(np.flatnonzero(~alone & ~pair)), section, names, name)
    if section.sd_deg is None:
        counts["pairs_set_aside"] = int(pair.sum())
    wanted = np.flatnonzero(~alone & ~(pair & (section.sd_deg is None)))
    chosen = sets.of(wanted)
    place, found = _places(chosen, pair[wanted], sd)
    lost = wanted[~found]
    counts["no_place"] = lost.size
    if not found.any():
        raise StudyError(
            f"{name}: none of {counted(len(size), 'set', 'sets')} of bearings gives a place: {why_set_aside(counts)}."
        )
    used = chosen.of(np.flatnonzero(found))
    flags = flags_of(place[found], used, sd)
    counts |= {key: int(flag.sum()) for key, flag in flags.items()}
    fixes = _fixes(first.iloc[wanted[found]], place[found], used, sd, flags)
    said = read.warnings + said + sentences(counts, first.iloc[lost], fixes, name)
    if section.stations is not None:
        files = files | {section.stations: folder / section.stations}
    rows = BearingRows(_rows(fixes, used, sd, ~flags["behind_observer"]), target)
    made = BearingFixes(fixes, rows, target, None, counts, said, files)
    if study_crs is not None:
        return made
    return replace(made, table=made.in_system(section.crs), crs=section.crs)


def _on_the_map(
    table: pd.DataFrame, section: BearingsSection, study_crs: str | None, name: str
) -> tuple[pd.DataFrame, pyproj.CRS]:
    """Stations in metres of the study's system, with the azimuth [rad] from its grid north; and that system."""
    x, y = table["x"].to_numpy(dtype=float), table["y"].to_numpy(dtype=float)
    degrees = look_like_degrees(x, y)
    where = section.stations or name
    if section.crs is None and degrees:
        raise StudyError(
            f'{where}: the stations look like longitude and latitude; say so by crs = "EPSG:4326" in [bearings].'
        )
    given = metric_crs(study_crs, "[study] crs") if study_crs is not None else None
    source = parse_crs(section.crs, "[bearings] crs") if section.crs is not None else given
    if source is None or (given is None and not source.is_geographic):
        raise StudyError('[study] crs: this is missing; expected a metric system such as "EPSG:32631".')
    if source.is_geographic and not degrees:
        raise StudyError(
            f"{where}: the stations are no longitudes and latitudes, but [bearings] crs is {section.crs}; mend crs, or "
            "exchange x and y."
        )
    target = given or utm_for(x, y, source)
    along, up = carry(x, y, source, target)
    north = target if source.is_geographic else source
    if section.north != "grid":
        north = north.geodetic_crs or north
    azimuth = table["bearing"].to_numpy(dtype=float) + table["declination"].to_numpy(dtype=float)
    azimuth = turned(azimuth, carry(along, up, target, north), north, (along, up), target)
    strange = ~((np.abs(along) < _EARTH_M) & (np.abs(up) < _EARTH_M) & np.isfinite(azimuth))
    if strange.any():
        raise StudyError(
            f'{where}: the station "{shown(table["station"][strange].iloc[0])}" lies where [study] crs does not reach; '
            "check [bearings] crs and the order of x and y."
        )
    return table.assign(x=along, y=up, azimuth=np.radians(azimuth)), target


def _padded(table: pd.DataFrame, observers: list[str]) -> tuple[Sets, pd.DataFrame]:
    """Sets as padded arrays, and the first row of each with the set's mean time."""
    row = table["set"].to_numpy()
    slot = table.groupby("set", sort=False).cumcount().to_numpy()
    shape = (int(row.max()) + 1, int(slot.max()) + 1)
    first = table.groupby("set", sort=True).first()
    first["time"] = table.groupby("set", sort=True)["time"].mean()
    place = table[["x", "y"]].to_numpy(dtype=float)
    station = np.repeat(first[["x", "y"]].to_numpy(dtype=float)[:, None], shape[1], axis=1)
    azimuth, taken, observer = np.zeros(shape), np.zeros(shape, dtype=bool), np.zeros(shape, dtype=int)
    station[row, slot] = place
    azimuth[row, slot] = table["azimuth"]
    taken[row, slot] = True
    observer[row, slot] = table["observer"].map({name: k for k, name in enumerate(observers)})
    return Sets(station, azimuth, taken, observer), first


def _sd(
    sets: Sets, section: BearingsSection, observers: list[str], name: str
) -> tuple[Float[NDArray, " observers"], list[str]]:
    """Standard deviation of each observer's bearings [rad], and what has to be said.

    Raises:
        StudyError: it is neither given nor to be had from the sets.
    """
    if isinstance(section.sd_deg, dict):
        missing = [o for o in observers if o not in section.sd_deg]
        if missing:
            who = f'the observer "{shown(missing[0])}"' if missing[0] else "bearings without an observer"
            raise StudyError(f"[bearings] sd_deg: there is none for {who}; add it, or give one number for all.")
        return np.radians([section.sd_deg[o] for o in observers]), []
    if section.sd_deg is not None:
        return np.full(len(observers), np.radians(section.sd_deg)), []
    pooled = pooled_sd(sets, len(observers)) if len(sets.azimuth) else None
    spare = float(pooled.spare.sum()) if pooled else 0.0
    if pooled is None or spare < FEWEST_TO_POOL:
        raise StudyError(
            f"{name}: the bearings' standard deviation cannot be had from "
            f"{counted(len(sets.azimuth), 'set', 'sets')} of three and more bearings; say what beacon trials "
            "gave, as in [bearings] sd_deg = 5."
        )
    sds = [f"{s:.1f}°" for s in np.degrees(pooled.sd)]
    of = [f"{shown(o) or 'no observer'} {s}" for o, s in zip(observers, sds, strict=True)] if len(sds) > 1 else sds
    few = [shown(o) or "no observer" for o, n in zip(observers, pooled.spare, strict=True) if n < FEWEST_SPARE]
    text = (
        f"{name}: the standard deviation of a bearing was pooled over {counted(pooled.sets, 'set', 'sets')} of three "
        f"and more with {spare:.0f} bearings to spare: {', '.join(of)}"
    )
    if few and len(observers) > 1:
        text += f" ({first_few(few)}: too few to spare, that of all was taken)"
    if pooled.left_out:
        text += f"; left out of it: {counted(pooled.left_out, 'doubtful set', 'doubtful sets')}"
    return pooled.sd, [text + "."]


def _places(
    sets: Sets, pair: Bool[NDArray, " sets"], sd: Float[NDArray, " observers"]
) -> tuple[Float[NDArray, "sets 2"], Bool[NDArray, " sets"]]:
    """Places [m] and whether there is one."""
    place, found = np.full((len(pair), 2), np.nan), np.zeros(len(pair), dtype=bool)
    two, more = np.flatnonzero(pair), np.flatnonzero(~pair)
    if two.size:
        place[two], found[two] = crossing(sets.station[two, :2], sets.azimuth[two, :2])
    if more.size:
        part = sets.of(more)
        place[more], found[more] = locate(part.station, part.azimuth, part.weights(sd))
    return place, found


def _covariance(place: Float[NDArray, "sets 2"], sets: Sets, sd: Float[NDArray, " observers"]) -> NDArray:
    """Lenth's covariance; where residuals are so large that his is none, the expected one [m²]."""
    weight = sets.weights(sd)
    own = lenth_information(place, sets.station, sets.azimuth, weight)
    expected = information(place, sets.station, weight)
    sound = np.linalg.eigvalsh(own)[:, 0] > 0.5 * np.linalg.eigvalsh(expected)[:, 0]
    return np.linalg.inv(np.where(sound[:, None, None], own, expected))


def _fixes(
    first: pd.DataFrame,
    place: Float[NDArray, "sets 2"],
    sets: Sets,
    sd: Float[NDArray, " observers"],
    flags: dict[str, Bool[NDArray, " sets"]],
) -> pd.DataFrame:
    axes = axes_of(_covariance(place, sets, sd))
    words = np.stack([np.where(flags[key], word, "") for key, word in FLAGS.items()], axis=1)
    fixes = first[["animal", "time", "group", "file", "row", "minutes"]].reset_index(drop=True)
    return fixes.assign(
        x=place[:, 0],
        y=place[:, 1],
        error_m=circular_sd(axes[:, 0], axes[:, 1]),
        kept_by_column=True,
        **dict(zip(COLUMNS, axes.T, strict=True)),
        flag=pd.Series(["; ".join(filter(None, row)) for row in words], dtype="str"),
    )


def _rows(
    fixes: pd.DataFrame, sets: Sets, sd: Float[NDArray, " observers"], wanted: Bool[NDArray, " n"]
) -> pd.DataFrame:
    """One row a bearing of the wanted fixes."""
    fix, slot = np.nonzero(sets.taken & wanted[:, None])
    return pd.DataFrame(
        {
            "file": fixes["file"].to_numpy()[fix],
            "row": fixes["row"].to_numpy()[fix],
            "x": sets.station[fix, slot, 0],
            "y": sets.station[fix, slot, 1],
            "azimuth_deg": np.degrees(sets.azimuth[fix, slot]) % 360,
            "sd_deg": np.degrees(sd[sets.observer[fix, slot]]),
        }
    ).astype({"file": "str"})
