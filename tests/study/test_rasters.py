"""How rasters are read: bands, tilt, no data, and only the part that is needed."""

import numpy as np
import pytest
import rasterio
from affine import Affine

from bayesrange.study import StudyError
from bayesrange.study import _raster as raster_module


def worms(folder):
    return folder.read().layers["worms"].values


def test_the_named_band_is_read_with_its_own_scale(folder):
    values = np.random.default_rng(1).integers(0, 50, size=(3, 40, 40)).astype("int16")
    folder.raster("worms.tif", values, 100.0, count=3)
    with rasterio.open(folder.path("worms.tif"), "r+") as target:
        target.scales, target.offsets = (1.0, 0.1, 1.0), (0.0, 5.0, 0.0)
    folder.toml["layers"]["worms"]["band"] = 2
    np.testing.assert_allclose(worms(folder), 5 + 0.1 * values[1][::-1], rtol=1e-14)


def test_the_named_band_of_a_no_go_raster(folder):
    bands = np.zeros((2, 40, 40), dtype="uint8")
    bands[0], bands[1, 0, 0] = 1, 1
    folder.raster("water.tif", bands, 100.0, count=2)
    folder.toml["layers"]["water"] = {"file": "water.tif", "no_go": True, "band": 2}
    assert folder.read().grid.habitable_km2 == pytest.approx(15.99)


def test_not_a_number_as_the_no_data_mark(folder):
    values = np.tile(1.0 + np.arange(160)[None] // 4, (160, 1)).astype("float32")
    values[:, ::4] = np.nan
    for mark in ({"nodata": np.nan}, {}):  # declared in the file or not
        folder.raster("worms.tif", values, 25.0, **mark)
        np.testing.assert_allclose(worms(folder), np.tile(1.0 + np.arange(40), (40, 1)), atol=1e-6)


def test_a_tilted_raster_lands_where_its_transform_puts_it(folder):
    pixel = 20.0
    cos, sin = pixel * np.cos(np.radians(25)), pixel * np.sin(np.radians(25))
    transform = Affine(cos, -sin, folder.west + 500, -sin, -cos, folder.south + 6400)
    column, row = np.meshgrid(np.arange(400) + 0.5, np.arange(400) + 0.5)
    x = folder.west + 500 + cos * column - sin * row
    y = folder.south + 6400 - sin * column - cos * row
    plane = 0.002 * (x - folder.west) - 0.003 * (y - folder.south)
    folder.raster("worms.tif", plane, pixel, transform=transform)
    grid = folder.read().grid
    along, up = np.meshgrid(grid.x_m - folder.west, grid.y_m - folder.south)
    # a plane's mean is its value at the centre; pixels that straddle an edge move the mean by a part of a pixel
    np.testing.assert_allclose(worms(folder), 0.002 * along - 0.003 * up, atol=0.004 * pixel / 2)


def _vast(folder, pixel, **more):
    """400 000 × 400 000 pixels, of which a file holds only those that were written: some megabytes on disk."""
    profile = {"driver": "GTiff", "height": 400_000, "width": 400_000, "count": 1, "dtype": "uint8", "crs": folder.crs}
    profile |= {
        "transform": rasterio.transform.from_origin(
            folder.west - 200_000 * pixel, folder.south + 200_000 * pixel, pixel, pixel
        )
    }
    tiles = {"tiled": True, "blockxsize": 4096, "blockysize": 4096, "SPARSE_OK": True, "BIGTIFF": "YES"}
    return rasterio.open(folder.path("worms.tif"), "w", **profile | tiles | more)


def test_of_a_vast_raster_only_the_part_around_the_area_is_read(folder):
    values = np.random.default_rng(4).integers(1, 200, size=(800, 800)).astype("uint8")
    with _vast(folder, 5.0) as target:  # 160 GB if it were unpacked
        target.write(values, 1, window=rasterio.windows.Window(200_000, 199_200, 800, 800))
    np.testing.assert_allclose(worms(folder), values.reshape(40, 20, 40, 20).mean(axis=(1, 3))[::-1], rtol=1e-6)


def test_a_part_of_too_many_pixels_is_refused_before_it_is_read(folder):
    with _vast(folder, 0.1):
        pass
    with pytest.raises(StudyError, match=r"worms.tif: the part around the study area has \d+ × \d+ pixels, more than"):
        folder.read()


def test_a_raster_that_is_packed_in_huge_pieces_is_refused(folder, monkeypatch):
    folder.raster("worms.tif", np.random.default_rng(2).normal(size=(40, 40)), 100.0)
    monkeypatch.setattr(raster_module, "_MOST_BLOCK_BYTES", 5_000)  # GDAL packs strips of about 8 kB
    with pytest.raises(
        StudyError, match=r"worms.tif: the file is packed in pieces of 40 × \d+ pixels .*; save it in tiles"
    ):
        folder.read()
