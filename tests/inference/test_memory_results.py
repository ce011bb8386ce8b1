"""From draws to posterior.nc, parameters.csv and what is said of a memory fit; the draws are made up, no sampling."""

import json
from dataclasses import replace

import jax.numpy as jnp
import numpy as np
import pandas as pd
import pytest
import xarray as xr
from inference._tiny_tracks import ASE, BO, TOM, VIXEN
from scipy import stats

from bayesrange.inference._gather import Derived
from bayesrange.inference._memory_build import surface_axes
from bayesrange.inference._memory_nodes import shift
from bayesrange.inference._memory_results import memory_results, parameter_dataset
from bayesrange.inference._memory_rows import memory_rows
from bayesrange.inference._memory_warnings import said_of_memory, step_autocorrelation
from bayesrange.inference._scales import LayerScale
from bayesrange.memory import fit_gamma

CHAINS, DRAWS = 2, 60
ANIMALS = [BO, TOM, VIXEN, ASE]


def made_up(model, rng):
    """What the chains of each task would have left: positions drawn at random, likelihoods that tell steps apart."""
    found = []
    for number, task in enumerate(model.tasks):
        z = jnp.asarray(0.5 * rng.normal(size=(CHAINS * DRAWS, model.program.dimension)))
        sites = {
            name: np.asarray(value).reshape(CHAINS, DRAWS, *value.shape[1:])
            for name, value in model.program.constrain(z, model.data).items()
        }
        counted = np.asarray(task.data.steps.counted)
        terms = np.where(counted, 1000 * number + np.arange(counted.size).reshape(counted.shape), np.nan)
        stat = {name: rng.normal(size=(CHAINS, DRAWS)) for name in ("potential", "energy", "accept", "step_size")}
        stat |= {"diverging": np.zeros((CHAINS, DRAWS), bool), "gradients": np.full((CHAINS, DRAWS), 7)}
        x, y = surface_axes(model.study)
        recall = 0.5 + 0.01 * number + np.zeros((len(task.spec.animals), x.size * y.size))
        means = {"recall": recall, "recall_squared": recall**2 + 0.04, "working": recall / 2}
        chosen = np.tile(np.arange(0, DRAWS, 2), (CHAINS, 1))
        extras = {"more_nodes_draw": chosen, "more_nodes_difference": rng.normal(size=chosen.shape)}
        kept = {"log_likelihood": np.broadcast_to(terms, (CHAINS, DRAWS, *terms.shape)).astype(np.float32)}
        found.append(Derived(sites, stat, kept, means if task.spec.remembers else {}, extras, 0, 0, 0, [1.0, 1.0]))
    return found


def results_of(model):
    rng = np.random.default_rng(3)
    derived = made_up(model, rng)
    prior = {name: value[0] for name, value in made_up(model, rng)[0].sites.items()}
    tree, table, diagnostics, own = memory_results(model.prepared, model.tasks, derived, prior, model.facts)
    return derived, tree, table, own


@pytest.fixture(scope="module")
def of_pooled(pooled):
    return results_of(pooled)


@pytest.fixture(scope="module")
def of_each(estimated):
    return results_of(estimated)


@pytest.fixture(scope="module")
def of_homes(at_home):
    return results_of(at_home)


KERNEL = ("step_shape", "step_scale", "turn_concentration")
MEMORY = ("reference_strength", "reference_decay", "working_strength", "working_decay")
LEAD = ("chain", "draw")


def test_posterior_of_a_population_has_the_names_dimensions_and_units_of_the_tables(of_pooled):
    posterior = of_pooled[1]["posterior"].dataset
    dims = {"recall_half": (), "step_rhythm": ("harmonic",), "animal_correlation": ("coefficient", "coefficient_2")}
    for name in (*KERNEL, *MEMORY):
        dims |= {name: ("animal",), f"{name}_population": (), f"{name}_spread": (), f"{name}_effect": ("covariate",)}
    dims |= {"selection": ("layer", "animal"), "selection_population": ("layer",), "selection_spread": ("layer",),
             "selection_effect": ("layer", "covariate")}  # fmt: skip
    assert {name: value.dims for name, value in posterior.data_vars.items()} == {k: LEAD + v for k, v in dims.items()}
    assert list(posterior["animal"].values) == ANIMALS
    assert list(posterior["layer"].values) == ["forage, day", "forage, night"]
    assert list(posterior["covariate"].values) == ["sex=m"]
    assert list(posterior["coefficient"].values) == [
        "selection[forage, day]", "selection[forage, night]", "reference_strength", "reference_decay",
        "working_strength", "working_decay",
    ]  # fmt: skip
    units = {name: value.attrs["units"] for name, value in posterior.data_vars.items()}
    assert units["step_scale"] == units["step_scale_population"] == "m"
    assert units["reference_decay"] == units["working_decay_population"] == units["recall_half"] == "h"
    assert {units[name] for name in units if name.endswith(("_spread", "_effect"))} == {"1"}
    assert of_pooled[1]["prior"].dataset.data_vars.keys() == posterior.data_vars.keys()


def test_lengths_of_the_numerics_become_metres_and_nothing_else_is_changed(of_pooled, of_homes):
    (derived, *_), posterior = of_pooled[0], of_pooled[1]["posterior"].dataset
    for name in ("step_scale", "step_scale_population"):
        np.testing.assert_allclose(posterior[name], 1000 * derived.sites[name])
    for name in ("step_shape", "selection", "reference_strength", "reference_decay", "recall_half", "step_rhythm"):
        np.testing.assert_array_equal(posterior[name], derived.sites[name])
    np.testing.assert_array_equal(posterior["step_scale_spread"], derived.sites["step_scale_spread"][..., 0])
    homes, posterior = of_homes[0], of_homes[1]["posterior"].dataset
    for k, name in enumerate(ANIMALS):
        for axis in ("home_x", "home_y"):
            np.testing.assert_allclose(posterior[axis].sel(animal=name), 1000 * homes[k].sites[axis][..., 0])
    assert posterior["home_x"].attrs["units"] == "m" and posterior["home_pull"].attrs["units"] == "1/km"
    assert (posterior["home_x"] > 499_000).all() and (posterior["home_y"] > 5_599_000).all()


def test_correlation_is_a_correlation(of_pooled):
    correlation = of_pooled[1]["posterior/animal_correlation"].values
    np.testing.assert_allclose(np.diagonal(correlation, axis1=-2, axis2=-1), 1.0)
    np.testing.assert_allclose(correlation, np.swapaxes(correlation, -1, -2))
    np.testing.assert_allclose(correlation, correlation.clip(-1, 1))


def test_animals_fitted_alone_stand_side_by_side_each_with_its_own_draws(of_each):
    derived, tree, _, _ = of_each
    posterior = tree["posterior"].dataset
    dims = {name: ("animal",) for name in (*KERNEL, *MEMORY, "recall_half", "encoding_range")}
    dims["step_rhythm"] = ("harmonic", "animal")
    assert {name: value.dims for name, value in posterior.data_vars.items()} == {k: LEAD + v for k, v in dims.items()}
    assert {name: value.dims for name, value in tree["prior"].dataset.data_vars.items()} == {
        k: LEAD + v for k, v in dims.items()
    }
    assert posterior["encoding_range"].attrs["units"] == "m"
    for k, name in enumerate(ANIMALS):
        own, sites = posterior.sel(animal=name), derived[k].sites
        np.testing.assert_allclose(own["encoding_range"], 1000 * sites["encoding_range"])
        np.testing.assert_array_equal(own["step_rhythm"], np.moveaxis(sites["step_rhythm"], -1, 2))
        np.testing.assert_array_equal(own["recall_half"], sites["recall_half"][..., 0])
    assert tree["sample_stats/energy"].dims == (*LEAD, "animal")
    np.testing.assert_array_equal(tree["sample_stats/lp"].sel(animal=VIXEN), -derived[2].stats["potential"])


def test_reference_memory_outlasts_the_working_one_in_every_row(of_pooled, of_each):
    for _, tree, table, _ in (of_pooled, of_each):
        posterior = tree["posterior"].dataset
        for part in ("", "_population"):
            if f"reference_decay{part}" in posterior:
                working = posterior[f"working_decay{part}"]
                assert (posterior[f"reference_decay{part}"] > working).all() and (working > 0.5).all()
        mean = table.set_index("parameter")["mean"]
        for name in [row for row in mean.index if row.startswith("reference_decay[")]:
            assert mean[name] > mean[name.replace("reference", "working")]


def test_rows_of_a_population(of_pooled):
    names = list(of_pooled[2]["parameter"])
    expected = []
    for name in ("step_shape", "step_scale", "turn_concentration"):
        expected += [name, f"{name} spread", f"{name}:sex=m", *(f"{name}[{a}]" for a in [*ANIMALS, "new animal"])]
    for label in ("forage, day", "forage, night"):
        expected += [f"selection[{label}]{part}" for part in ("", " raw", " spread", ":sex=m")]
        expected += [f"selection[{label}, {a}]" for a in [*ANIMALS, "new animal"]]
    for name in MEMORY:
        expected += [name, f"{name} spread", f"{name}:sex=m", *(f"{name}[{a}]" for a in [*ANIMALS, "new animal"])]
    waves = ("cos 24 h", "sin 24 h", "cos 12 h", "sin 12 h")
    expected += ["recall_half", *(f"step_rhythm[{wave}]" for wave in waves)]
    assert names == expected
    units = of_pooled[2].set_index("parameter")["unit"]
    assert units["step_scale"] == units["step_scale[new animal]"] == "m" and units["step_scale spread"] == "log scale"
    assert units["selection[forage, day]"] == units["selection[forage, day] spread"] == "per sd"
    assert units["selection[forage, day] raw"] == "1/(kg/ha)"
    assert units["reference_decay"] == "h" and units["reference_strength"] == "1"


def test_rows_of_animals_alone(of_each, of_homes):
    waves = ("cos 24 h", "sin 24 h", "cos 12 h", "sin 12 h")
    expected = [f"{name}[{a}]" for name in (*KERNEL, *MEMORY, "recall_half", "encoding_range") for a in ANIMALS]
    expected += [f"step_rhythm[{wave}, {a}]" for wave in waves for a in ANIMALS]
    assert list(of_each[2]["parameter"]) == expected
    names = list(of_homes[2]["parameter"])
    assert [n for n in names if n.startswith("selection")] == [
        f"selection[forage, {a}]{raw}" for a in ANIMALS for raw in ("", " raw")
    ]
    assert names[-8:] == [f"{axis}[{a}]" for a in ANIMALS for axis in ("home_x", "home_y")]


def test_raw_rows_are_per_unit_of_the_layer(of_pooled, of_homes, pooled, at_home):
    for (_, _, table, _), model, name in (
        (of_pooled, pooled, "selection[forage, night]"),
        (of_homes, at_home, f"selection[forage, {VIXEN}]"),
    ):
        row = table.set_index("parameter")
        sd = model.plan.scales.layers["forage"].sd
        for column in ("mean", "sd", "lower", "upper", "prior_lower"):
            assert row.loc[f"{name} raw", column] == pytest.approx(row.loc[name, column] / sd)


def test_table_tells_mean_and_interval_of_the_draws(of_each):
    derived, _, table, _ = of_each
    row = table.set_index("parameter").loc[f"encoding_range[{ASE}]"]
    draws = 1000 * derived[3].sites["encoding_range"]
    assert row["mean"] == pytest.approx(draws.mean())
    assert (row["lower"], row["upper"]) == pytest.approx(tuple(np.quantile(draws, [0.05, 0.95])))


# --- a new animal --------------------------------------------------------------------------------------------------

MANY = 40_000


def population(spec, **values):
    """A posterior that is one point, over many draws, so that a new animal follows the population's own law."""
    fixed = {}
    for name in spec.parameters:
        shape, dims = ((len(spec.layers),), ("layer",)) if name == "selection" else ((), ())
        unit = {"units": "1"}
        full = (*LEAD, *dims)
        fixed[f"{name}_population"] = (full, np.full((1, MANY, *shape), values.get(name, 1.0)), unit)
        fixed[f"{name}_spread"] = (full, np.full((1, MANY, *shape), values.get(f"{name}_spread", 0.3)), unit)
        fixed[f"{name}_effect"] = (
            (*full, "covariate"), np.zeros((1, MANY, *shape, len(spec.covariates))), unit
        )  # fmt: skip
        if name == "recall_half":
            fixed[name] = (LEAD, np.ones((1, MANY)), unit)
            continue
        fixed[name] = ((*full, "animal"), np.ones((1, MANY, *shape, 4)), unit)
    names = ["reference_decay", "working_decay"]
    r = values.get("correlation", 0.0)
    fixed["animal_correlation"] = (
        (*LEAD, "coefficient", "coefficient_2"), np.broadcast_to([[1, r], [r, 1]], (1, MANY, 2, 2)), {"units": "1"}
    )  # fmt: skip
    fixed["step_rhythm"] = ((*LEAD, "harmonic"), np.zeros((1, MANY, 1)), {"units": "log scale"})
    coords = {"layer": list(spec.layers), "animal": list(spec.animals), "covariate": list(spec.covariates),
              "harmonic": ["cos 24 h"], "coefficient": names, "coefficient_2": names}  # fmt: skip
    return xr.Dataset(fixed, coords)


@pytest.mark.parametrize("r", [-0.8, 0.0, 0.8])
def test_new_animal_follows_the_law_of_the_population(pooled, r):
    spec = pooled.plan.spec
    values = {"step_scale": 200.0, "step_scale_spread": 0.4, "selection": 0.7, "selection_spread": 0.5,
              "working_decay": 6.5, "working_decay_spread": 0.5, "reference_decay": 26.5,
              "reference_decay_spread": 0.4, "correlation": r}  # fmt: skip
    data = population(spec, **values)
    rows = {row.name: row for row in memory_rows(spec, pooled.plan.scales, data, data, 0.5, 7)}
    new = {name.removesuffix("[new animal]"): row.draws for name, row in rows.items() if name.endswith("[new animal]")}
    new["selection"] = rows["selection[forage, day, new animal]"].draws
    se = 4 / np.sqrt(MANY)  # four standard errors of a mean, in sds
    log_scale = np.log(new["step_scale"])
    assert log_scale.mean() == pytest.approx(np.log(200), abs=0.4 * se)
    assert log_scale.std() == pytest.approx(0.4, rel=se)
    assert new["selection"].mean() == pytest.approx(0.7, abs=0.5 * se)
    assert new["selection"].std() == pytest.approx(0.5, rel=se)
    log_working = np.log(new["working_decay"] - 0.5)  # half an interval, and an excess of 6 h in the median animal
    assert log_working.mean() == pytest.approx(np.log(6), abs=0.5 * se)
    assert log_working.std() == pytest.approx(0.5, rel=se)
    # Half an interval plus two correlated log-normals: mean and variance in closed form, with medians 6 and 20.
    first, second = stats.lognorm(0.5, scale=6), stats.lognorm(0.4, scale=20)
    both = first.mean() * second.mean() * (np.exp(r * 0.5 * 0.4) - 1)
    sd = np.sqrt(first.var() + second.var() + 2 * both)
    assert new["reference_decay"].mean() == pytest.approx(0.5 + first.mean() + second.mean(), abs=sd * se)
    assert new["reference_decay"].std() == pytest.approx(sd, rel=3 * se)  # heavier tails: a wider error of the sd
    if r:  # the correlation shows
        alone = np.sqrt(first.var() + second.var())
        assert abs(sd / alone - 1) > 3 * se


def test_contrast_of_classes_is_named_by_its_reference_and_has_no_raw_row(pooled):
    spec, scales = pooled.plan.spec, pooled.plan.scales
    classes = replace(scales, layers={"forage": LayerScale(0.0, 1.0, "", "wood")})
    data = population(spec)
    rows = {row.name: row for row in memory_rows(spec, classes, data, data, 0.5, 7)}
    assert rows["selection[forage, day]"].unit == "against wood"
    assert not any(name.endswith(" raw") for name in rows)


# --- the rest of the run folder --------------------------------------------------------------------------------------


def test_steps_stand_in_one_order_everywhere(of_pooled, of_each, pooled, estimated):
    for (_, tree, _, _), model in ((of_pooled, pooled), (of_each, estimated)):
        constant, likelihood = tree["constant_data"].dataset, tree["log_likelihood/steps"].values
        tracks = model.plan.tracks.animals
        assert likelihood.shape == (CHAINS, DRAWS, sum(one.counts["steps"] for one in tracks))
        assert np.isfinite(likelihood).all() and likelihood.dtype == np.float32
        assert (np.diff(likelihood[0, 0]) > 0).all()  # as made up: tasks and their steps in order, no padding
        owner = constant["animal_of_step"].values
        assert list(dict.fromkeys(owner)) == ANIMALS
        fixes = model.study.fixes
        for one in tracks:
            own = np.flatnonzero(owner == one.name)
            table = fixes[fixes["animal"] == one.name].reset_index(drop=True)
            start = table.loc[one.steps.fix]
            end = table.loc[one.steps.fix + 1]
            assert (constant["time"].values[own] == start["time"].dt.tz_localize(None).to_numpy()).all()
            np.testing.assert_allclose(constant["start_x"].values[own], start["x"], atol=1e-6)
            np.testing.assert_allclose(tree["observed_data/y"].values[own], end["y"], atol=1e-6)
            length = np.hypot(end["x"].to_numpy() - start["x"].to_numpy(), end["y"].to_numpy() - start["y"].to_numpy())
            np.testing.assert_allclose(constant["length_m"].values[own], length, atol=1e-6)
        kind, turn = constant["kind"].values, constant["turn"].values
        assert {name: int((kind == name).sum()) for name in set(kind)}["short"] == 5
        assert (np.isnan(turn) == (kind != "full")).all()


def test_fixes_ground_and_starts_are_kept(of_pooled, pooled):
    constant, study = of_pooled[1]["constant_data"].dataset, pooled.study
    np.testing.assert_array_equal(constant["fix_x"], study.fixes["x"])
    assert list(constant["fix_animal"].values) == list(study.fixes["animal"])
    assert (np.diff(constant["y"]) > 0).all()
    np.testing.assert_array_equal(constant["habitable"], study.grid.habitable)
    np.testing.assert_array_equal(constant["layer_value"].sel(layer="forage"), study.layers["forage"].values)
    assert set(constant["memory_start"].values) == {"naive"}
    np.testing.assert_array_equal(constant["weight"], 1.0)


def test_recall_is_laid_out_as_the_grid_with_its_spread(of_each, of_homes):
    use = of_each[1]["memory_use"].dataset
    assert use["recall_mean"].dims == ("animal", "y", "x")
    np.testing.assert_allclose(use["recall_mean"].mean(("y", "x")), [0.5, 0.51, 0.52, 0.53])
    np.testing.assert_allclose(use["recall_sd"], 0.2)
    assert "memory_use" not in of_homes[1]


def test_facts_of_the_run_are_plain_and_complete(of_pooled, of_each, of_homes, pooled):
    for _, _, table, own in (of_pooled, of_each, of_homes):
        facts = json.loads(json.dumps(own))["memory"]
        assert facts["interval_h"] == 1.0 and facts["shortest_step_m"] == 1.0 and facts["nodes"] == 16
        assert facts["trace_error"] <= facts["trace_error_limit"] == 1e-3
        assert set(facts["record_h"]) == set(facts["steps"]) == set(ANIMALS)
        for counts in facts["steps"].values():
            told = sum(counts[key] for key in ("steps", "not_nominal", "off_ground", "learning", "without_nodes"))
            assert told == counts["intervals"]
        rows = [n for n in table["parameter"] if "new animal" not in n and not n.endswith(" raw")]
        assert set(facts["quadrature_shift"]) <= set(rows)
    assert of_pooled[3]["memory"]["encoding_range_m"] == pooled.plan.scales.median_step_m
    assert of_each[3]["memory"]["encoding_range_m"] is None and of_homes[3]["memory"]["encoding_range_m"] is None
    assert of_pooled[3]["card"]["pooling"] == "hierarchical" and of_each[3]["card"]["pooling"] == "individual"


def test_priors_in_words_are_in_the_units_of_the_table(of_pooled, of_homes, pooled):
    words = of_pooled[3]["card"]["priors"]
    assert words["step_scale"] == f"log-normal (median {pooled.plan.scales.median_step_m:.4g}, spread 0.8 m)"
    assert words["working_decay"] == "half an interval + log-normal (median 10, spread 0.7 h)"
    assert words["reference_decay"].startswith("working_decay + log-normal (median 500")
    assert words["selection spread"] == "half-normal (scale 0.5)" and words["covariate"] == "normal (mean 0, sd 0.5)"
    assert not any(name.endswith("spread") for name in of_homes[3]["card"]["priors"])


# --- quadrature ------------------------------------------------------------------------------------------------------


def test_shift_is_what_reweighting_by_the_difference_does_to_the_mean():
    rng = np.random.default_rng(4)
    difference = 0.05 * rng.normal(size=50_000)
    draws = 3 + 2 * (0.6 * difference / 0.05 + 0.8 * rng.normal(size=difference.size))
    weight = np.exp(difference)
    moved = (weight * draws).sum() / weight.sum() - draws.mean()
    # First order: what is left out is of the order of the difference's variance, 0.0025.
    assert shift(draws, difference) == pytest.approx(moved / draws.std(), abs=5e-3)
    assert shift(draws, difference) == pytest.approx(0.03, abs=4 * 0.05 / np.sqrt(50_000))  # corr × sd = 0.6 × 0.05
    assert shift(np.ones(5), difference[:5]) == 0.0


def test_shift_of_each_row_is_read_at_the_draws_of_its_own_animal(of_each):
    derived, _, _, own = of_each
    one = derived[2]
    draws = one.sites["recall_half"][:, ::2, 0].ravel()
    expected = shift(draws, one.extras["more_nodes_difference"].ravel())
    assert own["memory"]["quadrature_shift"][f"recall_half[{VIXEN}]"] == pytest.approx(expected)


# --- steps that depend ---------------------------------------------------------------------------------------------


def walked(plan, length, time):
    """The plan with one animal, whose steps have these lengths [km] and times [h]."""
    one = plan.tracks.animals[2]
    steps = one.steps._replace(length=length, time=time, short=np.zeros(length.size, bool))
    own = replace(one, steps=steps, hour=time % 24)
    return replace(plan, tracks=replace(plan.tracks, animals=[own]))


def made_law(shape, scale_m):
    values = {"step_shape": shape, "step_scale": scale_m}
    return xr.Dataset(
        {name: ((*LEAD, "animal"), np.full((1, 2, 1), value)) for name, value in values.items()}, {"animal": [VIXEN]}
    )


@pytest.mark.parametrize("offset", [0.0, 0.5])
def test_autocorrelation_of_steps_is_that_of_their_normal_quantiles(roaming, offset):
    rng, phi, n = np.random.default_rng(5), 0.6, 4000
    state = np.zeros(n)
    for k in range(1, n):
        state[k] = phi * state[k - 1] + np.sqrt(1 - phi**2) * rng.normal()
    length = stats.gamma(1.4, scale=0.2).ppf(stats.norm.cdf(state))
    time = offset + np.arange(n) + rng.uniform(-0.05, 0.05, n)
    found = step_autocorrelation(walked(roaming.plan, length, time), made_law(1.4, 200.0))[VIXEN]
    # Bartlett's standard error of an AR(1)'s first autocorrelation, √((1 − φ²)/n); far off, √((1 + φ²)/(1 − φ²)/n).
    assert found["lag_1"] == pytest.approx(phi, abs=4 * np.sqrt((1 - phi**2) / n))
    assert found["day"] == pytest.approx(0, abs=4 * np.sqrt((1 + phi**2) / (1 - phi**2) / n))


def test_pairs_of_steps_over_a_gap_do_not_count(roaming):
    rng, n = np.random.default_rng(6), 1000
    half = rng.normal(size=n // 2)
    state = np.repeat(half, 2)  # steps of a pair alike, pairs independent, a gap of 90 minutes between pairs
    time = np.arange(n) + 0.5 * (np.arange(n) // 2)
    length = stats.gamma(1.4, scale=0.2).ppf(stats.norm.cdf(state))
    found = step_autocorrelation(walked(roaming.plan, length, time), made_law(1.4, 200.0))[VIXEN]
    assert found["lag_1"] == pytest.approx(1.0)


def test_figures_that_cannot_be_told_are_left_out(roaming):
    time = np.arange(29.0)
    length = np.random.default_rng(1).gamma(1.4, 0.2, 29)
    assert step_autocorrelation(walked(roaming.plan, length, time), made_law(1.4, 200.0)) == {VIXEN: {}}


def test_rhythm_that_the_model_follows_is_no_autocorrelation(roaming):
    rng, n = np.random.default_rng(7), 3000
    time = np.arange(n) + 0.0
    wave = np.stack([np.cos(k * np.pi * time / 12) if part == 0 else np.sin(k * np.pi * time / 12)
                     for k in (1, 2) for part in (0, 1)], 1)  # fmt: skip
    rhythm = np.array([0.8, -0.3, 0.2, 0.1])
    length = stats.gamma(1.4).ppf(rng.uniform(size=n)) * 0.2 * np.exp(wave @ rhythm)
    plan, law = walked(roaming.plan, length, time), made_law(*(fit_gamma(length) * np.array([1, 1000])))
    assert step_autocorrelation(plan, law)[VIXEN]["day"] > 0.2
    everyone = xr.concat([made_law(1.4, 200.0).assign_coords(animal=[name]) for name in ANIMALS], "animal")
    told = everyone.assign(
        step_rhythm=((*LEAD, "harmonic", "animal"), np.broadcast_to(rhythm[:, None] * [0, 0, 1, 0], (1, 2, 4, 4)))
    )  # each animal fitted alone: the third of four is the one that is looked at
    assert abs(step_autocorrelation(plan, told)[VIXEN]["day"]) < 4 / np.sqrt(n)


# --- warnings --------------------------------------------------------------------------------------------------------


def said(plan, rows=(), shifts=None, lags=None, lost=0):
    table = pd.DataFrame(rows, columns=["parameter", "unit", "upper"])
    facts = {"nodes": 64, "without_nodes": [lost, 0, 0, 0]}
    return said_of_memory(plan, table, shifts or {}, lags or {}, facts)


def test_nothing_is_said_where_all_is_well(pooled):
    rows = [("reference_decay", "h", 100.0), ("reference_decay spread", "log scale", 1e4),
            ("reference_decay[new animal]", "h", 1e5), (f"reference_decay[{VIXEN}]", "h", 130.0)]  # fmt: skip
    assert said(pooled.plan, rows, {"step_shape": 0.09}, {VIXEN: {"lag_1": 0.09, "day": 0.05}}) == []


def test_decay_beyond_the_record_is_said_of_the_animal_whose_record_it_is(pooled):
    record = {one.name: one.record_h for one in pooled.plan.tracks.animals}
    between = (record[VIXEN] + record[TOM]) / 2  # beyond the one's record, within the other's
    rows = [(f"reference_decay[{name}]", "h", between) for name in (VIXEN, TOM)]
    (sentence,) = said(pooled.plan, rows)
    assert sentence.startswith(f"The interval of reference_decay[vixen] reaches {between:.0f} h")
    assert f"beyond the record of {record[VIXEN]:.0f} h" in sentence and "prior" in sentence
    (sentence,) = said(pooled.plan, [("reference_decay", "h", 1e4), *rows])
    assert sentence.startswith("The interval of reference_decay (and 1 more) reaches 10000 h")


def test_runs_of_long_and_short_steps_are_said_with_how_much_they_matter(pooled, roaming):
    lags = {VIXEN: {"lag_1": 0.25, "day": 0.0}, TOM: {"lag_1": 0.05}}
    (sentence,) = said(pooled.plan, lags=lags)
    # √((1 + r)/(1 − r)) is the ratio of standard errors of an AR(1)'s mean: 1.29 at r = 0.25
    assert "in runs in 1 animal(s)" in sentence and "0.25 (vixen)" in sentence and "about 1.3 times" in sentence
    assert "those of memory among them" in sentence
    assert "those of memory" not in said(roaming.plan, lags=lags)[0]


def test_rhythm_of_the_day_is_said_where_the_card_does_not_follow_it(pooled, roaming):
    lags = {VIXEN: {"lag_1": 0.0, "day": 0.2}}
    assert pooled.plan.spec.rhythm and said(pooled.plan, lags=lags) == []
    (sentence,) = said(roaming.plan, lags=lags)
    assert 'correlation a day apart up to 0.20, vixen): add vary = ["step_length"]' in sentence


def test_quadrature_that_shows_is_said_with_more_nodes(pooled):
    (sentence,) = said(pooled.plan, shifts={"step_shape": -0.31, "step_scale": 0.12, "recall_half": 0.01})
    assert "would move 2 parameter(s)" in sentence and "most step_shape by -0.31" in sentence
    assert "set nodes = 256" in sentence


def test_steps_without_ground_in_reach_are_said(pooled):
    (sentence,) = said(pooled.plan, lost=3)
    assert sentence.startswith("3 step(s) were set aside")


def test_parameter_dataset_reads_sites_of_an_empty_hierarchy(roaming):
    # Without memory there are no decays to add up, pooled or not.
    sites = {name: np.ones((1, 3, 1)) for name in KERNEL} | {"selection": np.ones((1, 3, 1, 1))}
    data = parameter_dataset(roaming.task.spec, sites, 0.5)
    assert set(data.data_vars) == {*KERNEL, "selection"}
    assert (data["step_scale"] == 1000).all()
