"""Tables of areas and overlaps against numpy and closed forms."""

import numpy as np
import pandas as pd
import pytest
import xarray as xr

from bayesrange.report import overlaps_table, ranges_table, read_contents


def space_use(folder) -> xr.Dataset:
    with xr.open_datatree(folder / "posterior.nc", engine="h5netcdf") as tree:
        return tree["space_use"].to_dataset().load()


def test_ranges_are_quantiles_of_the_draws(written):
    table = pd.read_csv(written.folder / "tables" / "ranges.csv", keep_default_na=False)
    areas = space_use(written.folder)["area_km2"]
    assert list(table.columns) == [
        "group", "isopleth", "area_km2_median", "area_km2_lower", "area_km2_upper", "prob",
        "mean", "sd", "ess_bulk", "rhat",
    ]  # fmt: skip
    assert len(table) == 2 * written.recipe.groups
    for row in table.itertuples():
        draws = areas.sel(group=row.group, isopleth=row.isopleth).values.ravel()
        # numpy's quantiles; the CSV holds every digit, so only rounding of its text is allowed for.
        expected = np.quantile(draws, [0.5, 0.05, 0.95])
        np.testing.assert_allclose([row.area_km2_median, row.area_km2_lower, row.area_km2_upper], expected, rtol=1e-14)
        np.testing.assert_allclose([row.mean, row.sd], [draws.mean(), draws.std(ddof=1)], rtol=1e-12)
        assert row.prob == 0.9


def test_median_area_is_near_the_closed_form(five):
    # Holgate–Okubo, β² × area of the 95 % isopleth = π (χ²₄(0.95)/2)² = 70.69919: scipy.stats.chi2, wide area.
    table = ranges_table(read_contents(five.folder))
    parameters = pd.read_csv(five.folder / "tables" / "parameters.csv").set_index("parameter")
    wide = table[(table["isopleth"] == 95) & (table["group"] == "Quarry & Sons")].iloc[0]
    expected = 70.69919 / parameters.loc["localising", "median"] ** 2
    # 0.7 km of decay in a 5 km area loses 2 % of the tail, cells of 0.1 km blur the peak: 5 % in all.
    assert wide["area_km2_median"] == pytest.approx(expected, rel=0.05)


def test_convergence_of_areas_is_what_arviz_gives(five):
    import arviz_stats

    table = ranges_table(read_contents(five.folder)).set_index(["group", "isopleth"])
    areas = space_use(five.folder)["area_km2"].sel(group="Fen, lower", isopleth=95)
    row = table.loc[("Fen, lower", 95)]
    assert row["ess_bulk"] == pytest.approx(float(arviz_stats.ess(areas)), rel=1e-12)
    assert row["rhat"] == pytest.approx(float(arviz_stats.rhat(areas)), rel=1e-12)


def test_area_that_does_not_vary_has_no_rhat(new_run):
    run = read_contents(new_run())
    run.space_use["area_km2"][:] = 1.25
    table = ranges_table(run)
    assert table[["ess_bulk", "rhat"]].isna().all(axis=None)
    assert (table["area_km2_lower"] == 1.25).all()


def test_each_pair_of_groups_stands_once_with_its_quantiles(written):
    table = pd.read_csv(written.folder / "tables" / "overlaps.csv", keep_default_na=False)
    count = written.recipe.groups
    assert list(table.columns) == ["group", "neighbour", "median", "lower", "upper", "prob"]
    assert (
        len({frozenset(pair) for pair in zip(table["group"], table["neighbour"], strict=True)})
        == count * (count - 1) // 2
    )
    overlap = space_use(written.folder)["overlap"]
    for row in table.itertuples():
        draws = overlap.sel(group=row.group, neighbour=row.neighbour).values
        np.testing.assert_allclose(
            [row.lower, row.median, row.upper], np.quantile(draws, [0.05, 0.5, 0.95]), rtol=1e-14
        )


def test_intervals_take_the_share_of_the_parameters_table(new_run):
    folder = new_run()
    file = folder / "tables" / "parameters.csv"
    pd.read_csv(file).assign(prob=0.5).to_csv(file, index=False)
    run = read_contents(folder)
    draws = run.space_use["overlap"].values[..., 0, 1]
    row = overlaps_table(run).iloc[0]
    assert row["prob"] == 0.5
    np.testing.assert_allclose([row["lower"], row["upper"]], np.quantile(draws, [0.25, 0.75]), rtol=1e-14)
