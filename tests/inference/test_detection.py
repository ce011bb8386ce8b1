"""Fixes that succeed by place: the density of a fix is u d / ∫ u d, and the range is that of u."""

import jax
import jax.numpy as jnp
import numpy as np
import pytest
import rasterio
from inference._tiny_study import CRS, SOUTH, WEST, fixes_table, groups_table, write_study
from inference._twin import Ground, fix_densities, solitary
from rasterio.transform import from_origin
from scipy.optimize import minimize_scalar

from bayesrange.inference import as_arrays, find_card, log_likelihood, make_data, make_scales, make_spec, read_card
from bayesrange.spaceuse import Parameters
from bayesrange.study import read_study

SHIFT, TRUTH = -1.5, 1.0
MODEL = {"card": "resources", "layers": ["worms"], "autocorrelation": "ignored"}
ONE = groups_table().iloc[:1]


def layer_on_cells(file, values):
    """Write values (row 0 south) on the study's own cells."""
    profile = {"crs": CRS, "transform": from_origin(WEST, SOUTH + 2400, 100, 100), "count": 1, "dtype": "float64"}
    with rasterio.open(file, "w", driver="GTiff", height=24, width=24, **profile) as target:
        target.write(values[::-1][None])


def build(folder, fixes, chance=None, **model):
    """Study, spec and data; with `chance` (24, 24) as detection layer."""
    file = write_study(folder, fixes, ONE, model=MODEL | model)
    if chance is not None:
        layer_on_cells(folder / "success.tif", chance)
        text = file.read_text().replace('file = "fixes.csv"', 'file = "fixes.csv"\ndetection = "success"')
        file.write_text(text + '\n[layers.success]\nfile = "success.tif"\n')
    study, card = read_study(file), read_card(find_card("resources"))
    spec = make_spec(study, card)
    data = make_data(study, card, spec, make_scales(study, list(spec.layers)), np.ones(len(study.fixes)))
    return study, spec, as_arrays(data)


def with_response(gamma, data):
    one = jnp.zeros(1)
    return Parameters(one, one, one, jnp.reshape(gamma, (1, 1)), jnp.zeros(()), jnp.asarray(data.home))


def standardised(folder):
    """The layer h as the model has it, and a chance exp(SHIFT (h − most)): u d is then the law of another response."""
    study, _, data = build(folder, fixes_table().iloc[:100])
    layer = np.asarray(data.setting.layers[0])
    exponent = SHIFT * layer
    return study, layer, np.exp(exponent - exponent[study.grid.inside].max())


@pytest.fixture(scope="module")
def ground(tmp_path_factory):
    return standardised(tmp_path_factory.mktemp("ground"))


def test_a_chance_that_is_a_response_shifts_the_response(ground, tmp_path):
    _, _, chance = ground
    fixes = fixes_table().iloc[:100].assign(error_m=lambda t: np.where(t.index % 3 == 0, 30.0, 0.0))
    _, spec, seen = build(tmp_path / "with", fixes, chance)
    _, _, plain = build(tmp_path / "without", fixes)
    for gamma in (-0.4, 0.9):
        # u d ∝ exp((γ + SHIFT) h): an identity
        one, solution = log_likelihood(spec, seen, with_response(gamma, seen))
        other, _ = log_likelihood(spec, plain, with_response(gamma + SHIFT, plain))
        np.testing.assert_allclose(one, other, rtol=1e-12)
        same = log_likelihood(spec, plain, with_response(gamma, plain))[1]
        np.testing.assert_array_equal(solution.log_density, same.log_density)  # what is reported stays u


def test_log_density_of_a_fix_is_that_of_the_twin(ground, tmp_path):
    study, _, _ = ground
    chance = np.random.default_rng(3).uniform(0.05, 1.0, study.grid.shape)
    fixes = fixes_table().iloc[:100]
    inner = fixes["x"].between(WEST + 250, WEST + 1500) & fixes["y"].between(SOUTH + 250, SOUTH + 2150)
    study, spec, data = build(
        tmp_path, fixes.assign(error_m=np.where(inner & (fixes.index % 4 == 0), 30.0, 0.0)), chance
    )
    terms, _ = log_likelihood(spec, data, with_response(0.7, data))
    cells = Ground.of(study, ["worms"])
    density = np.exp(solitary(cells, np.zeros(1), np.full((1, 1), 0.7), np.zeros((1, 2)), 0.05))
    density *= chance[study.grid.inside]
    x, y, error = (study.fixes[c].to_numpy(float) for c in ("x", "y", "error_m"))
    at = fix_densities(cells, density, x, y, np.zeros(len(x), int), error)
    np.testing.assert_allclose(terms[: len(x)], np.log(at), rtol=1e-11)


def test_truth_is_found_again_with_the_layer_and_missed_without(ground, tmp_path):
    study, layer, _ = ground
    rng = np.random.default_rng(8)
    inside = study.grid.inside
    chance = np.where(inside, 1 / (1 + np.exp(1.5 * layer)), 1.0)  # fewer fixes where there are more worms
    use = np.where(inside, np.exp(TRUTH * layer), 0.0) * study.grid.habitable
    cell = rng.choice(use.size, 6000, p=(use / use.sum()).ravel())
    cell = cell[rng.uniform(size=cell.size) < chance.ravel()[cell]]
    row, column = np.unravel_index(cell, use.shape)
    shift = np.where(study.grid.habitable[row, column] < 1, -1, 0)  # cells cut by the south-eastern edge
    x, y = study.grid.x_m[column] + 49 * shift, study.grid.y_m[row] - 49 * shift
    time = [f"{np.datetime64('2031-03-01T00:00') + np.timedelta64(k, 'h')}Z" for k in range(cell.size)]
    fixes = fixes_table().iloc[np.zeros(cell.size, int)].assign(time=time, x=x, y=y)
    found, width = {}, {}
    for name, own in (("with", chance), ("without", None)):
        _, spec, data = build(tmp_path / name, fixes, own, reading="cell")
        minus = jax.jit(
            lambda gamma, spec=spec, data=data: -log_likelihood(spec, data, with_response(gamma, data))[0].sum()
        )
        found[name] = minimize_scalar(lambda gamma: float(minus(gamma)), bounds=(-3, 3), method="bounded").x
        curvature = (minus(found[name] + 0.01) - 2 * minus(found[name]) + minus(found[name] - 0.01)) / 1e-4
        width[name] = 1 / np.sqrt(float(curvature))
    # 3.3 standard errors, as for every recovery of a single data set; the seed was fixed before the first look.
    assert abs(found["with"] - TRUTH) < 3.3 * width["with"]
    assert TRUTH - found["without"] > 8 * width["without"]
