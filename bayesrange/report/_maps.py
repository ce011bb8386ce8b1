"""Maps for a GIS: one GeoTIFF a group, one GeoPackage of isopleth outlines."""

import os

import geopandas
import numpy as np

from bayesrange.report._raster import safe_names, write_raster
from bayesrange.report._read import Contents

BANDS = ("utilisation distribution, posterior mean", "utilisation distribution, posterior sd")
UNIT = "1/km²"


def density_files(run: Contents) -> dict[str, str]:
    """The GeoTIFF of each group, relative to the run folder; the prefix keeps clear of names a system reserves."""
    return {name: f"maps/ud_{stem}.tif" for name, stem in zip(run.groups, safe_names(run.groups), strict=True)}


def write_densities(run: Contents) -> None:
    """Write each group's UD: band 1 the posterior mean, band 2 the posterior sd [1/km²], NaN where not habitable."""
    for group, name in density_files(run).items():
        use = run.space_use.sel(group=group).transpose(..., "y", "x")
        bands = [np.where(run.inside, use[part].values, np.nan) for part in ("density_mean", "density_sd")]
        write_raster(run, run.folder / name, np.stack(bands), BANDS, UNIT, {"group": group})


def write_isopleths(run: Contents, outlines: geopandas.GeoDataFrame) -> None:
    """Write maps/isopleths.gpkg, layer `isopleths`."""
    file = run.folder / "maps" / "isopleths.gpkg"
    file.parent.mkdir(parents=True, exist_ok=True)
    part = file.with_name("isopleths.part.gpkg")
    part.unlink(missing_ok=True)
    outlines.to_file(part, layer="isopleths", driver="GPKG", geometry_type="MultiPolygon")
    os.replace(part, file)
