"""The corners of the model: one group, no layers, extreme drifts, marks without bound, numbers that are none."""

import jax
import jax.numpy as jnp
import numpy as np
import numpyro
import pytest
from spaceuse._grounds import make_model, make_parameters, make_setting, ragged, smooth_layer, solve, square

from bayesrange.inference import range_model
from bayesrange.spaceuse import (
    NO_STEADY_SCENT,
    NOT_FINITE,
    SENTENCES,
    SOLVED,
    Parameters,
    Reading,
    SolveError,
    steady_state,
)

HOMES = [[0.8, 0.8], [1.6, 0.8], [1.2, 1.7]]


def test_one_group_has_no_foreign_scent():
    domain = ragged()
    setting = make_setting(domain, [smooth_layer(np.random.default_rng(1), domain)], [3.0])
    free = solve(make_parameters([2.0, 0.6], 4.0, 0.0, [0.5]), setting)
    avoiding = solve(make_parameters([2.0, 0.6], 4.0, 3.0, [0.5], over_marking=0.5), setting)
    assert int(avoiding.result) == SOLVED
    assert np.array_equal(np.asarray(avoiding.foreign), np.zeros((1, *domain.area.shape)))
    assert np.array_equal(np.asarray(avoiding.log_density), np.asarray(free.log_density))


def test_no_layers_are_the_same_as_layers_without_effect():
    domain = ragged()
    layers = [smooth_layer(np.random.default_rng(k), domain) for k in (1, 2)]
    empty = solve(make_parameters(HOMES, 4.0, 0.5), make_setting(domain, [], [1, 2, 3]))
    without = solve(make_parameters(HOMES, 4.0, 0.5, [0.0, 0.0]), make_setting(domain, layers, [1, 2, 3]))
    assert int(empty.result) == SOLVED
    np.testing.assert_allclose(np.asarray(empty.density), np.asarray(without.density), rtol=1e-9)  # solved to 1e-10


@pytest.mark.parametrize("avoidance", [0.0, 1.0])
def test_extreme_drifts_keep_mass_and_sign_and_give_no_nan(avoidance):
    # A step of the potential by 1e4 from cell to cell: exp underflows to 0 nearly everywhere.
    domain = square(20, perception=0.2)
    rough = np.random.default_rng(2).normal(size=(20, 20))
    setting = make_setting(domain, [rough], [1.0, 2.0, 3.0])
    steep = [[1e4, -1e4, 1e4]]
    for localising, resource in ((1e5, 0.0), (0.0, steep), (1e5, steep)):
        parameters = make_parameters(HOMES, localising, avoidance, resource if resource else [0.0])
        solution = solve(parameters, setting)
        density = np.asarray(solution.density)
        assert int(solution.result) == SOLVED
        assert np.isfinite(np.asarray(solution.log_density)).all() and (density >= 0).all()
        # one addition per cell
        np.testing.assert_allclose((density * 0.01).sum((1, 2)), 1.0, rtol=1e-13)
        assert np.isfinite(np.asarray(solution.foreign)).all()


def log_posterior(setting):
    """Log-density, by over-marking, of a model with three fixes, one a group."""
    reading = Reading(jnp.asarray([[130], [135], [270]]), jnp.zeros((3, 1)), jnp.arange(3), setting.domain.area)
    names = ("localising", "avoidance", "over_marking")
    spec, data = make_model(setting, reading, {name: ("half-normal", (1.0,)) for name in names}, HOMES)

    def density(over_marking):
        values = dict(zip(names, (jnp.asarray(4.0), jnp.asarray(0.5), over_marking), strict=True))
        return numpyro.infer.util.log_density(range_model, (spec, data), {}, values)[0]

    return jax.jit(density)


def test_marks_beyond_their_bound_have_probability_0_and_no_nan():
    setting = make_setting(square(20, perception=0.2), animals=[1.0, 2.0, 3.0])
    # At their homes scent of one's own is about 10 n_i: m Q < 1 needs m of some hundredths.
    within = solve(make_parameters(HOMES, 4.0, 0.5, over_marking=0.03), setting)
    assert int(within.result) == SOLVED and 0 < float(within.load) < 1
    beyond = solve(make_parameters(HOMES, 4.0, 0.5, over_marking=50.0), setting)
    assert int(beyond.result) == NO_STEADY_SCENT and float(beyond.load) >= 1
    assert not np.isnan(np.asarray(beyond.log_density)).any()
    assert "over-marking" in SENTENCES[NO_STEADY_SCENT].lower()
    density = log_posterior(setting)
    assert np.isfinite(density(jnp.asarray(0.03)))
    assert density(jnp.asarray(50.0)) == -np.inf


def test_load_of_a_solution_is_mq_of_its_densest_cell():
    setting = make_setting(square(20, perception=0.2), animals=[1.0, 2.0, 3.0])
    solution = solve(make_parameters(HOMES, 4.0, 0.5, over_marking=0.03), setting)
    q = np.asarray(setting.marking)[:, None, None] * np.asarray(solution.density)
    # foreign scent is solved to 1e-10
    assert float(solution.load) == pytest.approx((0.03 * q / (1 + 0.03 * q)).sum(0).max(), rel=1e-8)


@pytest.mark.parametrize("broken", ["localising", "avoidance", "resource", "home"])
@pytest.mark.parametrize("coupled", [True, False])
def test_numbers_that_are_none_are_told_apart(broken, coupled):
    domain = square(20)
    setting = make_setting(domain, [smooth_layer(np.random.default_rng(3), domain)], [1.0, 2.0, 3.0])
    sound = {"home": HOMES, "localising": 4.0, "avoidance": 0.5, "resource": [0.3]}
    none = {"localising": np.nan, "avoidance": np.nan, "resource": [np.inf], "home": [[np.nan, 1.0]] * 3}
    solution = solve(make_parameters(**{**sound, broken: none[broken]}), setting, coupled=coupled)
    assert int(solution.result) == NOT_FINITE


def test_asked_for_directly_a_failure_is_an_error_that_says_why():
    setting = make_setting(square(20), animals=[1.0, 2.0, 3.0])
    with pytest.raises(SolveError, match="Over-marking is so strong"):
        steady_state(make_parameters(HOMES, 4.0, 0.5, over_marking=50.0), setting, coupled=False, throw=True)
    with pytest.raises(ValueError, match="`retreat` is not a gradient"):
        steady_state(make_parameters(HOMES, 4.0, 0.5, retreat=1.0), setting, throw=True)
    with pytest.raises(ValueError, match=r"`solver` must be one of .*got 'fluks'"):
        steady_state(make_parameters(HOMES), setting, solver="fluks")
    assert int(steady_state(make_parameters(HOMES, 4.0), setting, coupled=False, throw=True).result) == SOLVED


def test_numpy_arrays_will_do():
    setting = make_setting(square(20), animals=[1.0, 2.0, 3.0])
    parameters = make_parameters(HOMES, 4.0)
    usual = solve(parameters, setting, coupled=False)
    plain = steady_state(*jax.tree.map(np.asarray, (parameters, setting)), coupled=False)
    # compiled as a whole or one by one: additions in another order
    np.testing.assert_allclose(np.asarray(plain.density), np.asarray(usual.density), rtol=1e-13)


def test_two_groups_of_one_home_still_have_a_steady_state():
    # The same sett twice: by symmetry the same density.
    setting = make_setting(square(20, perception=0.2), animals=[2.0, 2.0])
    solution = solve(make_parameters([[1.0, 1.0], [1.0, 1.0]], 4.0, 0.3), setting)
    assert int(solution.result) == SOLVED
    np.testing.assert_allclose(np.asarray(solution.density)[0], np.asarray(solution.density)[1], rtol=1e-8)


def test_parameters_are_read_by_group():
    # one group's own values don't leak into another's: without scent each is as if alone
    domain = square(16)
    setting = make_setting(domain, [smooth_layer(np.random.default_rng(4), domain)], [1.0, 1.0, 1.0])
    values = Parameters(
        jnp.asarray([1.0, 4.0, 9.0]), jnp.zeros(3), jnp.zeros(3), jnp.asarray([[0.5, -0.5, 0.0]]), jnp.zeros(()),
        jnp.asarray(HOMES),
    )  # fmt: skip
    together = np.asarray(solve(values, setting, coupled=False).density)
    for i in range(3):
        own = make_parameters(HOMES[i], values.localising[i], resource=values.resource[:, i])
        alone = solve(own, setting._replace(marking=setting.marking[i : i + 1]), coupled=False)
        assert np.array_equal(np.asarray(alone.density)[0], together[i])
