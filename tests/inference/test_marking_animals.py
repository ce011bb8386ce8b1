"""An uncertain number of marking animals is sampled: its log posterior, its rows, and what stays frozen."""

import jax.numpy as jnp
import numpy as np
import pytest
from inference._tiny_study import HOMES, NORTH, SOUTH_GROUP, UNWATCHED, groups_table, write_study
from inference._twin import Ground, between, fix_densities, gibbs_law, half_normal, log_normal, positive, solitary
from inference.conftest import build
from jax.flatten_util import ravel_pytree

from bayesrange.inference import find_card, make_spec, read_card
from bayesrange.inference._assemble import build_tree, parameter_dataset
from bayesrange.inference._gather import Derived
from bayesrange.inference._summary import rows
from bayesrange.study import read_study

RANGES = {SOUTH_GROUP: (2.0, 5.0), UNWATCHED: (1.0, 4.0)}
MODEL = {"card": "avoidance", "layers": []}


def uncertain_groups():
    groups = groups_table().astype({"animals": object})
    for group, (low, high) in RANGES.items():
        groups.loc[groups["group"] == group, "animals"] = f"{low:.0f}-{high:.0f}"
    return groups


@pytest.fixture(scope="module")
def uncertain(tmp_path_factory):
    return build(write_study(tmp_path_factory.mktemp("uncertain"), groups=uncertain_groups(), model=MODEL))


@pytest.fixture(scope="module")
def ground(uncertain):
    return Ground.of(uncertain.study, [])


def twin_potential(model, ground, z, homes_km):
    """−log posterior by hand; A₀ counts 2 animals and the middles 3.5 and 2.5."""
    low, high = np.array(list(RANGES.values())).T
    log_prior, animals = between(low, high, z["animals"])
    length = np.sqrt(ground.area.sum() / 3)
    log_prior += positive(log_normal(8 / length, 0.8), z["localising"]) + positive(half_normal(1.0), z["avoidance"])
    marking = np.array([2.0, *animals]) * ground.area.sum() / 8
    potential = solitary(ground, np.full(3, np.exp(z["localising"])), np.zeros((0, 3)), homes_km, 0.05)
    alpha = np.full(3, np.exp(z["avoidance"]))
    density = gibbs_law(ground, potential, alpha, 0.0, marking, model.scales.perception_m / 1000)
    fixes = model.study.fixes
    owner = fixes["group"].map({name: i for i, name in enumerate(HOMES)}).to_numpy()
    at = fix_densities(ground, density, fixes["x"].to_numpy(), fixes["y"].to_numpy(), owner, fixes["error_m"])
    return -(log_prior + (model.weight * np.log(at)).sum())


POINTS = [
    {"localising": np.log(6.0), "avoidance": np.log(0.8), "animals": np.array([-1.0, 0.5])},
    {"localising": np.log(5.0), "avoidance": np.log(1.4), "animals": np.array([2.0, -0.3])},
]


@pytest.mark.parametrize("point", POINTS)
def test_potential_is_minus_the_log_posterior_worked_by_hand(uncertain, ground, homes_km, point):
    value, _ = uncertain.program.value_and_gradient(ravel_pytree(point)[0], uncertain.data)
    # The solver stops at a relative 1e-10 in the scent, the twin at 1e-13; some 100 effective fixes add up.
    assert float(value) == pytest.approx(twin_potential(uncertain, ground, point, homes_km), rel=1e-8)


def test_gradient_agrees_with_central_differences(uncertain):
    z, step = ravel_pytree(POINTS[0])[0], 1e-4

    def value(at):
        return float(uncertain.program.value_and_gradient(at, uncertain.data)[0])

    moves = step * jnp.eye(z.size)
    slopes = [(value(z + move) - value(z - move)) / (2 * step) for move in moves]
    # Truncation step²/6 × third derivative, and 1e-8 of solver error over the step.
    gradient = np.asarray(uncertain.program.value_and_gradient(z, uncertain.data)[1])
    np.testing.assert_allclose(gradient, slopes, rtol=1e-5, atol=1e-4)
    assert np.abs(gradient).min() > 1e-2  # the numbers of animals do matter here


def test_scales_count_the_middles_and_the_search_begins_there(uncertain):
    assert uncertain.scales.a0_km2 == pytest.approx(uncertain.study.grid.habitable_km2 / 8)
    guess = ravel_pytree(uncertain.program.first_guess(uncertain.data))[0]
    values = uncertain.program.constrain(guess[None], uncertain.data)
    np.testing.assert_allclose(values["animals"][0], [3.5, 2.5])
    assert np.isfinite(uncertain.program.value_and_gradient(guess, uncertain.data)[0])


def test_draws_have_a_row_a_group_in_table_and_file(uncertain):
    rng, lead = np.random.default_rng(2), (2, 30)
    sites = {"localising": rng.gamma(3, size=lead), "avoidance": rng.gamma(1, size=lead)}
    sites["animals"] = rng.uniform(2, 4, size=(*lead, 2))
    posterior = parameter_dataset(uncertain.spec, sites)
    assert posterior["animals"].dims == ("chain", "draw", "animals_group")
    found = rows(uncertain.spec, uncertain.scales, posterior, posterior, 0)
    names = [row.name for row in found]
    assert names[-2:] == [f"animals[{SOUTH_GROUP}]", f"animals[{UNWATCHED}]"]
    np.testing.assert_array_equal(found[-1].draws, sites["animals"][:, :, 1])
    study, groups, shape = uncertain.study, 3, uncertain.study.grid.shape
    means = {"density": np.ones((groups, *shape)), "density_squared": np.ones((groups, *shape))}
    means["inside"] = np.ones((2, groups, *shape))
    kept = {"area_km2": np.ones((*lead, 2, groups)), "overlap": np.ones((*lead, groups, groups))}
    kept["log_likelihood"] = np.zeros((*lead, len(study.fixes)))
    derived = Derived(sites, {"potential": np.zeros(lead), "gradients": np.ones(lead)}, kept, means, {}, 0, 0, 0, [])
    prior = {name: value[0] for name, value in sites.items()}
    constant = build_tree(study, uncertain.spec, derived, prior, uncertain.weight)["constant_data"]
    assert constant["animals"].sel(group=NORTH) == 2 and constant["animals"].sel(group=UNWATCHED) == 2.5
    assert constant["animals_low"].values.tolist() == [2, 2, 1]
    assert constant["animals_high"].values.tolist() == [2, 5, 4]


def test_numbers_are_not_sampled_where_nobody_smells_them(tmp_path):
    study = read_study(write_study(tmp_path, groups=uncertain_groups(), model={"card": "localising", "layers": []}))
    assert make_spec(study, read_card(find_card("localising"))).counted == ()
