"""Groups that come and go: each epoch has the steady state of the groups that are there, worked by hand."""

import dataclasses

import jax
import jax.numpy as jnp
import numpy as np
import pandas as pd
import pytest
from inference._tiny_study import HOMES, NORTH, SOUTH_GROUP, UNWATCHED, fixes_table, groups_table, write_study
from inference._twin import Ground, fix_densities, gibbs_law, half_normal, log_normal, positive, solitary
from inference.conftest import build
from jax.flatten_util import ravel_pytree

from bayesrange.inference import log_likelihood, make_data
from bayesrange.inference._range_model import RangeModel
from bayesrange.spaceuse import SOLVED

COMES, GOES = pd.Timestamp("2031-03-05T02:00Z"), pd.Timestamp("2031-03-11T02:00Z")  # fixes: every 4 h for 396 h
WHO = [(NORTH, UNWATCHED), (NORTH, SOUTH_GROUP, UNWATCHED), (NORTH, SOUTH_GROUP)]
HOURS = [98, 144, 154]
POINT = {"localising": np.log(5.0), "avoidance": np.log(1.3)}


@pytest.fixture(scope="module")
def changing(tmp_path_factory):
    """The second group comes, the third (without fixes) goes."""
    groups = groups_table().assign(**{"from": ["", COMES.isoformat(), ""], "until": ["", "", GOES.isoformat()]})
    fixes = fixes_table()
    early = (fixes["group"] == SOUTH_GROUP) & (pd.to_datetime(fixes["time"]) < COMES)
    model = {"card": "avoidance", "layers": []}
    return build(write_study(tmp_path_factory.mktemp("changing"), fixes[~early], groups, model=model))


@pytest.fixture(scope="module")
def twin(changing, homes_km):
    """Ground, and densities (epochs, groups, cells) with the groups that are not there left out of the model."""
    ground = Ground.of(changing.study, [])
    area, names = ground.area.sum(), list(HOMES)
    there = np.array([[name in who for name in names] for who in WHO])
    animals = np.array([2.0, 3.0, 4.0])
    mean_animals = np.array(HOURS) @ (there @ animals) / sum(HOURS)
    density = np.zeros((3, 3, ground.area.size))
    for k, own in enumerate(there):
        potential = solitary(ground, np.full(own.sum(), 5.0), np.zeros((0, own.sum())), homes_km[own], 0.05)
        marking = animals[own] * area / mean_animals
        density[k, own] = gibbs_law(ground, potential, np.full(own.sum(), 1.3), 0.0, marking, 0.2)
    return ground, density


def test_scales_count_who_is_there_on_the_average(changing):
    area = changing.study.grid.habitable_km2
    animals = (98 * (2 + 4) + 144 * (2 + 3 + 4) + 154 * (2 + 3)) / 396
    assert changing.scales.a0_km2 == pytest.approx(area / animals)
    groups = (98 * 2 + 144 * 3 + 154 * 2) / 396
    assert changing.scales.home_length_km == pytest.approx(np.sqrt(area / groups))


def test_potential_is_minus_the_log_posterior_worked_by_hand(changing, twin):
    ground, density = twin
    length = np.sqrt(ground.area.sum() / ((98 * 2 + 144 * 3 + 154 * 2) / 396))
    log_prior = positive(log_normal(8 / length, 0.8), POINT["localising"])
    log_prior += positive(half_normal(1.0), POINT["avoidance"])
    fixes, at = changing.study.fixes, np.zeros(len(changing.study.fixes))
    epoch = (fixes["time"] >= COMES).to_numpy(int) + (fixes["time"] >= GOES).to_numpy(int)
    owner = fixes["group"].map({name: i for i, name in enumerate(HOMES)}).to_numpy()
    for k in range(3):
        own = epoch == k
        assert own.sum() > 20
        x, y, error = (fixes[column].to_numpy(float)[own] for column in ("x", "y", "error_m"))
        at[own] = fix_densities(ground, density[k], x, y, owner[own], error)
    value, _ = changing.program.value_and_gradient(ravel_pytree(POINT)[0], changing.data)
    # The solver stops at a relative 1e-10 in the scent, the twin at 1e-13; some 100 effective fixes add up.
    assert float(value) == pytest.approx(-(log_prior + (changing.weight * np.log(at)).sum()), rel=1e-8)


def test_gradient_agrees_with_central_differences(changing):
    z, step = ravel_pytree(POINT)[0], 1e-4

    def value(at):
        return float(changing.program.value_and_gradient(at, changing.data)[0])

    slopes = [(value(z + move) - value(z - move)) / (2 * step) for move in step * jnp.eye(z.size)]
    # Truncation step²/6 × third derivative, and 1e-8 of solver error over the step.
    np.testing.assert_allclose(changing.program.value_and_gradient(z, changing.data)[1], slopes, rtol=1e-5, atol=1e-4)


def test_reported_density_is_the_mean_over_the_time_in_which_the_group_is_there(changing, twin):
    _, density = twin
    parameters = changing.program.parameters(ravel_pytree(POINT)[0], changing.data)
    _, summed = changing.program.derive(ravel_pytree(POINT)[0], changing.data)
    found = np.asarray(summed["density"])[:, changing.study.grid.inside]
    hours = np.array(HOURS)[:, None] * (density.sum(axis=2) > 0)
    np.testing.assert_allclose(found, (hours[:, :, None] * density).sum(0) / hours.sum(0)[:, None], rtol=1e-8)
    area = np.asarray(changing.data.setting.domain.area)
    np.testing.assert_allclose((np.asarray(summed["density"]) * area).sum((1, 2)), 1, rtol=1e-12)
    assert np.abs(density[0, 0] - density[1, 0]).max() > 0.01 * density.max()  # who is there does matter
    assert not RangeModel(changing.spec).other_state(parameters, changing.data)


def test_both_solvers_agree_in_value_and_slope(changing):
    parameters = changing.program.parameters(ravel_pytree(POINT)[0], changing.data)

    def total(parameters, solver):
        spec = dataclasses.replace(changing.spec, solver=solver)
        terms, solution = log_likelihood(spec, changing.data, parameters)
        return terms.sum(), solution.result

    both = jax.jit(jax.value_and_grad(total, has_aux=True), static_argnums=1)
    (one, code), slope = both(parameters, "gibbs")
    (other, other_code), other_slope = both(parameters, "flux")
    assert int(code) == int(other_code) == SOLVED
    assert float(one) == pytest.approx(float(other), rel=1e-8)
    # The flux solver's gradient is good to 1e-5 (its docs); retreat is not among the terms of `gibbs`.
    for own, theirs in zip(slope._replace(retreat=None), other_slope._replace(retreat=None), strict=True):
        if own is not None and own.size:
            np.testing.assert_allclose(theirs, own, rtol=1e-4, atol=1e-4 * float(jnp.abs(own).max()))


def test_cards_without_scent_have_one_steady_state(changing):
    spec = dataclasses.replace(changing.spec, coupled=False)
    data = make_data(changing.study, changing.card, spec, changing.scales, changing.weight)
    assert data.share is None and data.reading.group.max() == 1
