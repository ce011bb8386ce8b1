import numpy as np
import pyproj
import pytest

RNG = np.random.default_rng(5)


def worms(folder):
    return folder.read().layers["worms"].values


def test_a_raster_on_the_studys_own_cells_passes_unchanged(folder):
    values = RNG.normal(size=(44, 46))
    folder.raster("worms.tif", values, 100.0, west=folder.west - 300, north=folder.south + 4200)
    np.testing.assert_array_equal(worms(folder), values[2:42, 3:43][::-1])


@pytest.mark.parametrize("cell", [100.0, 62.7, 1000 / 12])
def test_cells_of_any_size_pass_unchanged(folder, cell):
    first, last = np.floor(folder.west / cell) * cell, np.ceil((folder.south + 4000) / cell) * cell
    values = RNG.normal(size=(70, 70))
    folder.raster("worms.tif", values, cell, west=first, north=last)
    folder.toml["study"]["cell_m"] = cell
    read = worms(folder)
    assert set(read[~np.isnan(read)]) <= set(values.ravel())  # to the last bit


def test_finer_pixels_are_averaged_over_the_cell(folder):
    values = RNG.normal(size=(160, 160))
    folder.raster("worms.tif", values, 25.0)
    blocks = values.reshape(40, 4, 40, 4).mean(axis=(1, 3))
    np.testing.assert_allclose(worms(folder), blocks[::-1], atol=1e-12)  # sums of 16 numbers near 1


def test_pixels_across_a_cells_edge_count_by_their_share(folder):
    values = RNG.normal(size=(140, 140))
    folder.raster("worms.tif", values, 30.0, west=folder.west - 60, north=folder.south + 4080)
    # exact overlap of each 30 m pixel with each 100 m cell along an axis, from the west and from the north
    share_x = _overlap(-60 + 30 * np.arange(140), 30, 100 * np.arange(40), 100)
    share_y = _overlap(-80 + 30 * np.arange(140), 30, 100 * np.arange(40), 100)
    expected = share_y @ values @ share_x.T
    np.testing.assert_allclose(worms(folder), expected[::-1], atol=1e-6)  # GDAL keeps weights in single precision


def _overlap(start, width, cell, size):
    length = np.minimum(start[None] + width, cell[:, None] + size) - np.maximum(start[None], cell[:, None])
    return np.clip(length, 0, None) / size


def test_coarser_pixels_are_read_bilinearly(folder):
    north, east = np.mgrid[0:24, 0:24]
    plane = 5.0 + 0.5 * east - 0.25 * north
    folder.raster("worms.tif", plane, 250.0, west=folder.west - 1000, north=folder.south + 5000)
    x, y = np.arange(50, 4000, 100) + 1000, 5000 - np.arange(50, 4000, 100)  # from the raster's corner
    expected = 5 + 0.5 * (x[None] / 250 - 0.5) - 0.25 * (y[:, None] / 250 - 0.5)
    np.testing.assert_allclose(worms(folder), expected, atol=1e-5)  # a plane; GDAL's weights are single precision


def test_a_raster_in_degrees_lands_where_pyproj_puts_it(folder):
    to_degrees = pyproj.Transformer.from_crs(folder.crs, "EPSG:4326", always_xy=True)
    west, north = to_degrees.transform(folder.west - 500, folder.south + 4500)
    step = 2e-4
    latitude = np.repeat(north - step * (np.arange(300)[:, None] + 0.5), 400, axis=1)
    folder.raster("worms.tif", latitude, step, west=west, north=north, crs="EPSG:4326")
    grid = folder.read().grid
    centre_x, centre_y = np.meshgrid(grid.x_m, grid.y_m)
    expected = to_degrees.transform(centre_x, centre_y)[1]
    # a mean over pixels of 2e-4° that straddle the cell's edge: within a small part of a pixel
    assert np.abs(worms(folder) - expected).max() < step / 10


def test_no_data_pixels_do_not_count_in_the_mean(folder):
    values = np.ones((160, 160)) + np.arange(160)[None] // 4
    values[:, ::4] = -9999
    folder.raster("worms.tif", values, 25.0, nodata=-9999)
    np.testing.assert_allclose(worms(folder), np.tile(1.0 + np.arange(40), (40, 1)), atol=1e-6)


def test_scale_and_offset_of_the_file_are_applied(folder):
    import rasterio

    folder.raster("worms.tif", np.tile(np.arange(40, dtype="int16"), (40, 1)), 100.0)
    with rasterio.open(folder.path("worms.tif"), "r+") as target:
        target.scales, target.offsets = (0.5,), (10.0,)
    np.testing.assert_array_equal(worms(folder)[0], 10 + 0.5 * np.arange(40))


def test_no_go_ground_is_cut_out_by_sub_cells_and_layers_are_blank_there(folder):
    lake = np.zeros((80, 80), dtype="uint8")
    lake[0:7, 60:75] = 3  # 50 m pixels in the north: 350 m × 750 m, from x = 3000 m
    folder.raster("lake.tif", lake, 50.0)
    folder.toml["layers"]["lake"] = {"file": "lake.tif", "no_go": True}
    study = folder.read()
    assert "lake" not in study.layers
    assert study.grid.habitable_km2 == pytest.approx(16 - 0.35 * 0.75)
    assert (study.grid.habitable[-1, 30:37] == 0).all() and study.grid.habitable[-4, 30] == 0.5
    assert np.isnan(study.layers["worms"].values).sum() == (study.grid.habitable == 0).sum() == 21


def test_ground_off_a_no_go_raster_is_habitable(folder):
    folder.raster("lake.tif", np.zeros((8, 8), dtype="uint8"), 100.0)
    folder.toml["layers"]["lake"] = {"file": "lake.tif", "no_go": True}
    assert folder.read().grid.habitable_km2 == 16.0


def test_a_gap_in_a_layer_the_model_does_not_use_is_said(folder):
    folder.raster("trees.tif", np.ones((30, 40)), 100.0)
    folder.toml["layers"]["trees"] = {"file": "trees.tif"}
    assert any("[layers.trees] trees.tif: 400 of 1600 cells" in w for w in folder.read().warnings)
