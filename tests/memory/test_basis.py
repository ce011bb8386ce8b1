"""The bases hold every function they are for, and their columns are orthonormal and nested."""

import jax
import jax.numpy as jnp
import numpy as np
import pytest

from bayesrange.memory import (
    decay_basis,
    decay_coefficients,
    fixed_range,
    no_memory,
    range_basis,
    range_coefficients,
)
from bayesrange.memory._basis import decay_columns, range_columns  # the table's side of the same columns


def test_columns_are_orthonormal_and_nested():
    for make, arguments in ((decay_basis, (1.0, 2000.0, 0.5, 15000.0)), (range_basis, (0.05, 0.4))):
        columns = make(*arguments, 9).columns
        assert np.abs(columns.T @ columns - np.eye(9)).max() < 1e-13
        assert np.array_equal(make(*arguments, 5).columns, columns[:, :5])


@pytest.mark.parametrize(("columns", "error"), [(16, 6e-3), (20, 6e-4), (24, 6e-5)])
def test_forgetting_is_held_between_the_grid_points(columns, error):
    """Each four columns take a factor of ten off the error (singular values fall geometrically)."""
    basis = decay_basis(1.0, 2000.0, 0.5, 15000.0, columns)
    age = np.random.default_rng(1).uniform(1.0, 2000.0, 500)
    at_age = decay_columns(basis)(np.log(age))
    for decay in np.geomspace(0.5, 15000.0, 37):
        held = at_age @ np.asarray(decay_coefficients(basis, jnp.log(decay)))
        assert np.abs(held - np.exp(-age / decay)).max() < error


def test_ranges_are_held_between_the_grid_points():
    basis = range_basis(0.05, 0.4, 12)
    distance = np.random.default_rng(1).uniform(0, 2.8, 500)
    at_distance = range_columns(basis)(distance)
    for sigma in np.geomspace(0.05, 0.4, 19):
        held = at_distance @ np.asarray(range_coefficients(basis, jnp.log(sigma)))
        assert np.abs(held - np.exp(-(distance**2) / (2 * sigma**2))).max() < 1e-4


def test_coefficients_have_the_slope_of_finite_differences():
    for basis, of, middle in (
        (decay_basis(1.0, 500.0, 0.5, 1500.0, 8), decay_coefficients, jnp.log(30.0)),
        (range_basis(0.05, 0.4, 6), range_coefficients, jnp.log(0.15)),
    ):
        slope = jax.jacfwd(lambda v, basis=basis, of=of: of(basis, v))(middle)
        difference = (of(basis, middle + 1e-5) - of(basis, middle - 1e-5)) / 2e-5
        # central differences: 1e-10 of truncation, 1e-16/1e-5 of rounding, on values of about 10
        assert np.abs(slope - difference).max() < 1e-8


def test_a_fixed_range_is_one_exact_column_whatever_is_asked():
    assert np.array_equal(range_coefficients(fixed_range(0.2), jnp.log(7.0)), [1.0])
    assert no_memory().columns.shape == (1, 0)


@pytest.mark.parametrize(
    ("make", "arguments", "sentence"),
    [
        (decay_basis, (0.0, 10.0, 1.0, 10.0, 3), "`youngest`"),
        (decay_basis, (1.0, 10.0, 5.0, 1.0, 3), "`longest`"),
        (range_basis, (0.0, 1.0, 3), "`shortest`"),
        (decay_basis, (1.0, 10.0, 1.0, 10.0, 900), "`columns` can be at most"),
    ],
)
def test_wrong_bounds_are_named(make, arguments, sentence):
    with pytest.raises(ValueError, match=sentence):
        make(*arguments)
