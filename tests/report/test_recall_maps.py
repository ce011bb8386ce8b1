"""GeoTIFFs of recall, read back by rasterio, and the cells of a thinned surface."""

import numpy as np
import pytest
import rasterio
import xarray as xr

from bayesrange.report import read_memory, write
from bayesrange.report._recall import recall_files, surface


@pytest.mark.parametrize("which", ["eight", "alone"])
def test_raster_holds_mean_and_sd_where_there_is_ground(request, which):
    run = read_memory(request.getfixturevalue(which).folder)
    cells = surface(run)
    assert list(recall_files(run)) == run.animals
    for animal, name in recall_files(run).items():
        with rasterio.open(run.folder / name) as raster:
            assert raster.crs.to_epsg() == 32630
            assert raster.descriptions == (
                "recall of the long memory, posterior mean",
                "recall of the long memory, posterior sd",
            )
            assert raster.units == ("1", "1") and np.isnan(raster.nodata)
            assert raster.tags()["animal"] == animal
            for band, part in ((1, "recall_mean"), (2, "recall_sd")):
                values = raster.read(band)[::-1]
                expected = run.memory_use[part].sel(animal=animal).transpose("y", "x").values
                np.testing.assert_array_equal(np.isnan(values), ~cells.inside)
                # float32 in the file: 2⁻²⁴ relative.
                np.testing.assert_allclose(values[cells.inside], expected[cells.inside], rtol=1e-7, atol=1e-12)
            mean = raster.read(1)
            assert 0 <= np.nanmin(mean) and np.nanmax(mean) <= 1


@pytest.mark.parametrize("thin", [1, 3])
def test_a_peak_is_found_at_its_coordinates(new_memory_run, thin):
    folder = new_memory_run(thin=thin, animals=1)
    with xr.open_datatree(folder / "posterior.nc", engine="h5netcdf") as tree:
        tree = tree.load()
    use = tree["memory_use"].to_dataset()
    use["recall_mean"][:] = 0.1
    use["recall_mean"][0, 4, 11] = 0.9
    tree["memory_use"] = xr.DataTree(use)
    tree.to_netcdf(folder / "posterior.nc", engine="h5netcdf")
    write(folder)
    (name,) = recall_files(read_memory(folder)).values()
    with rasterio.open(folder / name) as raster:
        x, y = float(use["x"][11]), float(use["y"][4])
        # rasterio's own georeferencing reads the value back; a flipped or swapped axis puts it elsewhere.
        assert next(raster.sample([(x, y)]))[0] == pytest.approx(0.9, rel=1e-6)
        row, column = np.unravel_index(np.nanargmax(raster.read(1)), raster.shape)
        assert raster.xy(row, column) == pytest.approx((x, y), abs=1e-6)
        assert raster.res == (100.0 * thin, 100.0 * thin) and raster.transform.e < 0


def test_a_thinned_cell_is_ground_if_any_of_its_cells_is(new_memory_run):
    run = read_memory(new_memory_run(thin=3, animals=1))
    cells = surface(run)
    for row, column in np.ndindex(cells.inside.shape):
        near_y = np.abs(run.y_m - cells.y_m[row]) < cells.cell_m / 2
        near_x = np.abs(run.x_m - cells.x_m[column]) < cells.cell_m / 2
        assert cells.inside[row, column] == run.inside[np.ix_(near_y, near_x)].any()
    assert not cells.inside.all()


def test_a_card_without_memory_has_no_maps(no_memory):
    assert recall_files(read_memory(no_memory.folder)) == {}
    assert not (no_memory.folder / "maps").exists()
