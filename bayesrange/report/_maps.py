"""Maps for a GIS: one GeoTIFF a group, one GeoPackage of isopleth outlines."""

import os
import re
import unicodedata
from pathlib import Path

import geopandas
import numpy as np
import rasterio
from jaxtyping import Float
from numpy.typing import NDArray

from bayesrange.report._read import Contents

BANDS = ("utilisation distribution, posterior mean", "utilisation distribution, posterior sd")
UNIT = "1/km²"


def safe_names(names: list[str]) -> list[str]:
    """A file name stem for each name: letters, digits, - and _ only; unique, also where case does not count.

    >>> safe_names(["North/End", "north end"])
    ['North_End', 'north_end-2']
    """
    taken: set[str] = set()
    stems = []
    for name in names:
        plain = unicodedata.normalize("NFC", name)
        stem = re.sub(r"[^\w-]+", "_", plain).strip("_")[:50] or "unnamed"
        unique, count = stem, 1
        while unique.casefold() in taken:
            count += 1
            unique = f"{stem}-{count}"
        taken.add(unique.casefold())
        stems.append(unique)
    return stems


def density_files(run: Contents) -> dict[str, str]:
    """The GeoTIFF of each group, relative to the run folder; the prefix keeps clear of names a system reserves."""
    return {name: f"maps/ud_{stem}.tif" for name, stem in zip(run.groups, safe_names(run.groups), strict=True)}


def write_densities(run: Contents) -> None:
    """Write each group's UD: band 1 the posterior mean, band 2 the posterior sd [1/km²], NaN where not habitable."""
    for group, name in density_files(run).items():
        use = run.space_use.sel(group=group).transpose(..., "y", "x")
        layers = [np.where(run.inside, use[part].values, np.nan) for part in ("density_mean", "density_sd")]
        _write_raster(run, run.folder / name, group, np.stack(layers))


def _write_raster(run: Contents, file: Path, group: str, bands: Float[NDArray, "band ny nx"]) -> None:
    file.parent.mkdir(parents=True, exist_ok=True)
    part = file.with_name(file.name + ".part")
    count, height, width = bands.shape
    with rasterio.open(
        part,
        "w",
        driver="GTiff",
        width=width,
        height=height,
        count=count,
        dtype="float32",
        crs=run.crs.to_wkt(),
        transform=run.north_up,
        nodata=float("nan"),
        compress="deflate",
        predictor=3,
    ) as raster:
        raster.write(bands[:, ::-1].astype("float32"))  # row 0 is the south here, the north in the file
        raster.descriptions = BANDS
        raster.units = (UNIT,) * count
        raster.update_tags(group=group, study=str(run.facts["name"]), card=str(run.facts["card"]["name"]))
    os.replace(part, file)


def write_isopleths(run: Contents, outlines: geopandas.GeoDataFrame) -> None:
    """Write maps/isopleths.gpkg, layer `isopleths`."""
    file = run.folder / "maps" / "isopleths.gpkg"
    file.parent.mkdir(parents=True, exist_ok=True)
    part = file.with_name("isopleths.part.gpkg")
    part.unlink(missing_ok=True)
    outlines.to_file(part, layer="isopleths", driver="GPKG", geometry_type="MultiPolygon")
    os.replace(part, file)
