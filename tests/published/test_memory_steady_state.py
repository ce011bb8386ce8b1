"""Where an animal without memory and without turning preference is in the long run: u* ∝ w · (k ∗ w).

Closed form and both limits, w for a wide kernel and w² for a narrow one: "Analytic steady-state space use patterns and
rapid computations in mechanistic home range analysis", J. Math. Biol. 2008. The numbers of the worked example and of
the limits were computed apart from this package, for a Gaussian kernel on a ring. The package walks with a gamma
kernel, for which there are no such numbers: the formula is held against them first, and the simulator then against the
formula with SciPy's gamma law as kernel.
"""

import jax
import jax.numpy as jnp
import numpy as np
import pytest
from memory._walking import ground, parameters
from scipy import stats

from bayesrange.memory import WALKED, allowed, read_layers, regular_timeline, simulate

LEVEL = 1e-3  # of each test of fit; seeds are fixed
RING, CELLS = 10.0, 1024


def smoothed(w, sigma):
    """Gaussian kernel on the ring: each wave times its transform."""
    wave = 2 * np.pi * np.fft.rfftfreq(CELLS, RING / CELLS)
    return np.fft.irfft(np.fft.rfft(w) * np.exp(-0.5 * (sigma * wave) ** 2), CELLS)


def closed_form(w, sigma):
    u = w * smoothed(w, sigma)
    return u / (u.sum() * RING / CELLS)


@pytest.mark.parametrize("sigma", [0.05, 1.0, 5.0])
def test_the_closed_form_is_what_jumping_leaves_unchanged(sigma):
    at = np.arange(CELLS) * RING / CELLS * 2 * np.pi / RING
    w = 1.5 + np.sin(at) + 0.4 * np.cos(3 * at)
    u = closed_form(w, sigma)
    jumped = w * smoothed(u / smoothed(w, sigma), sigma)
    assert np.abs(jumped - u).max() / u.max() < 4e-15  # round-off of a few transforms; the source found 4e-16


def test_jumping_leads_from_anywhere_to_the_worked_example():
    at = np.arange(CELLS) * RING / CELLS
    w = 1 + 0.6 * np.cos(2 * np.pi * at / RING)
    u = np.where(at < 2, 1.0, 0.0)
    u /= u.sum() * RING / CELLS
    for _ in range(400):
        u = w * smoothed(u / smoothed(w, 1.0), 1.0)
    places = [0, CELLS // 4, CELLS // 2, 3 * CELLS // 4]  # x = 0, 2.5, 5, 7.5
    # the digits printed
    np.testing.assert_allclose(RING * u[places], [2.0806105, 0.8712650, 0.1768594, 0.8712650], atol=5e-8)


@pytest.mark.parametrize(("sigma", "power", "departure"), [(0.05, 2, 1.06e-2), (0.001, 2, 4.3e-6), (5.0, 1, 6.4e-3)])
def test_wide_kernels_give_w_and_narrow_ones_its_square(sigma, power, departure):
    at = np.arange(CELLS) * 2 * np.pi / CELLS
    w = 1.5 + np.sin(at) + 0.4 * np.cos(3 * at)
    limit = w**power / ((w**power).sum() * RING / CELLS)
    assert np.abs(closed_form(w, sigma) / limit - 1).max() == pytest.approx(departure, rel=0.02)  # two digits printed


def attraction(landscape, selection, x, y):
    """ω on the ground and 0 beside it."""
    x, y = jnp.asarray(x), jnp.asarray(y)
    log_omega = np.asarray(read_layers(landscape, x, y)) @ np.asarray(selection)
    return np.where(allowed(landscape, x, y), np.exp(log_omega), 0.0)


def long_run(landscape, p, radii=48, angles=24):
    """Places (two each way in every sub-cell) and their shares w · (k ∗ w), k in a ring of equal chances a radius."""
    ny, nx = landscape.sub_cells.shape
    edge = float(landscape.cell) / 8
    x, y = (m.ravel() for m in np.meshgrid((np.arange(2 * nx) + 0.5) * edge / 2, (np.arange(2 * ny) + 0.5) * edge / 2))
    w = attraction(landscape, p.selection, x, y)
    x, y, w = x[w > 0], y[w > 0], w[w > 0]
    length = stats.gamma(float(p.shape), scale=float(p.scale)).ppf((np.arange(radii) + 0.5) / radii)
    offset = np.random.default_rng(1).uniform(0, 1, (radii, x.size))  # each place turns its rings on its own
    around = np.zeros_like(w)
    for i, r in enumerate(length):
        for j in range(angles):
            turn = (j + offset[i]) * 2 * np.pi / angles
            around += attraction(landscape, p.selection, x + r * np.cos(turn), y + r * np.sin(turn))
    return x, y, w, w * around / (radii * angles)


def places_in_the_long_run(landscape, p, walkers, burn, every, snapshots, seed):
    """Every `every`th place of independent walks from one start, after a burn-in."""
    timeline = regular_timeline(burn + every * (snapshots - 1), 1.0)
    start = jnp.asarray([0.11, 0.11])
    walk = jax.jit(lambda keys: jax.lax.map(lambda key: simulate(p, landscape, timeline, start, key), keys))
    walks = walk(jax.random.split(jax.random.key(seed), walkers))
    assert (walks.result == WALKED).all()
    return np.asarray(walks.x)[:, burn::every], np.asarray(walks.y)[:, burn::every]


def shares(x, y, weight, width, height, bins):
    counts, *_ = np.histogram2d(np.ravel(x), np.ravel(y), bins, ((0, width), (0, height)), weights=weight)
    return counts.ravel()


def waves(ny, nx):
    """One layer: half a wave along x and a slope along y, sd 1."""
    layer = np.cos(np.pi * (np.arange(nx) + 0.5) / nx)[None] + 0.6 * np.linspace(-1, 1, ny)[:, None]
    return (layer / layer.std())[None]


def test_simulated_use_is_the_closed_form_with_a_pond_and_edges():
    """2 × 1.5 km, steps of 0.56 km on average, 700 walks × 3 places 80 steps apart."""
    land = np.ones((120, 160))
    land[50:90, 20:60] = 0
    landscape, p = ground(waves(15, 20), land, 0.1), parameters(1, selection=[0.7], concentration=0.0, scale=0.35)
    x, y = places_in_the_long_run(landscape, p, 700, 100, 80, 3, 2)
    correlation = [np.corrcoef(c[:, :-1].ravel(), c[:, 1:].ravel())[0, 1] for c in (x, y)]
    assert max(correlation) < 0.08  # 1 / √1400 = 0.027 by chance: as good as independent
    at_x, at_y, w, u = long_run(landscape, p)
    expected, plain, squared = (shares(at_x, at_y, v / v.sum(), 2.0, 1.5, (6, 4)) * x.size for v in (u, w, w**2))
    seen = shares(x, y, None, 2.0, 1.5, (6, 4))
    assert seen[expected == 0].sum() == 0
    used = expected > 0
    assert expected[used].min() > 5  # enough for the law of the test
    assert stats.chisquare(seen[used], expected[used]).pvalue > LEVEL
    for limit in (plain, squared):  # and it is neither of the limits
        assert stats.chisquare(seen[used], limit[used]).pvalue < 1e-8


def test_simulated_use_with_steps_far_longer_than_the_ground_is_w():
    """Shape 2 makes k level for r ≪ scale: k departs by some 5 % over the ground, k ∗ w by far less."""
    landscape = ground(waves(8, 8), np.ones((64, 64)), 0.1)
    p = parameters(1, selection=[0.7], concentration=0.0, shape=2.0, scale=6.0)
    walk = simulate(p, landscape, regular_timeline(2500, 1.0), jnp.asarray([0.11, 0.11]), 3)
    centre = (np.arange(256) + 0.5) * 0.8 / 256
    x, y = (m.ravel() for m in np.meshgrid(centre, centre))
    w = attraction(landscape, p.selection, x, y)
    seen = shares(walk.x[1:], walk.y[1:], None, 0.8, 0.8, (6, 6))
    for v, holds in ((w, True), (w**2, False)):
        pvalue = stats.chisquare(seen, shares(x, y, v / v.sum(), 0.8, 0.8, (6, 6)) * 2500).pvalue
        assert pvalue > LEVEL if holds else pvalue < 1e-8


def test_simulated_use_with_steps_far_shorter_than_the_layers_grain_is_w_squared():
    """0.3 × 0.3 km, steps of 0.02 km: away from the edges, where k ∗ w falls off, use is w² and not w."""
    layer = waves(6, 6)
    landscape, p = ground(layer, np.ones((48, 48)), 0.05), parameters(1, selection=[0.8], shape=2.0, scale=0.01)
    p = p._replace(concentration=jnp.asarray(0.0))
    x, y = places_in_the_long_run(landscape, p, 600, 400, 150, 5, 4)
    at_x, at_y, w, u = long_run(landscape, p)
    seen, expected, plain, squared = (
        shares(a, b, v, 0.3, 0.3, (6, 6))
        for a, b, v in ((x, y, None), (at_x, at_y, u / u.sum()), (at_x, at_y, w), (at_x, at_y, w**2))
    )
    # places of a walk 150 steps apart, relaxation some 60 steps: correlation about 0.1 at most, a twentieth of chi²
    assert stats.chisquare(seen, expected * x.size).pvalue > LEVEL
    inner = np.zeros((6, 6), bool)
    inner[1:-1, 1:-1] = True
    seen, plain, squared = (v[inner.ravel()] for v in (seen, plain, squared))
    assert stats.chisquare(seen, squared / squared.sum() * seen.sum()).pvalue > LEVEL
    assert stats.chisquare(seen, plain / plain.sum() * seen.sum()).pvalue < 1e-8
