"""Scent: marks in closed form against iteration, and perception as a weighted mean of what lies around."""

import jax.numpy as jnp
import numpy as np
import pytest
from scipy import ndimage
from spaceuse._grounds import make_setting, ragged, square

from bayesrange.spaceuse import make_domain
from bayesrange.spaceuse._scent import foreign_scent, marks, perceive

EPS = np.finfo(float).eps


def marks_by_iteration(q, m):
    """p_i = q_i (1 + m Σ_{j≠i} p_j), each cell iterated as it reads until it stands still."""
    p = q
    for _ in range(5000):
        new = q * (1 + m * (p.sum(0) - p))
        if np.abs(new - p).max() <= EPS * np.abs(new).max():
            return new
        p = new
    raise AssertionError("the iteration did not end")


@pytest.mark.parametrize("m", [0.01, 0.3])
@pytest.mark.parametrize("groups", [1, 2, 5])
def test_marks_are_what_the_iteration_ends_with(m, groups):
    rng = np.random.default_rng(1)
    q = rng.gamma(0.5, 1.0, (groups, 4, 6))
    q *= 0.9 * groups / (m * q.sum(0).max()) / max(groups, 2)  # m Q between 0.3 and 0.9
    laid, load = marks(jnp.asarray(q), jnp.asarray(m))
    # the iteration's last steps shrink by up to 0.9: it is 10 ulps from its end, of numbers that feed on each other
    np.testing.assert_allclose(np.asarray(laid), marks_by_iteration(q, m), rtol=1e3 * EPS)
    assert float(load) == pytest.approx(m * (q / (1 + m * q)).sum(0).max(), rel=10 * EPS)


def test_without_over_marking_marks_are_the_density_scaled():
    q = np.random.default_rng(2).gamma(0.5, 1.0, (3, 4, 6))
    laid, load = marks(jnp.asarray(q), jnp.asarray(0.0))
    assert np.array_equal(np.asarray(laid), q) and float(load) == 0


def test_two_groups_double_without_bound_where_the_load_reaches_1():
    # q = (a, a): p = a/(1 − m a), load 2 m a/(1 + m a): 1 exactly where p has its pole
    for a in (0.9, 0.999):
        laid, load = marks(jnp.full((2, 1, 1), a), jnp.asarray(1.0))
        # 1 − load loses 1/(1 − a) digits
        np.testing.assert_allclose(np.asarray(laid), a / (1 - a), rtol=1e4 * EPS)
        assert float(load) == pytest.approx(2 * a / (1 + a), rel=4 * EPS)
    laid, load = marks(jnp.full((2, 1, 1), 1.5), jnp.asarray(1.0))
    assert float(load) > 1 and np.isfinite(np.asarray(laid)).all()


@pytest.mark.parametrize("perception", [0.0, 0.05, 0.2, 3.0])
def test_perception_keeps_constants_also_at_edges_and_in_partial_cells(perception):
    domain = ragged(perception)
    inside = np.asarray(domain.inside)
    constants = np.array([1.0, 7.5])
    perceived = np.asarray(perceive(jnp.asarray(constants[:, None, None] * np.ones(inside.shape)), domain))
    # sums of some hundred positive terms
    np.testing.assert_allclose(perceived[:, inside], np.repeat(constants[:, None], inside.sum(), 1), rtol=100 * EPS)


def test_perception_is_scipys_gaussian_filter_of_field_and_area():
    # scipy.ndimage.gaussian_filter (its normaliser cancels in the ratio), cut off at 8 sd: e^-32
    cell, perception = 0.1, 0.17
    domain = ragged(perception)
    area = np.asarray(domain.area)
    field = np.random.default_rng(3).gamma(1.0, 1.0, area.shape)
    blur = {"sigma": perception / cell, "mode": "constant", "truncate": 8.0}
    expected = ndimage.gaussian_filter(field * area, **blur) / ndimage.gaussian_filter(area, **blur)
    perceived = np.asarray(perceive(jnp.asarray(field[None]), domain))[0]
    inside = area > 0
    np.testing.assert_allclose(perceived[inside], expected[inside], rtol=1e-12)


def test_perception_distance_0_reads_the_scent_where_it_lies():
    domain = square(6, perception=0.0)
    field = np.random.default_rng(4).gamma(1.0, 1.0, (2, 6, 6))
    np.testing.assert_allclose(np.asarray(perceive(jnp.asarray(field), domain)), field, rtol=4 * EPS)


def test_mean_scent_is_1_and_uniform_groups_perceive_the_others_share():
    domain = ragged()
    animals = np.array([2.0, 3.0, 5.0])
    setting = make_setting(domain, animals=animals)
    area = np.asarray(domain.area)
    uniform = jnp.full((3, *area.shape), 1 / area.sum())
    foreign, load = foreign_scent(uniform, setting.marking, jnp.asarray(0.0), domain)
    share = animals / animals.sum()
    for i in range(3):
        # scent of all is 1 by the definition of A₀; one's own share is not foreign
        np.testing.assert_allclose(np.asarray(foreign)[i][area > 0], 1 - share[i], rtol=100 * EPS)
    assert float(load) == 0


def test_a_domain_refuses_arrays_that_do_not_fit():
    at = np.arange(4.0)
    with pytest.raises(ValueError, match=r"`area` must have one row per `y`.*\(4, 4\), got \(4, 5\)"):
        make_domain(at, at, np.ones((4, 5)), 1.0)
    with pytest.raises(ValueError, match=r"`perception` is a distance in km.*got -1"):
        make_domain(at, at, np.ones((4, 4)), -1.0)
