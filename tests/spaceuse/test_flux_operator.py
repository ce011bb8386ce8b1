"""Fluxes, their matrix and its null vector, against hand-made dense matrices."""

import jax
import jax.numpy as jnp
import numpy as np
import pytest
from spaceuse._grounds import make_parameters, make_setting, ragged, smooth_layer

from bayesrange.spaceuse import home_distance, null_density, solitary_potential
from bayesrange.spaceuse._operator import Faces, drift_terms, face_drift, outflow, rates, steepest
from bayesrange.spaceuse._pinned import Pinned
from bayesrange.spaceuse._sparse import choose, five_point, pinned_values

EPS = np.finfo(float).eps


def random_drift(rng, domain, groups=2, size=1.0):
    """Face drifts that are no gradient."""
    ny, nx = domain.area.shape
    x, y = rng.normal(size=(groups, ny, nx - 1)), rng.normal(size=(groups, ny - 1, nx))
    return Faces(jnp.asarray(size * x), jnp.asarray(size * y))


def dense(drift, inside, group):
    """M by the definition: J = w/(1 − e^(−w)) u_a − w/(eʷ − 1) u_b leaves a and enters b."""
    ny, nx = inside.shape
    matrix = np.zeros((ny * nx, ny * nx))
    for axis, faces in ((1, drift.x), (0, drift.y)):
        for (row, column), w in np.ndenumerate(np.asarray(faces)[group]):
            other = (row, column + 1) if axis == 1 else (row + 1, column)
            if inside[row, column] and inside[other]:
                a, b = row * nx + column, other[0] * nx + other[1]
                onward, back = w / -np.expm1(-w), w / np.expm1(w)
                matrix[a, a] += onward
                matrix[b, a] -= onward
                matrix[a, b] -= back
                matrix[b, b] += back
    return matrix


@pytest.fixture
def case():
    rng, domain = np.random.default_rng(20), ragged()
    return rng, domain, np.asarray(domain.inside), random_drift(rng, domain)


def test_matrix_and_outflow_are_those_of_the_definition(case):
    rng, domain, inside, drift = case
    u = jnp.asarray(rng.random((2, *inside.shape)) * inside)
    pattern, pin = five_point(*inside.shape), jnp.asarray([100, 205])
    values = np.asarray(pinned_values(pattern, rates(drift, domain.inside), pin, domain.inside))
    leaving = np.asarray(outflow(drift, u, domain.inside)).reshape(2, -1)
    for group in range(2):
        expected = dense(drift, inside, group)
        # four products a cell: some ulps of the largest, 4 × B(−4)
        np.testing.assert_allclose(leaving[group], expected @ np.asarray(u)[group].ravel(), atol=40 * EPS)
        made = np.zeros_like(expected)
        made[pattern.row, pattern.column] = values[group]
        outside = np.flatnonzero(~inside)
        expected[outside, outside] = 1.0
        expected[int(pin[group])] = np.eye(inside.size)[int(pin[group])]
        # the diagonal is 1e-14 larger, on purpose
        np.testing.assert_allclose(made, expected, rtol=1e-14 + 16 * EPS, atol=1e-300)


def test_columns_sum_to_nothing_and_only_the_diagonal_is_positive(case):
    _, domain, inside, drift = case
    columns = jax.vmap(lambda e: outflow(drift, jnp.stack([e, e]), domain.inside)[0])
    matrix = np.asarray(columns(jnp.eye(inside.size).reshape(-1, *inside.shape))).reshape(inside.size, -1).T
    assert (np.diag(matrix)[inside.ravel()] > 0).all()
    assert (matrix - np.diag(np.diag(matrix)) <= 0).all()
    # nobody is lost: four numbers and their sum
    np.testing.assert_allclose(matrix.sum(0), 0.0, atol=8 * EPS * matrix.max())
    assert not matrix[:, ~inside.ravel()].any() and not matrix[~inside.ravel()].any()


@pytest.mark.parametrize("peclet", [1e-3, 1.0, 30.0])
def test_no_flux_runs_in_the_gibbs_law_of_a_gradient(peclet):
    domain = ragged()
    potential = peclet * np.random.default_rng(21).normal(size=(1, *domain.area.shape))
    drift = Faces(jnp.asarray(np.diff(potential, axis=2)), jnp.asarray(np.diff(potential, axis=1)))
    u = np.exp(potential - potential.max())
    # Where two fluxes of one face cancel, each is right to some ulps and to the rounding of its w.
    rate = rates(drift, domain.inside)
    onward, back = np.asarray(rate.onward.x) * u[:, :, :-1], np.asarray(rate.back.x) * u[:, :, 1:]
    np.testing.assert_allclose(onward, back, rtol=(8 + 8 * peclet) * EPS)
    scale = max(np.max(onward), np.max(np.asarray(rate.onward.y) * u[:, :-1]))
    assert np.abs(np.asarray(outflow(drift, jnp.asarray(u), domain.inside))).max() < (32 + 32 * peclet) * EPS * scale


def test_drift_is_the_step_of_the_potential_and_retreat_the_mean_scent_times_the_way_home():
    rng, domain = np.random.default_rng(22), ragged()
    setting = make_setting(domain, [smooth_layer(rng, domain)], [2.0, 3.0])
    parameters = make_parameters([[1.5, 0.6], [2.0, 0.9]], [3.0, 4.0], [0.5, 2.0], [[0.4, -0.2]], retreat=[0.7, 1.3])
    foreign = rng.random((2, *domain.area.shape))
    drift = face_drift(jnp.asarray(foreign), drift_terms(parameters, setting))
    potential = np.asarray(solitary_potential(parameters, setting)) - np.array([0.5, 2.0])[:, None, None] * foreign
    rho, kappa = np.asarray(home_distance(parameters.home, setting)), np.array([0.7, 1.3])
    for axis, found in ((2, drift.x), (1, drift.y)):
        pair = 0.5 * (np.delete(foreign, 0, axis) + np.delete(foreign, -1, axis))
        expected = np.diff(potential, axis=axis) - kappa[:, None, None] * pair * np.diff(rho, axis=axis)
        np.testing.assert_allclose(found, expected, atol=64 * EPS)  # potentials reach 10
    assert float(steepest(drift, domain.inside)) <= max(float(abs(drift.x).max()), float(abs(drift.y).max()))


@pytest.mark.parametrize("linear", ["klu", "superlu"])
def test_transposed_solves_are_the_transpose_of_solves(case, linear):
    if linear == "klu":
        pytest.importorskip("klujax_cpp")
    rng, domain, inside, drift = case
    pattern, pin = five_point(*inside.shape), jnp.asarray([100, 205])
    values = pinned_values(pattern, rates(drift, domain.inside), pin, domain.inside)
    a, b = (jnp.asarray(rng.normal(size=(2, *inside.shape))) for _ in range(2))

    @jax.jit
    def both(values):
        solver = choose(linear)
        pinned = Pinned(solver, pattern, solver.analyse(pattern), pin)
        factor = solver.factor(pattern, pinned.analysis, values)
        found = jnp.stack([pinned.solve(factor, a), pinned.solve_transposed(factor, b)])
        solver.release(pinned.analysis, factor, found)
        return found

    solved, transposed = both(values)
    left, right = np.vdot(solved, b), np.vdot(a, transposed)
    assert left == pytest.approx(right, rel=1e-10)  # the condition number of this matrix is about 1e4
    # and they solve: all rows but the pinned one
    rest = np.array(outflow(drift, solved, domain.inside) - jnp.where(domain.inside[None], a, 0.0)).reshape(2, -1)
    rest[np.arange(2), np.asarray(pin)] = 0.0
    assert np.abs(rest).max() < 1e-10


@pytest.mark.parametrize("linear", ["klu", "superlu"])
def test_null_density_is_the_null_space_of_the_dense_matrix(case, linear):
    if linear == "klu":
        pytest.importorskip("klujax_cpp")
    _, domain, inside, drift = case
    found = np.asarray(null_density(drift.x, drift.y, domain.area, linear))
    area = np.asarray(domain.area)
    for group in range(2):
        within = inside.ravel()
        matrix = dense(drift, inside, group)[np.ix_(within, within)]
        vector = np.linalg.svd(matrix)[2][-1]
        vector /= vector @ area[inside]
        np.testing.assert_allclose(found[group][inside], vector, rtol=1e-10)  # SVD: ulps times the condition, 1e4
        assert not found[group][~inside].any()


@pytest.mark.parametrize("linear", ["klu", "superlu"])
def test_any_drift_keeps_mass_and_sign_and_gives_no_nan(linear):
    if linear == "klu":
        pytest.importorskip("klujax_cpp")
    domain, rng = ragged(), np.random.default_rng(23)
    for size in (1e-8, 1.0, 30.0, 1e4):
        drift = random_drift(rng, domain, groups=3, size=size)
        density = np.asarray(null_density(drift.x, drift.y, domain.area, linear))
        assert np.isfinite(density).all() and (density >= 0).all()
        np.testing.assert_allclose((density * np.asarray(domain.area)).sum((1, 2)), 1.0, rtol=1e-12)
