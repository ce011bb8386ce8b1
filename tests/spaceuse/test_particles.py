"""The solver against interacting particles that share no code with it (case_studies/marram_heath/README.md).

Groups of particles walk with the drift, and the histogram of the others makes their scent, smoothed with the same
perception distance; truth.json holds their parameters. Compared are shares of use by the Bhattacharyya coefficient
Σ √(a_c b_c). Cells with fewer than 50 particle positions tell more about chance than about the model: they are taken
together as one class, which holds 0.4 to 0.8 % of the mass.
"""

import json
from pathlib import Path

import jax.numpy as jnp
import numpy as np
import pytest
from spaceuse._grounds import make_parameters, solve

from bayesrange.spaceuse import SOLVED, Setting, make_domain
from bayesrange.study import read_study

CASE = Path(__file__).resolve().parents[2] / "case_studies" / "marram_heath"
LEAST = 50


@pytest.fixture(scope="module")
def truth():
    return json.loads((CASE / "truth.json").read_text(encoding="utf-8"))


@pytest.fixture(scope="module")
def particles():
    with np.load(CASE / "particles.npz") as found:
        return dict(found)


@pytest.fixture(scope="module")
def heath(truth, particles):
    """Setting and homes [km] of the committed study, at the scales of the simulation."""
    study = read_study(CASE / "study")
    grid, scales = study.grid, truth["scales"]
    assert list(study.groups["group"]) == list(particles["group"])
    np.testing.assert_allclose(grid.x_m, particles["x_m"])
    np.testing.assert_allclose(grid.y_m, particles["y_m"])
    domain = make_domain(
        grid.x_m / 1000, grid.y_m / 1000, grid.habitable * (grid.cell_m / 1000) ** 2, scales["perception_m"] / 1000
    )
    worms = scales["layers"]["earthworms"]
    layer = np.where(grid.inside, (study.layers["earthworms"].values - worms["mean"]) / worms["sd"], 0.0)
    marking = study.groups["animals"].to_numpy(float) * scales["a0_km2"]
    setting = Setting(domain, jnp.asarray(layer[None]), jnp.asarray(marking), jnp.asarray(scales["eps_m"] / 1000))
    return setting, study.groups[["x", "y"]].to_numpy(float) / 1000


def overlap_with_particles(heath, truth, particles, **changed):
    """Bhattacharyya coefficient of each group between solver and particles."""
    setting, home = heath
    values = {name: row["value"] for name, row in truth["parameters"].items()} | changed
    parameters = make_parameters(home, values["localising"], values["avoidance"], [values["resource[earthworms]"]])
    solution = solve(parameters, setting)
    assert int(solution.result) == SOLVED
    mass = np.asarray(solution.density) * np.asarray(setting.domain.area)
    found = []
    for points, own in zip(particles["points"], mass, strict=True):
        often, share = points >= LEAST, points / points.sum()
        rest = np.sqrt(share[~often].sum() * own[~often].sum())
        found.append(np.sqrt(share[often] * own[often]).sum() + rest)
    return np.array(found)


def test_cells_that_are_compared_hold_nearly_all_particles(particles):
    for points in particles["points"]:
        assert (points >= LEAST).sum() > 800
        assert points[points < LEAST].sum() / points.sum() < 0.01


def test_solver_and_particles_agree(heath, truth, particles):
    overlap = overlap_with_particles(heath, truth, particles)
    assert (overlap > 0.99).all()  # the project's target
    # What is left: Monte Carlo noise, 1,000 cells / (8 × 2.4 million positions) = 5e-5 if they were independent (each
    # particle is seen 600 times, some five in a row near each other), and steps of 14 m in cells of 100 m.
    assert (overlap > 0.999).all(), overlap


def test_without_avoidance_they_do_not(heath, truth, particles):
    with_avoidance = overlap_with_particles(heath, truth, particles)
    without = overlap_with_particles(heath, truth, particles, avoidance=0.0)
    assert without.min() < 0.99
    # for every group most of the departure from 1 is gone with the true value
    assert ((1 - without) > 5 * (1 - with_avoidance)).all()


@pytest.mark.parametrize(
    "changed", [{"avoidance": 0.15}, {"avoidance": 0.6}, {"localising": 4.6}, {"resource[earthworms]": 0.35}]
)
def test_other_parameters_fit_the_particles_worse(heath, truth, particles, changed):
    usual, other = (overlap_with_particles(heath, truth, particles, **values) for values in ({}, changed))
    assert (1 - other).mean() > 3 * (1 - usual).mean()
