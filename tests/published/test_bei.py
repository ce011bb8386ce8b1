"""A real point pattern: trees and slope on Barro Colorado Island (data/SOURCE.md), by the card `resources`.

With no home and no neighbours u = exp(γ h)/∫exp(γ h): n positions have the likelihood of a log-linear Poisson process
given n. Published: Baddeley, Rubak & Turner 2015, Spatial Point Patterns, ch. 9 (authors' sample chapter, p. 306–335),
by quadrature; exact: Newton's method on pixels, equal to statsmodels' GLM and base R's glm to 1e-9 (2026-12-01).
"""

from pathlib import Path

import arviz_stats
import jax
import jax.numpy as jnp
import numpy as np
import pyproj
import pytest
from scipy import optimize
from scipy.interpolate import RegularGridInterpolator
from spaceuse._grounds import make_model

from bayesrange.inference import Program, Whitening, find_start, fix_entries
from bayesrange.spaceuse import Reading, Setting, make_domain
from bayesrange.study import Grid

DATA = Path(__file__).with_name("data")
CELL = 5.0  # [m]
EXACT = {"grad": 5.0293144, "se": 0.24545646}


@pytest.fixture(scope="module")
def plot():
    """Raster and trees: x, y, elev, grad, area, and `trees` (n, 2) [m]."""
    with np.load(DATA / "bei_grid.npz") as raster:
        found = {name: raster[name] for name in ("x", "y", "elev", "grad", "area")}
    found["trees"] = np.loadtxt(DATA / "bei_points.csv", delimiter=",", skiprows=1)
    assert found["trees"].shape == (3604, 2) and found["area"].sum() == 500_000
    return found


class Fit:
    """The card `resources` on the raster's own pixels: mode, curvature, and the sampler; γ per unit of the layers.

    The prior is normal with sd 1,000 per sd of a layer: it moves γ by 1e-10 of itself.
    """

    def __init__(self, plot, layers, how):
        area = plot["area"] / CELL**2
        ny, nx = area.shape
        crs = pyproj.CRS(32631)  # any in metres: the plot has its own
        # a hat's integral over the plot is its pixel's area inside: half at edges, a quarter in corners
        grid = Grid(-CELL / 2, -CELL / 2, CELL, crs, area, area, np.ones((8 * ny, 8 * nx), bool))
        trees = plot["trees"]
        cell, log_share = fix_entries(grid, trees[:, 0], trees[:, 1], np.zeros(len(trees)), how)
        km2 = jnp.asarray(plot["area"] / 1e6)
        reading = Reading(jnp.asarray(cell), jnp.asarray(log_share), jnp.zeros(len(trees), int), km2)
        raw = np.stack([plot[name] for name in layers])
        mean = (raw * area).sum((1, 2)) / area.sum()
        self.sd = np.sqrt((((raw - mean[:, None, None]) ** 2) * area).sum((1, 2)) / area.sum())
        standard = (raw - mean[:, None, None]) / self.sd[:, None, None]
        domain = make_domain(plot["x"] / 1000, plot["y"] / 1000, plot["area"] / 1e6, 0.0)
        setting = Setting(domain, jnp.asarray(standard), jnp.ones(1), jnp.asarray(CELL / 2000))
        flat = {"resource": ("normal", (0.0, 1000.0))}
        spec, self.data = make_model(setting, reading, flat, [0.5, 0.25], layers)
        self.program = Program(spec, self.data, 150, 0.8, 500)
        start = find_start(lambda z: self.program.value_and_gradient(jnp.asarray(z), self.data), np.zeros(len(layers)))
        self.start, self.estimate = start, start.mode / self.sd
        self.covariance = np.linalg.inv(start.curvature)
        self.se = np.sqrt(np.diag(self.covariance)) / self.sd

    def sample(self, chains, draws):
        """γ of the draws after 150 of warm-up: (chains, draws, layers)."""
        whitening = Whitening(jnp.asarray(self.start.mode), jnp.asarray(np.linalg.cholesky(self.covariance)))
        positions = []
        for chain in range(chains):
            key = jax.random.key_data(jax.random.key(chain))
            state = self.program.begin(jnp.zeros(self.program.dimension), key, self.data, whitening)
            for count in (150, draws):
                state, record = self.program.advance(state, count, self.data, whitening)
            positions.append(np.asarray(record.position)[:draws] / self.sd)
        return np.stack(positions)


@pytest.fixture(scope="module")
def slope(plot):
    return Fit(plot, ("grad",), "cell")


def test_slope_by_pixel_is_the_exact_and_the_published_estimate(slope):
    # exact pixel ML; the mode is found to a gradient of 1e-5 of a curvature of 430 per sd²
    assert slope.estimate[0] == pytest.approx(EXACT["grad"], rel=1e-6)
    # published 5.022 by quadrature with dummy points, 0.03 standard errors away
    assert abs(slope.estimate[0] - 5.022) < 0.02
    # standard error: exact .24545646, published .24540; curvature by differences of the gradient
    assert slope.se[0] == pytest.approx(EXACT["se"], rel=1e-5)


def test_log_likelihood_of_the_positions(slope):
    # per m²: −47101.30316172377 at the estimate, −47292.9976121652 for even use; here per km², and a prior
    per_km2 = 3604 * np.log(1e6)
    prior = -0.5 * (slope.start.mode[0] / 1000) ** 2 - np.log(1000 * np.sqrt(2 * np.pi))
    assert -slope.start.potential - prior - per_km2 == pytest.approx(-47101.30316172377, abs=1e-7)
    even, _ = slope.program.value_and_gradient(jnp.zeros(1), slope.data)
    prior = -np.log(1000 * np.sqrt(2 * np.pi))
    # 3,604 terms of 13, and their sum
    assert -float(even) - prior - per_km2 == pytest.approx(-47292.9976121652, abs=1e-7)


def test_elevation_and_slope_together(plot):
    fit = Fit(plot, ("elev", "grad"), "cell")
    np.testing.assert_allclose(fit.estimate, [0.02145649, 5.848433], rtol=1e-6)  # exact; printed to 7 digits
    np.testing.assert_allclose(fit.se, [0.00228864, 0.255828], rtol=1e-5)  # exact; differences of the gradient
    # published .02141, 5.84104, SE .002288, .255861: quadrature is .02 and .03 standard errors off
    assert (abs(fit.estimate - [0.02141, 5.84104]) < 0.05 * fit.se).all()


def test_slope_between_pixels_is_scipys_estimate(plot):
    def misfit(gamma):
        use = np.exp(gamma * plot["grad"])
        at_trees = RegularGridInterpolator((plot["y"], plot["x"]), use)(plot["trees"][:, ::-1])
        return np.log((use * plot["area"]).sum()) - np.log(at_trees).mean()

    by_scipy = optimize.minimize_scalar(misfit, bounds=(3, 7), method="bounded", options={"xatol": 1e-9}).x
    estimate = Fit(plot, ("grad",), "bilinear").estimate[0]
    assert estimate == pytest.approx(by_scipy, rel=1e-6)
    # as noted beside the published values when they were collected; it is a rule of its own, not an error of the other
    assert estimate == pytest.approx(5.0498, abs=6e-5)
    assert abs(estimate - EXACT["grad"]) > 0.02


def test_posterior_is_normal_about_the_estimate(slope):
    draws = slope.sample(chains=2, draws=500)[..., 0]
    ess = float(arviz_stats.ess(draws))
    assert ess > 250  # gate: below it the limits below mean nothing
    assert float(arviz_stats.rhat(draws)) < 1.02
    sd = EXACT["se"]
    # 4 standard errors of a mean, and of a standard deviation of normal draws (at half the effective draws)
    assert abs(draws.mean() - EXACT["grad"]) < 4 * sd / np.sqrt(ess)
    assert abs(draws.std() / sd - 1) < 4 / np.sqrt(ess)
    # and a shape without skew: sd of the skewness of n normal draws is √(6/n)
    assert abs((((draws - draws.mean()) / draws.std()) ** 3).mean()) < 4 * np.sqrt(6 / ess)
