"""Names, shapes, units and figures of the parameters: in posterior.nc and in parameters.csv."""

import arviz_stats
import numpy as np
import pytest
import xarray as xr

from bayesrange.inference import RangeSpec, Scales
from bayesrange.inference._assemble import parameter_dataset
from bayesrange.inference._scales import LayerScale
from bayesrange.inference._summary import Row, parameter_table, rows

GROUPS = ("north", "säter, <b>low</b>", "east wood")
SCALES = Scales(0.6, 1.4, 200.0, 50.0, {"worms": LayerScale(40.0, 8.0, "kg/ha"), "height": LayerScale(5.0, 2.0, "m")})
SHARED = RangeSpec(
    parameters=("localising", "avoidance", "resource"), families=(), varying=(), solver="gibbs", coupled=True,
    over_marking=True, layers=("worms", "height"), groups=GROUPS, covariates=(), estimated=(0, 2),
)  # fmt: skip
HIERARCHICAL = RangeSpec(
    parameters=("localising", "retreat", "resource"), families=(), varying=("localising", "resource"), solver="flux",
    coupled=True, over_marking=False, layers=("worms", "height"), groups=GROUPS, covariates=("size", "site=wet"),
    estimated=(),
)  # fmt: skip


def shared_sites(chains=2, draws=90, seed=0):
    rng = np.random.default_rng(seed)
    lead = (chains, draws)
    return {
        "localising": rng.gamma(3, size=lead), "avoidance": rng.gamma(1, size=lead),
        "resource": rng.normal(size=(*lead, 2)), "over_marking": rng.gamma(1, size=lead),
        "home_x": rng.normal(500, 1, (*lead, 2)), "home_y": rng.normal(5600, 1, (*lead, 2)),
    }  # fmt: skip


def hierarchical_sites(chains=2, draws=90, seed=0):
    rng = np.random.default_rng(seed)
    lead = (chains, draws)
    slope = rng.uniform(-1, 1, lead)
    factor = np.zeros((*lead, 3, 3))
    factor[..., 0, 0] = factor[..., 2, 2] = 1
    factor[..., 1, 0], factor[..., 1, 1] = slope, np.sqrt(1 - slope**2)
    return {
        "localising_population": rng.gamma(3, size=lead), "localising_spread": rng.gamma(1, size=(*lead, 1)),
        "localising_effect": rng.normal(size=(*lead, 1, 2)), "localising": rng.gamma(3, size=(*lead, 3)),
        "resource_population": rng.normal(size=(*lead, 2)), "resource_spread": rng.gamma(1, size=(*lead, 2)),
        "resource_effect": rng.normal(size=(*lead, 2, 2)), "resource": rng.normal(size=(*lead, 2, 3)),
        "retreat": rng.gamma(1, size=lead), "group_correlation": factor,
        "group_place_0": rng.normal(size=(*lead, 3)),
    }  # fmt: skip


def described(spec, sites, prior_seed=9):
    maker = shared_sites if spec is SHARED else hierarchical_sites
    posterior, prior = parameter_dataset(spec, sites), parameter_dataset(spec, maker(1, 400, prior_seed))
    found = rows(spec, SCALES, posterior, prior, seed=3)
    return parameter_table(found).set_index("parameter"), found, posterior


def test_shared_rows_are_named_as_documented():
    table, _, _ = described(SHARED, shared_sites())
    assert list(table.index) == [
        "localising", "avoidance", "avoidance raw", "resource[worms]", "resource[worms] raw", "resource[height]",
        "resource[height] raw", "over_marking", "over_marking raw", "home_x[north]", "home_x[east wood]",
        "home_y[north]", "home_y[east wood]",
    ]  # fmt: skip
    assert list(table.columns) == [
        "unit", "mean", "sd", "median", "lower", "upper", "prob", "ess_bulk", "ess_tail", "rhat", "mcse_mean",
        "prior_lower", "prior_upper", "contraction",
    ]  # fmt: skip


def test_hierarchical_rows_are_named_as_documented():
    table, found, _ = described(HIERARCHICAL, hierarchical_sites())
    assert list(table.index)[:9] == [
        "localising", "localising spread", "localising:size", "localising:site=wet", "localising[north]",
        "localising[säter, <b>low</b>]", "localising[east wood]", "localising[new group]", "retreat",
    ]  # fmt: skip
    for name in (
        "resource[worms] spread",
        "resource[worms]:size",
        "resource[worms, north]",
        "resource[height, new group]",
    ):
        assert name in table.index
    assert table.index.is_unique
    individual = {row.name for row in found if row.individual}
    assert individual == {n for n in table.index if any(f"{group}]" in n for group in GROUPS)}


def test_units_say_what_the_numbers_are_in():
    table, _, _ = described(SHARED, shared_sites())
    assert table["unit"].to_dict() == {
        "localising": "1/km", "avoidance": "1", "avoidance raw": "km² per animal", "resource[worms]": "per sd",
        "resource[worms] raw": "1/(kg/ha)", "resource[height]": "per sd", "resource[height] raw": "1/m",
        "over_marking": "1", "over_marking raw": "km² per animal", "home_x[north]": "m", "home_x[east wood]": "m",
        "home_y[north]": "m", "home_y[east wood]": "m",
    }  # fmt: skip


def test_raw_rows_are_the_scaled_ones_in_raw_units():
    table, _, _ = described(SHARED, shared_sites())
    for name, factor in (
        ("avoidance", 0.6),
        ("over_marking", 0.6),
        ("resource[worms]", 1 / 8),
        ("resource[height]", 0.5),
    ):
        # α multiplies n u A₀, γ (h − mean)/sd: the raw slope is α A₀ and γ/sd
        columns = ["mean", "sd", "median", "lower", "upper", "prior_lower", "prior_upper"]
        wanted = table.loc[name, columns].astype(float) * factor
        np.testing.assert_allclose(table.loc[f"{name} raw", columns].astype(float), wanted)
        assert table.loc[f"{name} raw", "contraction"] == pytest.approx(table.loc[name, "contraction"])


def test_figures_are_those_of_numpy_and_arviz():
    sites = shared_sites()
    table, _, _ = described(SHARED, sites)
    draws, row = sites["resource"][:, :, 1], table.loc["resource[height]"]
    assert row["prob"] == 0.9
    np.testing.assert_allclose(row[["lower", "median", "upper"]].astype(float), np.quantile(draws, [0.05, 0.5, 0.95]))
    np.testing.assert_allclose(row[["mean", "sd"]].astype(float), [draws.mean(), draws.std(ddof=1)])
    prior = shared_sites(1, 400, 9)["resource"][:, :, 1]
    np.testing.assert_allclose(row[["prior_lower", "prior_upper"]].astype(float), np.quantile(prior, [0.05, 0.95]))
    assert row["contraction"] == pytest.approx(1 - draws.var() / prior.var())
    data = xr.DataArray(draws, dims=("chain", "draw"), name="x").to_dataset()
    assert row["rhat"] == pytest.approx(float(arviz_stats.rhat(data)["x"]))
    assert row["ess_bulk"] == pytest.approx(float(arviz_stats.ess(data)["x"]))
    # Published definition of the tail ESS: the smaller of those of the 5 % and the 95 % quantile (Vehtari et al. 2021)
    tails = [float(arviz_stats.ess(data, method="quantile", prob=p)["x"]) for p in (0.05, 0.95)]
    assert row["ess_tail"] == pytest.approx(min(tails))


def test_home_centres_are_metres_in_file_and_table():
    sites = shared_sites()
    table, _, posterior = described(SHARED, sites)
    np.testing.assert_allclose(posterior["home_x"].sel(home_group="east wood"), 1000 * sites["home_x"][:, :, 1])
    assert table.loc["home_y[north]", "mean"] == pytest.approx(1000 * sites["home_y"][:, :, 0].mean())


def test_variables_have_the_dimensions_of_the_format():
    posterior = parameter_dataset(HIERARCHICAL, hierarchical_sites())
    lead = ("chain", "draw")
    assert {name: variable.dims for name, variable in posterior.data_vars.items()} == {
        "localising_population": lead, "localising_spread": lead, "localising_effect": (*lead, "covariate"),
        "localising": (*lead, "group"), "resource_population": (*lead, "layer"), "resource_spread": (*lead, "layer"),
        "resource_effect": (*lead, "layer", "covariate"), "resource": (*lead, "layer", "group"), "retreat": lead,
        "group_correlation": (*lead, "coefficient", "coefficient_2"),
    }  # fmt: skip
    assert list(posterior["group"].values) == list(GROUPS)
    assert list(posterior["coefficient"].values) == ["localising", "resource[worms]", "resource[height]"]
    shared = parameter_dataset(SHARED, shared_sites())
    assert shared["resource"].dims == (*lead, "layer") and shared["home_x"].dims == (*lead, "home_group")
    assert list(shared["home_group"].values) == ["north", "east wood"]


def test_correlation_in_the_file_is_a_correlation():
    # The sampler's own variable is the Cholesky factor.
    correlation = parameter_dataset(HIERARCHICAL, hierarchical_sites())["group_correlation"]
    np.testing.assert_allclose(np.diagonal(correlation, axis1=2, axis2=3), 1, rtol=1e-12)
    np.testing.assert_allclose(correlation[..., 0, 1], correlation[..., 1, 0])
    np.testing.assert_allclose(correlation[..., 0, 1], hierarchical_sites()["group_correlation"][..., 1, 0])


def test_groups_rows_are_their_own_draws():
    sites = hierarchical_sites()
    table, _, _ = described(HIERARCHICAL, sites)
    assert table.loc["localising[east wood]", "mean"] == pytest.approx(sites["localising"][:, :, 2].mean())
    assert table.loc["resource[height, north]", "mean"] == pytest.approx(sites["resource"][:, :, 1, 0].mean())
    assert table.loc["resource[height]:site=wet", "mean"] == pytest.approx(sites["resource_effect"][:, :, 1, 1].mean())
    assert table.loc["localising:size", "mean"] == pytest.approx(sites["localising_effect"][:, :, 0, 0].mean())
    assert table.loc["localising spread", "median"] == pytest.approx(np.median(sites["localising_spread"]))


def test_new_group_is_drawn_from_the_population():
    sites = hierarchical_sites(4, 5000)
    sites["localising_population"] = np.full((4, 5000), 6.0)
    sites["localising_spread"] = np.full((4, 5000, 1), 0.3)
    sites["resource_population"] = np.full((4, 5000, 2), -0.2)
    sites["resource_spread"] = np.full((4, 5000, 2), 0.4)
    _, found, _ = described(HIERARCHICAL, sites)
    new = {row.name: row.draws for row in found if "new group" in row.name}
    # Four standard errors of mean and sd of 20 000 independent draws
    for draws, mean, sd in (
        (np.log(new["localising[new group]"]), np.log(6), 0.3), (new["resource[worms, new group]"], -0.2, 0.4)
    ):  # fmt: skip
        assert abs(draws.mean() - mean) < 4 * sd / np.sqrt(20_000)
        assert abs(draws.std() - sd) < 4 * sd / np.sqrt(40_000)
    assert (
        abs(np.corrcoef(new["resource[worms, new group]"].ravel(), new["resource[height, new group]"].ravel())[0, 1])
        < 0.03
    )


def test_a_parameter_the_data_say_nothing_of_has_no_contraction():
    draws = np.random.default_rng(0).normal(size=(4, 5000))
    table = parameter_table([Row("a", "1", draws, draws[:1]), Row("b", "1", draws / 10, draws[:1])])
    assert table["contraction"][0] == pytest.approx(0, abs=0.05)
    assert table["contraction"][1] == pytest.approx(0.99, abs=0.002)


def test_a_contrast_of_classes_says_what_it_compares_with_and_has_no_raw_row():
    height = LayerScale(0.0, 1.0, "", "grass")
    scales = Scales(0.6, 1.4, 200.0, 50.0, {"worms": LayerScale(40.0, 8.0, "kg/ha"), "height": height})
    for spec, sites in ((SHARED, shared_sites), (HIERARCHICAL, hierarchical_sites)):
        sets = [parameter_dataset(spec, sites(1, 60, seed)) for seed in (1, 2)]
        units = {row.name: row.unit for row in rows(spec, scales, *sets, seed=3)}
        assert units["resource[height]"] == "against grass"
        assert units["resource[worms]"] == "per sd" and "resource[worms] raw" in units
        assert "resource[height] raw" not in units
