"""`bayesrange fit` from raw files to a run folder, which has what its format says and numbers that can be redone."""

import hashlib
import json

import numpy as np
import pandas as pd
import pytest
import xarray as xr
from inference._tiny_study import HOMES, SETTINGS, SOUTH_GROUP, UNWATCHED
from inference._twin import Ground, fix_densities, gibbs_law, solitary

from bayesrange import commands, open_run
from bayesrange.inference import Scales
from bayesrange.study import autocorrelation_weights, read_study

CHAINS, DRAWS, FIXES = 2, 710, 200


@pytest.fixture(scope="module")
def tree(run_folder):
    with xr.open_datatree(run_folder / "posterior.nc", engine="h5netcdf") as opened:
        yield opened.load()


@pytest.fixture(scope="module")
def info(run_folder):
    return json.loads((run_folder / "run.json").read_text(encoding="utf-8"))


def test_converged_fit_ends_with_status_0_and_says_where_things_are(fitted, run_folder):
    assert fitted.returncode == 0, fitted.stdout + fitted.stderr
    for words in ("Tern <Marsh> [bold]", "Converged", str(run_folder), "report.html", "carry the information of about"):
        assert words in fitted.stdout
    assert fitted.stderr == ""


def test_fit_says_what_it_will_cost_before_it_samples(fitted):
    lines = fitted.stdout.splitlines()
    cost = next(i for i, line in enumerate(lines) if "minutes and" in line and "GiB" in line)
    sampling = next(i for i, line in enumerate(lines) if line.startswith("chain 1:"))
    assert cost < sampling
    assert "divergences 0, step size" in lines[sampling]


def test_run_folder_holds_what_the_format_lists_and_nothing_else(run_folder):
    assert {file.name for file in run_folder.iterdir()} == {
        "posterior.nc", "run.json", "tables", "maps", "report.html"
    }  # fmt: skip
    assert {"parameters.csv", "ranges.csv"} <= {file.name for file in (run_folder / "tables").iterdir()}
    assert not list(run_folder.rglob(".*"))  # no half-written files


def test_report_shows_names_as_text(run_folder):
    page = (run_folder / "report.html").read_text(encoding="utf-8")
    assert "Tern &lt;Marsh&gt; [bold]" in page and "<Marsh>" not in page
    assert "säter, &lt;b&gt;low&lt;/b&gt;" in page


def test_run_json_has_the_keys_of_the_format(info, study_folder):
    assert info["format"] == 1 and info["name"] == SETTINGS["study"]["name"]
    files = {name: hashlib.sha256((study_folder / name).read_bytes()).hexdigest() for name in
             ("study.toml", "fixes.csv", "groups.csv", "area.geojson", "worms.tif")}  # fmt: skip
    assert files.items() <= info["files"].items()
    assert set(info["files"]) - set(files) == {"models/avoidance-resources.toml"}
    assert info["study"] == {"file": "study.toml", "name": info["name"], "sha256": files["study.toml"]}
    assert (info["crs"], info["cell_m"], info["sensitive"], info["period"]) == ("EPSG:32631", 100, "no", None)
    assert info["card"]["name"] == "avoidance-resources"
    assert info["card"]["terms"] == ["localising", "avoidance", "resources"]
    assert info["sampling"] | {"chains": 2, "warmup": 60, "draws": 710, "seed": 4} == info["sampling"]
    assert {"bayesrange", "jax", "numpyro", "numpy"} <= set(info["versions"])
    assert all(value > 0 for value in info["times"].values())
    assert info["counts"]["fixes"] == FIXES and info["converged"] is True and info["diagnostics"]["problems"] == []
    assert {"divergences", "failed_solves", "max_rhat", "min_ess_bulk", "min_ess_tail"} <= set(info["diagnostics"])
    assert any("localising" in sentence for sentence in info["warnings"])


def test_effective_fixes_are_those_of_the_weights(info, tree, study_folder):
    weights = autocorrelation_weights(read_study(study_folder).fixes)
    np.testing.assert_array_equal(tree["constant_data/weight"].values, weights.weight)
    effective = info["effective"]
    assert effective["fixes"] == FIXES and effective["effective"] == pytest.approx(weights.weight.sum())
    assert effective["sentence"] == weights.sentence
    assert [row["animal"] for row in effective["animals"]] == ["n1", "s1"]
    assert {"fixes", "crossing_time_h", "effective"} <= set(effective["animals"][0])


def test_scales_are_written_as_they_were_used(info, study_folder):
    scales, study = Scales.from_json(info["scales"]), read_study(study_folder)
    assert scales.a0_km2 == pytest.approx(study.grid.habitable_km2 / 9)
    assert (scales.perception_m, scales.eps_m, list(scales.layers)) == (200, 50, ["worms"])


def test_posterior_has_the_groups_and_dimensions_of_the_format(tree):
    lead = {"chain": CHAINS, "draw": DRAWS}
    expected = {
        "posterior": {"localising": {}, "avoidance": {}, "resource": {"layer": 1}},
        "sample_stats": dict.fromkeys(
            ("diverging", "energy", "lp", "n_steps", "step_size", "acceptance_rate", "tree_depth"), {}
        ),
        "log_likelihood": {"fixes": {"fix": FIXES}},
        "space_use": {
            "area_km2": {"isopleth": 2, "group": 3}, "overlap": {"group": 3, "neighbour": 3},
        },
    }  # fmt: skip
    for group, variables in expected.items():
        found = tree[group].dataset
        named = {
            name: dict(zip(v.dims, v.shape, strict=True)) for name, v in found.data_vars.items() if "chain" in v.dims
        }
        assert named == {name: lead | extra for name, extra in variables.items()}, group
    prior = tree["prior"].dataset
    assert set(prior.data_vars) == set(expected["posterior"]) and prior.sizes["chain"] == 1
    maps = tree["space_use"].dataset
    for name in ("density_mean", "density_sd"):
        assert maps[name].dims == ("group", "y", "x")
    assert maps["inside_probability"].dims == ("isopleth", "group", "y", "x")
    assert list(maps["isopleth"].values) == [50, 95] and np.all(np.diff(maps["y"]) > 0)
    assert tree["log_likelihood/fixes"].dtype == np.float32
    assert list(tree["posterior/layer"].values) == ["worms"]
    assert tree.attrs["card"] == "avoidance-resources"


def test_constant_data_is_what_was_fitted(tree, study_folder):
    constant, study = tree["constant_data"].dataset, read_study(study_folder)
    assert list(constant["group"].values) == list(HOMES)
    assert list(constant["animals"].values) == [2, 3, 4]
    np.testing.assert_array_equal(constant["home_x"], study.groups["x"])
    np.testing.assert_array_equal(constant["habitable"], study.grid.habitable)
    np.testing.assert_array_equal(constant["layer_value"][0], study.layers["worms"].values)
    assert list(np.unique(constant["group_of_fix"].values)) == ["north", SOUTH_GROUP]
    times = pd.DatetimeIndex(constant["time"].values)
    np.testing.assert_array_equal(times, study.fixes["time"].dt.tz_convert(None))
    np.testing.assert_array_equal(tree["observed_data/x"], study.fixes["x"])


def draw_by_hand(tree, info, study, chain, draw):
    """Densities (groups, cells) of one draw by the slow twin."""
    at = tree["posterior"].dataset.isel(chain=chain, draw=draw)
    ground = Ground.of(study, ["worms"])
    homes = study.groups[["x", "y"]].to_numpy(float) / 1000
    potential = solitary(
        ground, np.full(3, float(at["localising"])), np.full((1, 3), float(at["resource"][0])), homes, 0.05
    )
    marking = np.array([2.0, 3.0, 4.0]) * info["scales"]["a0_km2"]
    return ground, gibbs_law(ground, potential, np.full(3, float(at["avoidance"])), 0.0, marking, 0.2)


@pytest.mark.parametrize(("chain", "draw"), [(0, 0), (0, 709), (1, 203)])
def test_what_is_kept_of_a_draw_can_be_redone_by_hand(tree, info, study_folder, chain, draw):
    study = read_study(study_folder)
    ground, density = draw_by_hand(tree, info, study, chain, draw)
    fixes = study.fixes
    owner = fixes["group"].map({name: i for i, name in enumerate(HOMES)}).to_numpy()
    at = fix_densities(
        ground, density, fixes["x"].to_numpy(), fixes["y"].to_numpy(), owner, fixes["error_m"].to_numpy()
    )
    kept = tree["log_likelihood/fixes"].values[chain, draw]
    weighted = tree["constant_data/weight"].values * np.log(at)
    np.testing.assert_allclose(kept, weighted, rtol=1e-5, atol=1e-6)  # single precision: 6e-8 of the largest
    use = tree["space_use"].dataset.isel(chain=chain, draw=draw)
    root = np.sqrt(density * ground.area)
    np.testing.assert_allclose(use["overlap"], root @ root.T, rtol=1e-8)
    for group, name in enumerate(HOMES):
        order = np.argsort(-density[group])
        mass, size = np.cumsum((density[group] * ground.area)[order]), np.cumsum(ground.area[order])
        for level in (50, 95):
            k = np.searchsorted(mass, level / 100)
            area = float(use["area_km2"].sel(isopleth=level, group=name))
            assert size[k - 1] <= area <= size[k] + 1e-9


def test_maps_hold_use_that_sums_to_one_and_isopleths_that_nest(tree, study_folder):
    grid, use = read_study(study_folder).grid, tree["space_use"].dataset
    area = grid.habitable * (grid.cell_m / 1000) ** 2
    np.testing.assert_allclose((use["density_mean"].values * area).sum((1, 2)), 1, rtol=1e-9)
    inside = use["inside_probability"]
    assert float(inside.min()) >= 0 and float(inside.max()) <= 1
    assert np.all(inside.sel(isopleth=50).values <= inside.sel(isopleth=95).values + 1e-12)
    # A cell's share inside, summed over cells and averaged over draws, is the mean area
    shared = (inside.values * area).sum((2, 3))
    np.testing.assert_allclose(shared, use["area_km2"].mean(("chain", "draw")).values, rtol=1e-9)
    assert float(use["density_sd"].min()) >= 0 and float(use["density_sd"].max()) > 0


def test_watched_groups_are_found_where_their_fixes_are_and_the_unwatched_one_at_its_home(tree, study_folder):
    use, fixes = tree["space_use"].dataset, read_study(study_folder).fixes
    for name, (x, y) in HOMES.items():
        density = use["density_mean"].sel(group=name)
        centre = [float((density * density[axis]).sum() / density.sum()) for axis in ("x", "y")]
        own = fixes[fixes["group"] == name]
        place = (own["x"].mean(), own["y"].mean()) if len(own) else (500_000 + x, 5_600_000 + y)
        assert np.hypot(*np.subtract(centre, place)) < 200
    assert UNWATCHED not in set(fixes["group"])


def test_parameter_table_is_that_of_the_draws(tree, run_folder):
    table = pd.read_csv(run_folder / "tables" / "parameters.csv", index_col="parameter")
    assert list(table.columns) == [
        "unit", "mean", "sd", "median", "lower", "upper", "prob", "ess_bulk", "ess_tail", "rhat", "mcse_mean",
        "prior_lower", "prior_upper", "contraction",
    ]  # fmt: skip
    assert list(table.index) == ["localising", "avoidance", "avoidance raw", "resource[worms]", "resource[worms] raw"]
    posterior = tree["posterior"].dataset
    assert table.loc["avoidance", "median"] == pytest.approx(float(posterior["avoidance"].median()))
    assert table.loc["resource[worms]", "upper"] == pytest.approx(np.quantile(posterior["resource"], 0.95))
    assert table.loc["localising", "contraction"] > 0.9


def test_prior_draws_follow_the_card(tree, info):
    # Median and central 90 % of the card's log-normal in units of the study's home length; 4000 draws, four standard
    # errors of a quantile from its density.
    length, draws = info["scales"]["home_length_km"], np.log(tree["prior/localising"].values.ravel())
    assert abs(np.median(draws) - np.log(8 / length)) < 4 * 0.8 * np.sqrt(np.pi / 2 / draws.size)
    assert abs(draws.std() - 0.8) < 4 * 0.8 / np.sqrt(2 * draws.size)


def test_sampler_record_agrees_with_the_draws(tree, info):
    stats = tree["sample_stats"].dataset
    assert int(stats["diverging"].sum()) == info["diagnostics"]["divergences"]
    assert int(stats["n_steps"].sum()) == info["diagnostics"]["gradients"]
    np.testing.assert_array_equal(stats["step_size"][:, 0], stats["step_size"][:, -1])  # frozen after the warm-up
    # lp is the log posterior up to a constant: a draw's log-likelihood is part of it
    likelihood = tree["log_likelihood/fixes"].sum("fix").values
    prior_part = stats["lp"].values - likelihood
    assert prior_part.std() < likelihood.std() + 1


def test_finished_run_opens_in_python(run_folder, tree):
    run = open_run(run_folder)
    assert run.converged and len(run.parameters) == 5
    xr.testing.assert_identical(run.posterior["posterior"].dataset.load(), tree["posterior"].dataset)
    run.posterior.close()


def test_second_fit_is_refused_and_changes_nothing(run_folder, study_folder, capsys):
    before = {file: file.stat().st_mtime_ns for file in study_folder.rglob("*")}
    assert commands.main(["fit", str(study_folder)]) == 2
    assert capsys.readouterr().err == (
        f"bayesrange: {run_folder}: a finished run is here and is never overwritten; add --again for a new one, or "
        "--out with another folder.\n"
    )
    assert {file: file.stat().st_mtime_ns for file in study_folder.rglob("*")} == before


def test_report_is_written_anew_and_the_posterior_left_alone(run_folder, capsys):
    before = (run_folder / "posterior.nc").read_bytes()
    (run_folder / "report.html").unlink()
    assert commands.main(["report", str(run_folder)]) == 0
    assert str(run_folder / "report.html") in capsys.readouterr().out.replace("\n", "")
    assert (run_folder / "report.html").stat().st_size > 10_000
    assert (run_folder / "posterior.nc").read_bytes() == before
