"""Isopleths and overlaps against sorting in NumPy and closed forms."""

import jax.numpy as jnp
import numpy as np
import pytest
from scipy import stats

from bayesrange.inference import isopleth_levels, overlaps, rank_mass


@pytest.fixture
def uneven():
    """Two densities on cells of unequal habitable area, 0 outside."""
    rng = np.random.default_rng(3)
    area = rng.choice([0.0, 0.004, 0.01], (14, 11), p=[0.1, 0.3, 0.6])
    density = np.where(area > 0, rng.gamma(0.7, size=(2, 14, 11)), 0.0)
    return density / (density * area).sum((1, 2), keepdims=True), area


def sorted_areas(density, area, level):
    """Area of the densest cells that hold `level` of the mass, the last one in part: by sorting."""
    order = np.argsort(-density.ravel(), kind="stable")
    mass, size = (density * area).ravel()[order], area.ravel()[order]
    before = np.concatenate([[0], np.cumsum(mass)])
    k = np.searchsorted(before, level) - 1
    return size[:k].sum() + size[k] * (level - before[k]) / mass[k]


def test_isopleth_areas_agree_with_sorting(uneven):
    density, area = uneven
    denser, mass = rank_mass(jnp.asarray(density), jnp.asarray(area))
    levels = np.array([0.1, 0.5, 0.8, 0.95, 0.999])
    share, areas = isopleth_levels(denser, mass, jnp.asarray(area), jnp.asarray(levels))
    for i, level in enumerate(levels):
        for group in range(2):
            expected = sorted_areas(density[group], area, level)
            assert float(areas[i, group]) == pytest.approx(expected, rel=1e-10)
            # What is inside holds just the level
            assert float((share[i, group] * mass[group]).sum()) == pytest.approx(level, rel=1e-10)


def test_mass_denser_than_each_cell_agrees_with_comparing_all_pairs(uneven):
    density, area = uneven
    denser, own = rank_mass(jnp.asarray(density), jnp.asarray(area))
    flat = density[1].ravel()
    by_pairs = ((flat[None] > flat[:, None]) * (density[1] * area).ravel()[None]).sum(1)
    used = area.ravel() > 0
    np.testing.assert_allclose(np.asarray(denser[1]).ravel()[used], by_pairs[used], atol=1e-12)
    np.testing.assert_allclose(own, density * area)


def test_isopleths_are_nested_and_keep_out_of_empty_cells(uneven):
    density, area = uneven
    share, areas = isopleth_levels(*rank_mass(density := jnp.asarray(density), jnp.asarray(area)), jnp.asarray(area),
                                   jnp.array([0.5, 0.95]))  # fmt: skip
    assert np.all(share[0] <= share[1]) and np.all(areas[0] < areas[1])
    assert not np.any(np.asarray(share)[:, :, area == 0])


def test_equal_cells_share_an_isopleth_by_area():
    area = jnp.full((10, 10), 0.01)
    share, areas = isopleth_levels(*rank_mass(jnp.ones((1, 10, 10)), area), area, jnp.array([0.5, 0.955]))
    np.testing.assert_allclose(np.asarray(areas)[:, 0], [0.5, 0.955], rtol=1e-12)  # uniform on 1 km²


@pytest.mark.parametrize(("level", "factor"), [(0.5, 4.355172), (0.9, 14.467569), (0.95, 18.822741), (0.99, 28.935138)])
def test_isopleth_area_of_a_bivariate_normal(level, factor):
    # Closed form: area = π χ²₂(p) σ²; the factors agree with scipy.stats.chi2 to all digits.
    assert factor == pytest.approx(np.pi * stats.chi2(2).ppf(level), rel=1e-6)
    sd, edge = 0.4, 0.05
    at = np.arange(-3, 3, edge) + edge / 2
    one = np.diff(stats.norm(0, sd).cdf(np.append(at - edge / 2, at[-1] + edge / 2))) / edge
    density, area = jnp.asarray(np.outer(one, one))[None], jnp.full((at.size, at.size), edge**2)
    _, areas = isopleth_levels(*rank_mass(density, area), area, jnp.array([level]))
    # Cells average the density: the area errs by about (edge/sd)²/12 = 0.13 %.
    assert float(areas[0, 0]) == pytest.approx(factor * sd**2, rel=5e-3)


def test_overlap_of_two_normals_is_bhattacharyyas_closed_form():
    # ∫√(N₁ N₂) = exp(−d²/8σ²) for equal variances (Bhattacharyya 1943; follows by completing the square)
    at = np.arange(-5, 5, 0.05)
    one, other = (np.exp(-0.5 * ((at - shift) / 0.7) ** 2) for shift in (-0.5, 0.6))
    densities = np.stack([np.outer(one, one), np.outer(one, other)])
    area = np.full((at.size, at.size), 0.05**2)
    densities /= (densities * area).sum((1, 2), keepdims=True)
    found = np.asarray(overlaps(jnp.asarray(densities), jnp.asarray(area)))
    np.testing.assert_allclose(np.diag(found), 1, rtol=1e-12)
    # The trapezoid rule is exact to rounding for Gaussians that end inside the grid.
    np.testing.assert_allclose(found[0, 1], np.exp(-(1.1**2) / (8 * 0.7**2)), rtol=1e-9)
    assert found[0, 1] == found[1, 0]


def test_groups_apart_do_not_overlap():
    density = jnp.asarray(np.stack([np.eye(4), np.fliplr(np.eye(4))])) / (4 * 0.01)
    assert float(overlaps(density, jnp.full((4, 4), 0.01))[0, 1]) == 0
