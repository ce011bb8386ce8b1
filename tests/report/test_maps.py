"""GeoTIFF and GeoPackage, reopened by the libraries a GIS is built on."""

import geopandas
import numpy as np
import pandas as pd
import pytest
import rasterio
import shapely
import xarray as xr

from bayesrange.report import isopleth_outlines, read_contents, write
from bayesrange.report._maps import density_files
from bayesrange.report._raster import safe_names


@pytest.fixture(scope="module")
def peaked(new_run):
    """A run whose first group has all its density in one known cell, off every axis of symmetry."""
    folder = new_run()
    with xr.open_datatree(folder / "posterior.nc", engine="h5netcdf") as tree:
        tree = tree.load()
    use = tree["space_use"].to_dataset()
    use["density_mean"][0] = use["density_mean"][0] * 0
    use["density_mean"][0, 17, 9] = 100.0
    use["density_sd"][0, 2, 11] = 9.0
    tree["space_use"] = xr.DataTree(use)
    tree.to_netcdf(folder / "posterior.nc", engine="h5netcdf")
    write(folder)
    return folder, float(use["x"][9]), float(use["y"][17]), float(use["x"][11]), float(use["y"][2])


def test_peak_is_found_at_its_coordinates(peaked):
    folder, x, y, sd_x, sd_y = peaked
    run = read_contents(folder)
    with rasterio.open(folder / density_files(run)[run.groups[0]]) as raster:
        # rasterio's own georeferencing reads the values back; a flipped or swapped axis puts the peak elsewhere.
        assert next(raster.sample([(x, y)]))[0] == 100.0
        assert next(raster.sample([(sd_x, sd_y)]))[1] == 9.0
        row, column = np.unravel_index(np.nanargmax(raster.read(1)), raster.shape)
        assert raster.xy(row, column) == pytest.approx((x, y), abs=1e-6)
        assert raster.transform.e < 0


def test_raster_says_what_it_holds(written):
    run = read_contents(written.folder)
    for group, name in density_files(run).items():
        with rasterio.open(written.folder / name) as raster:
            assert raster.crs.to_epsg() == 32631
            assert raster.count == 2
            assert all("posterior" in text for text in raster.descriptions)
            assert raster.units == ("1/km²", "1/km²")
            assert np.isnan(raster.nodata)
            assert raster.tags()["group"] == group
            hidden = np.isnan(raster.read(1))[::-1]
            np.testing.assert_array_equal(hidden, run.habitable == 0)
            # float32 in the file: 2⁻²⁴ relative a cell.
            mass = np.nansum(raster.read(1)[::-1] * run.habitable) * (run.cell_m / 1e3) ** 2
            assert mass == pytest.approx(1.0, abs=1e-5)


def test_names_are_safe_and_unique_where_case_does_not_count():
    names = ["../etc", "a/b", "a\\b", "A b", "a-2", "", "con", "x" * 300, "Å", "å", "<b>", "…", "\n"]
    made = safe_names(names)
    assert len({name.casefold() for name in made}) == len(names)
    assert all(name and not set(name) & set('/\\:*?"<>| .\n') and len(name) < 60 for name in made)


def test_a_name_that_looks_numbered_does_not_clash():
    assert len({name.casefold() for name in safe_names(["a", "A", "a-2", "A-2"])}) == 4


@pytest.fixture(scope="module")
def outlines(five):
    return geopandas.read_file(five.folder / "maps" / "isopleths.gpkg", layer="isopleths")


def test_geopackage_has_the_columns_and_crs(outlines):
    assert list(outlines.columns) == ["group", "isopleth", "probability", "level", "area_km2", "geometry"]
    assert outlines.crs.to_epsg() == 32631
    assert len(outlines) == 5 * 2 * 3
    words = dict(zip(outlines["probability"], outlines["level"], strict=True))
    assert words == {0.95: "nearly sure", 0.5: "as likely as not", 0.05: "possible"}
    assert set(outlines["isopleth"]) == {50, 95}


def test_surer_outlines_lie_within_less_sure_ones(outlines):
    cell = 100.0**2
    for _, rows in outlines.groupby(["group", "isopleth"]):
        shapes = rows.sort_values("probability")["geometry"].tolist()
        assert len(shapes) == 3
        for outer, inner in zip(shapes[:-1], shapes[1:], strict=True):
            assert inner.difference(outer).area < 1e-9 * cell  # rounding of coordinates near 5.7e6 m
            assert inner.area < outer.area


def test_likely_area_agrees_with_the_ranges_table(outlines, five):
    ranges = pd.read_csv(five.folder / "tables" / "ranges.csv").set_index(["group", "isopleth"])
    for row in outlines[outlines["probability"] == 0.5].itertuples():
        expected = ranges.loc[(row.group, row.isopleth), "area_km2_median"]
        # A contour between cell centres cuts corners: one to two cells of 0.01 km².
        assert row.area_km2 == pytest.approx(expected, abs=0.02)


def test_outline_is_where_most_draws_put_the_closed_form(outlines, five):
    # Radius of the 95 % isopleth of β²/(2π) e^(−βr): 4.743865/β (χ² with 4 degrees of freedom, scipy).
    parameters = pd.read_csv(five.folder / "tables" / "parameters.csv").set_index("parameter")
    radius = 1e3 * 4.743865 / parameters.loc["localising", "median"]
    row = outlines[
        (outlines["group"] == "Quarry & Sons") & (outlines["isopleth"] == 95) & (outlines["probability"] == 0.5)
    ].iloc[0]
    run = read_contents(five.folder)
    home = [float(run.constant[key].sel(group="Quarry & Sons")) for key in ("home_x", "home_y")]
    distance = np.hypot(*(shapely.get_coordinates(row.geometry) - home).T)
    assert np.all(np.abs(distance - radius) < 100.0)  # within one cell, everywhere
    assert row.geometry.contains(shapely.Point(home))


def test_outlines_keep_off_ground_that_is_not_habitable(outlines, five):
    run = read_contents(five.folder)
    row, column = np.nonzero(~run.inside)
    half = run.cell_m / 2
    x, y = run.x_m[column], run.y_m[row]
    hidden = shapely.union_all(shapely.box(x - half, y - half, x + half, y + half))
    assert outlines.geometry.intersection(hidden).area.max() < 1e-6
    # The lake is met: without the cut this would pass for want of a neighbour.
    assert outlines.geometry.intersects(hidden).any()


def test_area_at_the_edge_counts_the_habitable_share_only(new_run):
    run = read_contents(new_run())
    run.space_use["inside_probability"][:] = 1.0
    made = isopleth_outlines(run)
    habitable_km2 = run.habitable.sum() * 0.01
    assert 0 < np.sum((run.habitable > 0) & (run.habitable < 1)) or run.habitable.sum() == run.inside.sum()
    np.testing.assert_allclose(made["area_km2"], habitable_km2, rtol=1e-9)
    np.testing.assert_allclose(made.geometry.area, run.inside.sum() * 1e4, rtol=1e-9)


def test_place_nowhere_sure_keeps_an_empty_row(new_run):
    folder = new_run()
    run = read_contents(folder)
    run.space_use["inside_probability"][:] = np.where(run.inside, 0.2, np.nan)
    made = isopleth_outlines(run)
    sure = made[made["probability"] == 0.95]
    assert len(sure) == 4 and sure.geometry.is_empty.all() and (sure["area_km2"] == 0).all()
    assert not made[made["probability"] == 0.05].geometry.is_empty.any()


def test_cells_inside_in_exactly_half_of_the_draws_are_as_likely_as_not(new_run):
    run = read_contents(new_run())
    run.space_use["inside_probability"][:] = 0.5
    made = isopleth_outlines(run)
    half = made[made["probability"] == 0.5]
    np.testing.assert_allclose(half.geometry.area, run.inside.sum() * 1e4, rtol=1e-9)
