"""GeoTIFFs for a GIS, north up, NaN where not habitable, and the names of their files."""

import os
import re
import unicodedata
from collections.abc import Sequence
from pathlib import Path

import rasterio
from affine import Affine
from jaxtyping import Float
from numpy.typing import NDArray

from bayesrange.report._contents import RunContents


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


def write_raster(
    run: RunContents,
    file: Path,
    bands: Float[NDArray, "band ny nx"],
    names: Sequence[str],
    unit: str,
    tags: dict[str, str],
    north_up: Affine | None = None,
) -> None:
    """Write bands (row 0 in the south) as a north-up GeoTIFF, whole or not at all.

    Args:
        run: gives grid, CRS, and the names of study and card for the tags.
        file: where to.
        bands: values; NaN is no data.
        names: what each band holds.
        unit: of all bands.
        tags: written into the file beside study and card.
        north_up: transform of the raster, where it is not the run's grid [m].
    """
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
        transform=run.north_up if north_up is None else north_up,
        nodata=float("nan"),
        compress="deflate",
        predictor=3,
    ) as raster:
        raster.write(bands[:, ::-1].astype("float32"))  # row 0 is the south here, the north in the file
        raster.descriptions = tuple(names)
        raster.units = (unit,) * count
        raster.update_tags(**tags, study=str(run.facts["name"]), card=str(run.facts["card"]["name"]))
    os.replace(part, file)
