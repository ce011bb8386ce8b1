"""Grounds to solve on: square cells, wholly or partly habitable, and parameters laid out by group."""

import jax
import jax.numpy as jnp
import numpy as np
import pyproj
from scipy import ndimage

from bayesrange.inference import RangeData, RangeSpec
from bayesrange.spaceuse import Domain, Parameters, Reading, Setting, gibbs, make_domain
from bayesrange.study import Grid

SUB = 8
"""Sub-cells along the edge of a cell, by which a grid knows its habitable ground."""


solve = jax.jit(gibbs, static_argnames="coupled")
"""One compilation per shape instead of one per operation."""


def square(n: int = 24, cell: float = 0.1, perception: float = 0.2, ny: int | None = None) -> Domain:
    """Cells [km] from (0, 0), all habitable."""
    ny = n if ny is None else ny
    x, y = ((np.arange(k) + 0.5) * cell for k in (n, ny))
    return make_domain(x, y, np.full((ny, n), cell**2), perception)


def ragged_grid(ny: int = 18, nx: int = 22, cell_m: float = 100.0) -> Grid:
    """An ellipse with a pond and an inlet: whole, partial and missing cells; basis share summed by its definition."""
    at_y, at_x = ((np.arange(k * SUB) + 0.5) / SUB for k in (ny, nx))
    x, y = np.meshgrid(at_x * 22 / nx, at_y * 18 / ny)
    land = ((x - 11) / 10.6) ** 2 + ((y - 9) / 8.3) ** 2 < 1
    land &= (x - 15.2) ** 2 + (y - 11.1) ** 2 > 2.1**2
    land &= ~((abs(x - 6) < 0.9) & (y < 6.3))
    habitable = land.reshape(ny, SUB, nx, SUB).mean((1, 3))
    west, south, crs = 1000.0, -300.0, pyproj.CRS(32631)
    grid = Grid(west, south, cell_m, crs, habitable, np.zeros((ny, nx)), land)
    x, y = np.meshgrid(west + cell_m * at_x, south + cell_m * at_y)
    rows, columns, weight = grid.bilinear(x[land], y[land])
    share = np.bincount((rows * nx + columns).ravel(), weights=weight.ravel(), minlength=ny * nx) / SUB**2
    return Grid(west, south, cell_m, crs, habitable, share.reshape(ny, nx), land)


def ragged(perception: float = 0.2) -> Domain:
    """The domain of `ragged_grid` [km]."""
    grid = ragged_grid()
    area = grid.habitable * (grid.cell_m / 1000) ** 2
    return make_domain(grid.x_m / 1000, grid.y_m / 1000, area, perception)


def smooth_layer(rng: np.random.Generator, domain: Domain, cells: float = 3.0) -> np.ndarray:
    """A random layer of the given grain; mean 0 and sd 1 over the habitable area, 0 outside."""
    area = np.asarray(domain.area)
    layer = ndimage.gaussian_filter(rng.normal(size=area.shape), cells)
    mean = np.average(layer, weights=area)
    sd = np.sqrt(np.average((layer - mean) ** 2, weights=area))
    return np.where(area > 0, (layer - mean) / sd, 0.0)


def make_setting(domain: Domain, layers=(), animals=(1.0,), softening: float = 0.05) -> Setting:
    """Setting in which A₀ is the habitable area per animal, so that mean scent is 1."""
    animals = np.asarray(animals, float)
    a0 = float(domain.area.sum()) / animals.sum()
    stacked = np.asarray(layers, float).reshape(len(layers), *domain.area.shape)
    return Setting(domain, jnp.asarray(stacked), jnp.asarray(animals * a0), jnp.asarray(softening))


def make_parameters(home, localising=4.0, avoidance=0.0, resource=(), over_marking=0.0, retreat=0.0) -> Parameters:
    """Parameters from one value for all groups or one for each; `resource` has a row per layer."""
    home = jnp.asarray(home, float).reshape(-1, 2)
    groups = home.shape[0]
    resource = jnp.asarray(resource, float)
    resource = resource[:, None] if resource.ndim == 1 else resource
    return Parameters(
        localising=jnp.broadcast_to(jnp.asarray(localising, float), (groups,)),
        retreat=jnp.broadcast_to(jnp.asarray(retreat, float), (groups,)),
        avoidance=jnp.broadcast_to(jnp.asarray(avoidance, float), (groups,)),
        resource=jnp.broadcast_to(resource, (resource.shape[0], groups)),
        over_marking=jnp.asarray(over_marking, float),
        home=home,
    )


def make_model(
    setting: Setting, reading: Reading, priors: dict[str, tuple[str, tuple[float, ...]]], home, layers=()
) -> tuple[RangeSpec, RangeData]:
    """A range model with shared parameters, known homes and weights of 1, built by hand.

    Args:
        setting: area, layers, groups.
        reading: of the fixes.
        priors: family and numbers of each parameter.
        home: one home for each group [km].
        layers: names of the layers.
    """
    home = jnp.asarray(home, float).reshape(-1, 2)
    groups, parameters = home.shape[0], tuple(name for name in priors if name != "over_marking")
    spec = RangeSpec(
        parameters=parameters, families=tuple((name, family) for name, (family, _) in priors.items()), varying=(),
        solver="gibbs", coupled="avoidance" in priors, over_marking="over_marking" in priors, layers=tuple(layers),
        groups=tuple("abcdefghij"[:groups]), covariates=(), estimated=(),
    )  # fmt: skip
    x, y = setting.domain.x, setting.domain.y
    data = RangeData(
        setting=setting, reading=reading, weight=jnp.ones(reading.group.shape), home=home,
        box=jnp.stack([x[0], y[0], x[-1], y[-1]]), priors={name: jnp.asarray(n) for name, (_, n) in priors.items()},
        spread_scale=jnp.zeros(0), covariates=jnp.zeros((groups, 0)), effect_sd=jnp.asarray(0.5),
        centring=jnp.zeros((groups, 0)),
    )  # fmt: skip
    return spec, data
