"""The flux solver against the Gibbs law, against dense matrices, and at the edges of what it can do."""

import jax
import jax.numpy as jnp
import numpy as np
import pytest
from spaceuse._grounds import make_parameters, make_setting, ragged, smooth_layer, square
from spaceuse._grounds import solve as gibbs
from spaceuse.test_flux_operator import dense

from bayesrange.spaceuse import NO_STEADY_SCENT, NOT_FINITE, SENTENCES, SOLVED, TOO_STEEP, flux, steady_state
from bayesrange.spaceuse._operator import Faces

HOMES = [[1.5, 0.6], [2.0, 0.9], [2.6, 0.4]]


@pytest.fixture(params=["klu", "superlu"])
def linear(request):
    if request.param == "klu":
        pytest.importorskip("klujax_cpp")
    return request.param


def ragged_case(avoidance=1.0, retreat=0.0, over_marking=0.0, seed=30):
    domain = ragged()
    setting = make_setting(domain, [smooth_layer(np.random.default_rng(seed), domain)], [2.0, 3.0, 1.0])
    around = np.array([1.0, 0.6, 1.2])
    return make_parameters(
        HOMES, [3.0, 4.0, 5.0], avoidance * around, [[0.4, -0.2, 0.3]], over_marking, retreat * around[::-1]
    ), setting


def six_groups(avoidance):
    domain = square(24)
    rng = np.random.default_rng(31)
    homes = np.array([[x, y] for y in (0.6, 1.8) for x in (0.4, 1.2, 2.0)]) + rng.normal(0, 0.08, (6, 2))
    setting = make_setting(domain, [smooth_layer(rng, domain)], rng.integers(2, 8, 6))
    return make_parameters(homes, 5.0, avoidance, [0.5]), setting


@pytest.mark.parametrize("case", ["six 0.2", "six 2", "six 4", "ragged 1", "ragged over-marking"])
def test_gradient_drifts_give_the_gibbs_law(case):
    cases = {
        "six 0.2": lambda: six_groups(0.2),
        "six 2": lambda: six_groups(2.0),
        "six 4": lambda: six_groups(4.0),
        "ragged 1": ragged_case,
        "ragged over-marking": lambda: ragged_case(over_marking=0.05),
    }
    parameters, setting = cases[case]()
    law = gibbs(parameters, setting)
    inside = np.asarray(setting.domain.inside)
    for start in ("gibbs", "uncoupled"):  # the second one owes nothing to the law
        solution = flux(parameters, setting, start=start)
        assert int(solution.result) == SOLVED
        # both stop at 1e-10: of F̃ ≤ 20 with α ≤ 4, and of log densities down to −40
        np.testing.assert_allclose(np.asarray(solution.density), np.asarray(law.density), atol=1e-9 * law.density.max())
        found, expected = (np.asarray(s.log_density)[:, inside] for s in (solution, law))
        np.testing.assert_allclose(found, expected, atol=2e-8)
        assert np.isneginf(np.asarray(solution.log_density)[:, ~inside]).all()
        np.testing.assert_allclose(solution.foreign, law.foreign, atol=2e-9 * law.foreign.max())
    if case == "six 0.2":
        assert int(flux(parameters, setting).steps) == 0 < int(solution.steps)


def test_without_neighbours_the_law_is_explicit():
    parameters, setting = ragged_case(avoidance=3.0)
    for given, own in ((parameters, setting), one_group(parameters, setting)):
        solution, law = flux(given, own, coupled=False), gibbs(given, own, coupled=False)
        assert int(solution.result) == SOLVED and not np.asarray(solution.foreign).any()
        np.testing.assert_allclose(solution.density, law.density, rtol=1e-9)
    alone, own = one_group(parameters, setting)
    coupled = flux(alone._replace(retreat=jnp.ones(1)), own)  # one group has no foreign scent to retreat from
    assert np.array_equal(np.asarray(coupled.density), np.asarray(solution.density))


def one_group(parameters, setting):
    first = parameters._replace(
        localising=parameters.localising[:1], retreat=parameters.retreat[:1], avoidance=parameters.avoidance[:1],
        resource=parameters.resource[:, :1], home=parameters.home[:1],
    )  # fmt: skip
    return first, setting._replace(marking=setting.marking[:1])


def perceived_by_hand(density, setting, over_marking, perception=0.2):
    """Foreign scent by a sum over all pairs of cells, marks by substitution."""
    area, marks = np.asarray(setting.domain.area), np.asarray(setting.marking)[:, None, None] * density
    q = marks
    for _ in range(200):
        marks = q * (1 + over_marking * (marks.sum(0) - marks))
    x, y = np.meshgrid(setting.domain.x, setting.domain.y)
    squared = (x.ravel()[:, None] - x.ravel()) ** 2 + (y.ravel()[:, None] - y.ravel()) ** 2
    kernel = np.exp(-0.5 * squared / perception**2) * area.ravel()
    smooth = ((marks.reshape(len(marks), -1) @ kernel.T) / kernel.sum(1)).reshape(marks.shape)
    return np.where(area > 0, smooth.sum(0) - smooth, 0.0)


@pytest.mark.parametrize("over_marking", [0.0, 0.03])
def test_retreat_solves_the_balance_of_dense_matrices_at_its_own_scent(linear, over_marking):
    # Slow twin in numpy: F̃ by pairs of cells, M by the definition of the flux, its null space by SVD.
    parameters, setting = ragged_case(avoidance=0.7, retreat=0.8, over_marking=over_marking)
    solution = flux(parameters, setting, linear=linear)
    assert int(solution.result) == SOLVED
    density, area = np.asarray(solution.density), np.asarray(setting.domain.area)
    np.testing.assert_allclose((density * area).sum((1, 2)), 1.0, rtol=1e-12)
    foreign = perceived_by_hand(density, setting, over_marking)
    np.testing.assert_allclose(solution.foreign, foreign, atol=1e-9 * foreign.max())
    x, y = np.meshgrid(setting.domain.x, setting.domain.y)
    for i in range(3):
        beta, kappa, alpha = (
            float(values[i]) for values in (parameters.localising, parameters.retreat, parameters.avoidance)
        )
        rho = np.sqrt((x - HOMES[i][0]) ** 2 + (y - HOMES[i][1]) ** 2 + float(setting.softening) ** 2)
        layer = float(parameters.resource[0, i]) * np.asarray(setting.layers)[0]
        potential = -beta * rho - alpha * foreign[i] + layer
        drift = []
        for axis in (1, 0):
            mean = 0.5 * (np.delete(foreign[i], 0, axis) + np.delete(foreign[i], -1, axis))
            drift.append((np.diff(potential, axis=axis) - kappa * mean * np.diff(rho, axis=axis))[None])
        within = (area > 0).ravel()
        vector = np.linalg.svd(dense(Faces(*drift), area > 0, 0)[np.ix_(within, within)])[2][-1]
        vector /= vector @ area[area > 0]
        # residual 1e-10 of log densities down to −40; SVD is right to the condition number times its rounding
        np.testing.assert_allclose(density[i][area > 0], vector, atol=1e-7 * vector.max())


def test_retreat_is_no_gradient_and_matters():
    parameters, setting = ragged_case(avoidance=0.0, retreat=0.8)
    without = flux(parameters._replace(retreat=jnp.zeros(3)), setting)
    assert np.abs(np.asarray(flux(parameters, setting).density - without.density)).max() > 0.1


@pytest.mark.parametrize("retreat", [0.5, 3.0])
def test_both_starts_and_both_sparse_solvers_find_one_state(retreat):
    pytest.importorskip("klujax_cpp")
    parameters, setting = ragged_case(avoidance=1.0, retreat=retreat)
    one = flux(parameters, setting, linear="klu")
    others = [flux(parameters, setting, linear="superlu"), flux(parameters, setting, linear="klu", start="uncoupled")]
    for other in others:
        assert int(one.result) == int(other.result) == SOLVED
        np.testing.assert_allclose(other.density, one.density, atol=1e-8 * one.density.max())  # each solved to 1e-10
    assert int(others[0].steps) == int(one.steps)


def test_permuted_groups_have_the_permuted_solution():
    parameters, setting = ragged_case(avoidance=1.0, retreat=1.0, over_marking=0.02)
    order = np.array([2, 0, 1])
    shuffled = parameters._replace(
        localising=parameters.localising[order], retreat=parameters.retreat[order],
        avoidance=parameters.avoidance[order], resource=parameters.resource[:, order], home=parameters.home[order],
    )  # fmt: skip
    usual, other = flux(parameters, setting), flux(shuffled, setting._replace(marking=setting.marking[order]))
    np.testing.assert_allclose(other.density, np.asarray(usual.density)[order], atol=1e-8 * usual.density.max())


def test_only_a_pull_home_gives_holgates_density_at_order_2():
    # u = β²/(2π) e^(−βr) in the plane (Holgate 1971; Okubo 1980); e^(−15) of it lies outside the square.
    beta, half = 6.0, 2.5
    errors = []
    for n in (27, 81, 243):  # cell centres of the first are centres of the others
        at = (np.arange(n) + 0.5) * 2 * half / n
        domain = square(n, 2 * half / n, 0.2)
        setting = make_setting(domain, softening=half / n)
        solution = flux(make_parameters([half, half], beta), setting, start="uncoupled")
        row, column = np.meshgrid(*[np.arange(n // 27 // 2, n, n // 27)] * 2, indexing="ij")
        r = np.hypot(at[column] - half, at[row] - half)
        near = (r > 0.5) & (r < 2.0)
        exact = beta**2 / (2 * np.pi) * np.exp(-beta * r)
        errors.append(np.abs(np.asarray(solution.density)[0, row, column] / exact - 1)[near].max())
    orders = -np.diff(np.log(errors)) / np.log(3)
    # next term of ε = half a cell: a share of βε, 0.2 from the second grid to the third
    assert abs(orders[1] - 2) < 0.1 and orders[0] > 1.7, (errors, orders)


@pytest.mark.parametrize("retreat", [0.0, 2.0])
def test_extreme_drifts_are_told_and_give_no_nan(linear, retreat):
    domain = square(20, perception=0.2)
    rough = np.random.default_rng(2).normal(size=(20, 20))
    setting = make_setting(domain, [rough], [1.0, 2.0, 3.0])
    homes = [[0.8, 0.8], [1.6, 0.8], [1.2, 1.7]]
    for localising, resource in ((1e5, 0.0), (0.0, 1e4), (1e5, 1e4)):
        solution = flux(make_parameters(homes, localising, 1.0, [resource], retreat=retreat), setting, linear=linear)
        assert int(solution.result) == TOO_STEEP
        density = np.asarray(solution.density)
        assert np.isfinite(density).all() and (density >= 0).all()
        np.testing.assert_allclose((density * 0.01).sum((1, 2)), 1.0, rtol=1e-12)
    # ten times fewer steps of the potential are still solved
    steep = flux(make_parameters(homes, 1e3, 1.0, [0.0], retreat=retreat), setting, linear=linear)
    assert int(steep.result) == SOLVED and not np.isnan(np.asarray(steep.log_density)).any()


def test_marks_without_bound_and_numbers_that_are_none_have_their_codes(linear):
    parameters, setting = ragged_case(avoidance=0.5, retreat=0.5)
    beyond = flux(parameters._replace(over_marking=jnp.asarray(50.0)), setting, linear=linear)
    assert int(beyond.result) == NO_STEADY_SCENT
    for broken in (np.nan, np.inf):
        for name in ("localising", "avoidance", "retreat", "home"):
            value = getattr(parameters, name)
            bad = parameters._replace(**{name: value.at[(0,) * value.ndim].set(broken)})
            assert int(flux(bad, setting, linear=linear).result) == NOT_FINITE, name


def test_the_entry_point_knows_flux_and_its_options():
    parameters, setting = ragged_case(avoidance=0.5, retreat=0.5)
    found = steady_state(parameters, setting, solver="flux", throw=True, linear="superlu", start="uncoupled")
    np.testing.assert_allclose(found.density, flux(parameters, setting).density, atol=1e-7)
    with pytest.raises(ValueError, match="`start` must be one of gibbs, uncoupled, got 'cold'"):
        flux(parameters, setting, start="cold")
    with pytest.raises(ValueError, match="`linear` must be .* got 'lapack'"):
        flux(parameters, setting, linear="lapack")
    assert SENTENCES.keys() == {0, 1, 2, 3, 4}


def test_klu_that_is_not_installed_is_an_error_and_superlu_serves(monkeypatch):
    from bayesrange.spaceuse import _sparse

    monkeypatch.setattr(_sparse, "klu_found", lambda: False)
    with pytest.raises(ValueError, match=r"linear='klu' needs klujax .* pip install 'bayesrange\[fast\]'"):
        _sparse.choose("klu")
    assert _sparse.choose(None) is _sparse.choose("superlu")


def test_a_batch_of_parameters_is_solved_as_one_by_one(linear):
    parameters, setting = ragged_case(avoidance=0.5, retreat=0.5)
    several = jnp.asarray([0.1, 2.0, 9.0])
    put = lambda kappa: parameters._replace(retreat=jnp.full(3, kappa))  # noqa: E731
    batch = jax.vmap(lambda kappa: flux(put(kappa), setting, linear=linear))(several)
    for i, kappa in enumerate(several):
        alone = flux(put(kappa), setting, linear=linear)
        assert int(alone.result) == int(batch.result[i]) == SOLVED
        np.testing.assert_allclose(np.exp(batch.log_density[i]), alone.density, rtol=1e-8)
