"""A slow twin of the range model's log posterior in NumPy and SciPy: loops, dense matrices, no shared code.

Everything is written out from mathematics.md, section 1: the Gibbs law by damped repetition, scent from a linear
system in each cell, perception by the matrix of all distances between cells, fixes read by hand.
"""

from dataclasses import dataclass

import numpy as np
from scipy import stats
from scipy.special import roots_hermitenorm


@dataclass
class Ground:
    """Inside cells of a study in km: centres, habitable areas, standardised layers, integrals of the bilinear basis."""

    xy: np.ndarray
    area: np.ndarray
    layers: np.ndarray
    basis: np.ndarray
    index: np.ndarray  # (ny, nx): number of the inside cell, −1 elsewhere
    west_m: float
    south_m: float
    cell_m: float

    @classmethod
    def of(cls, study, layers):
        grid = study.grid
        rows, columns = np.nonzero(grid.habitable > 0)
        edge = grid.cell_m / 1000
        x = grid.west_m / 1000 + (columns + 0.5) * edge
        y = grid.south_m / 1000 + (rows + 0.5) * edge
        share = grid.habitable[rows, columns]
        standard = []
        for name in layers:
            values = study.layers[name].values[rows, columns]
            mean = (values * share).sum() / share.sum()
            sd = np.sqrt((share * (values - mean) ** 2).sum() / share.sum())
            standard.append((values - mean) / sd)
        index = np.full(grid.habitable.shape, -1)
        index[rows, columns] = np.arange(rows.size)
        basis = grid.basis_share[rows, columns] * edge**2
        cells = np.array(standard).reshape(len(layers), rows.size)
        return cls(np.stack([x, y], 1), share * edge**2, cells, basis, index, grid.west_m, grid.south_m, grid.cell_m)


def solitary(ground, beta, gamma, homes_km, softening):
    """−βρ + Σ γh of each group, (groups, cells)."""
    gap = ground.xy[None] - homes_km[:, None]
    rho = np.sqrt((gap**2).sum(2) + softening**2)
    return -beta[:, None] * rho + gamma.T @ ground.layers


def gibbs_law(ground, potential, alpha, m, marking, perception):
    """Densities (groups, cells) where u = exp(potential − αF̃)/Z and F̃ comes from the others' marks."""
    distance2 = ((ground.xy[:, None] - ground.xy[None]) ** 2).sum(2)
    kernel = np.exp(-0.5 * distance2 / perception**2) * ground.area[None]
    kernel /= kernel.sum(1, keepdims=True)
    groups = len(marking)
    foreign = np.zeros_like(potential)
    others = 1 - np.eye(groups)
    for _ in range(500):
        exponent = potential - alpha[:, None] * foreign
        density = np.exp(exponent - exponent.max(1, keepdims=True))
        density /= (density * ground.area).sum(1, keepdims=True)
        scent = marking[:, None] * density
        # p_i − m q_i Σ_{j≠i} p_j = q_i in each cell
        system = np.eye(groups) - m * scent.T[:, :, None] * others
        marks = np.linalg.solve(system, scent.T[:, :, None])[:, :, 0].T
        new = others @ marks @ kernel.T
        change = np.abs(new - foreign).max()
        foreign = 0.5 * (new + foreign)
        if change < 1e-13:
            return density
    raise ArithmeticError("the twin did not settle")


def fix_densities(ground, density, x, y, group, error_m):
    """Density at each fix [1/km²]: bilinear on inside cells, over the integral; 3 × 3 Gauss–Hermite nodes of error."""
    total = density @ ground.basis
    nodes, weights = roots_hermitenorm(3)
    weights = weights / weights.sum()
    found = np.zeros(len(x))
    for k in range(len(x)):
        places = [(0.0, 0.0, 1.0)]
        if error_m[k] > 0:
            places = [(a, b, v * w) for a, v in zip(nodes, weights) for b, w in zip(nodes, weights)]
        for a, b, weight in places:
            value = _bilinear(ground, density[group[k]], x[k] + a * error_m[k], y[k] + b * error_m[k])
            found[k] += weight * value / total[group[k]]
    return found


def _bilinear(ground, values, x, y):
    along, up = (x - ground.west_m) / ground.cell_m - 0.5, (y - ground.south_m) / ground.cell_m - 0.5
    column, row = int(np.floor(along)), int(np.floor(up))
    top = mass = 0.0
    for i, wy in ((row, 1 - (up - row)), (row + 1, up - row)):
        for j, wx in ((column, 1 - (along - column)), (column + 1, along - column)):
            if 0 <= i < ground.index.shape[0] and 0 <= j < ground.index.shape[1] and ground.index[i, j] >= 0:
                top, mass = top + wx * wy * values[ground.index[i, j]], mass + wx * wy
    return top / mass


def positive(prior, z):
    """Log density of θ = e^z under a SciPy prior, with the Jacobian e^z."""
    return float(np.sum(prior.logpdf(np.exp(z)) + z))


def between(low, high, z):
    """Log density of a uniform on [low, high] where θ = low + (high − low)/(1 + e^−z), and θ itself."""
    share = 1 / (1 + np.exp(-np.asarray(z)))
    theta = low + (high - low) * share
    return float(np.sum(np.log(share * (1 - share)))), theta  # 1/(high − low) and (high − low) s(1 − s)


def half_normal(scale):
    return stats.halfnorm(scale=scale)


def log_normal(median, spread):
    return stats.lognorm(s=spread, scale=median)
