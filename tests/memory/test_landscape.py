import jax.numpy as jnp
import numpy as np
import pyproj
import pytest

from bayesrange.memory import Landscape, allowed, read_layers
from bayesrange.study import Grid

SUB = 8
NY, NX, CELL, WEST, SOUTH = 9, 13, 0.1, 3.7, -0.4
ULP = np.finfo(float).eps


@pytest.fixture(scope="module")
def ground():
    """The study's grid and the landscape of the same numbers: a slanted edge, a hole smaller than a cell, an islet."""
    at_y, at_x = ((np.arange(k * SUB) + 0.5) / SUB for k in (NY, NX))
    x, y = np.meshgrid(at_x, at_y)
    land = (y < 8.3 - 0.35 * x) & (x > 0.6)
    land &= ~((abs(x - 3.5) < 1.2) & (abs(y - 3.5) < 0.9))
    land |= (x > 11.4) & (y > 8.2)
    habitable = land.reshape(NY, SUB, NX, SUB).mean((1, 3))
    grid = Grid(WEST, SOUTH, CELL, pyproj.CRS(32631), habitable, np.zeros((NY, NX)), land)
    layers = np.where(grid.inside, np.random.default_rng(4).normal(size=(3, NY, NX)), 0.0)
    landscape = Landscape(
        jnp.asarray(WEST), jnp.asarray(SOUTH), jnp.asarray(CELL),
        jnp.asarray(layers), jnp.asarray(grid.inside), jnp.asarray(land),
    )  # fmt: skip
    return grid, landscape


@pytest.fixture(scope="module")
def places(ground):
    """At random, far outside, at every cell's centre and corners, on the outer edges."""
    grid, _ = ground
    rng = np.random.default_rng(5)
    x, y = rng.uniform(WEST - 0.3, WEST + 1.6, 4000), rng.uniform(SOUTH - 0.3, SOUTH + 1.2, 4000)
    centres = np.meshgrid(grid.x_m, grid.y_m)
    corners = np.meshgrid(WEST + CELL * np.arange(NX + 1), SOUTH + CELL * np.arange(NY + 1))
    far = np.array([-1e5, 1e5, WEST + 0.5]), np.array([SOUTH + 0.4, 1e5, -1e5])
    return tuple(np.concatenate([a, *(p[i].ravel() for p in (centres, corners)), far[i]]) for i, a in enumerate((x, y)))


def test_reads_layers_and_ground_as_the_study_does(ground, places):
    grid, landscape = ground
    x, y = places
    rows, columns, weights = grid.bilinear(x, y)
    expected = (np.asarray(landscape.layers)[:, rows, columns] * weights).sum(2).T
    # the same eight products; the renormalisation multiplies where the study divides: a few ulps of values up to 4,
    # more where only a corner of weight 1e-13 (a rounded centre) is inside
    np.testing.assert_allclose(read_layers(landscape, jnp.asarray(x), jnp.asarray(y)), expected, atol=64 * ULP)
    np.testing.assert_array_equal(allowed(landscape, jnp.asarray(x), jnp.asarray(y)), grid.habitable_at(x, y))
    assert 0.2 < grid.habitable_at(x, y).mean() < 0.8  # both kinds are among the places


def test_a_layer_of_ones_is_1_on_all_habitable_ground_and_0_far_from_it(ground):
    grid, landscape = ground
    ones = landscape._replace(layers=jnp.asarray(grid.inside, float)[None])
    rng = np.random.default_rng(6)
    x, y = (jnp.asarray(rng.uniform(a - 0.5, a + 2.0, 3000)) for a in (WEST, SOUTH))
    read = np.asarray(read_layers(ones, x, y))[:, 0]
    # weights that sum to 1 within rounding
    np.testing.assert_allclose(read[np.asarray(allowed(landscape, x, y))], 1.0, atol=4 * ULP)
    far = np.asarray((x > WEST + (NX + 0.5) * CELL) | (y > SOUTH + (NY + 0.5) * CELL))
    assert far.sum() > 100 and (read[far] == 0).all()


def test_a_plane_is_read_exactly_between_inside_cells(ground):
    grid, landscape = ground
    plane = 2.0 - 3.0 * (grid.x_m - WEST)[None] + 0.7 * (grid.y_m - SOUTH)[:, None]
    whole = landscape._replace(
        layers=jnp.asarray(plane)[None], inside=jnp.ones((NY, NX), bool), sub_cells=jnp.ones((NY * SUB, NX * SUB), bool)
    )
    rng = np.random.default_rng(7)
    x = rng.uniform(grid.x_m[0], grid.x_m[-1], (40, 5))
    y = rng.uniform(grid.y_m[0], grid.y_m[-1], (40, 5))
    read = read_layers(whole, jnp.asarray(x), jnp.asarray(y))
    assert read.shape == (40, 5, 1)
    np.testing.assert_allclose(read[..., 0], 2.0 - 3.0 * (x - WEST) + 0.7 * (y - SOUTH), atol=64 * ULP)


def test_no_layers_and_places_without_a_number_are_read(ground):
    _, landscape = ground
    none = landscape._replace(layers=jnp.zeros((0, NY, NX)))
    assert read_layers(none, jnp.zeros((2, 3)), jnp.zeros((2, 3))).shape == (2, 3, 0)
    assert not allowed(landscape, jnp.asarray([np.nan]), jnp.asarray([SOUTH + 0.2]))[0]
