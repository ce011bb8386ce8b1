"""Steady densities of two drifts on the unit square, against triangular finite elements of degree 2 (scikit-fem).

With the stirring there is no potential and no closed form: nothing but the fluxes can get it right. The table and how
accurate it is: data/SOURCE_flux.md.
"""

import json
from pathlib import Path

import numpy as np
import pytest

from bayesrange.spaceuse import null_density

TABLE = json.loads((Path(__file__).parent / "data" / "finite_elements_2d.json").read_text())


def drift(x, y, stirring):
    """v = 1.5 ∇(sin πx cos 2πy) + 4 (c − x)/√(|x − c|² + .05²) + stirring (−∂ψ/∂y, ∂ψ/∂x), ψ = 16 [x(1−x) y(1−y)]²."""
    part = TABLE["params"]
    away_x, away_y = x - part["x0"], y - part["y0"]
    rho = np.sqrt(away_x**2 + away_y**2 + part["eps"] ** 2)
    v_x = part["gamma"] * np.pi * np.cos(np.pi * x) * np.cos(2 * np.pi * y) - part["beta"] * away_x / rho
    v_y = -2 * part["gamma"] * np.pi * np.sin(np.pi * x) * np.sin(2 * np.pi * y) - part["beta"] * away_y / rho
    p, q = x * (1 - x), y * (1 - y)
    return v_x - stirring * 32 * p**2 * q * (1 - 2 * y), v_y + stirring * 32 * q**2 * p * (1 - 2 * x)


def by_cells(n, stirring):
    """Density of the cells, from the drift in the middle of each face."""
    centres, faces = (np.arange(n) + 0.5) / n, np.arange(1, n) / n
    v_x, _ = drift(*np.meshgrid(faces, centres), stirring)
    _, v_y = drift(*np.meshgrid(centres, faces), stirring)
    return centres, np.asarray(null_density(v_x[None] / n, v_y[None] / n, np.full((n, n), 1 / n**2)))[0]


def summary(n, stirring):
    """u at the table's points, all of which are corners of four cells, then the mean position."""
    centres, u = by_cells(n, stirring)
    corners = [(round(x * n), round(y * n)) for x, y in TABLE["points"]]
    at = [u[j - 1 : j + 1, i - 1 : i + 1].mean() for i, j in corners]
    return np.array(at), np.array([(u.sum(0) @ centres), (u.sum(1) @ centres)]) / n**2


@pytest.mark.parametrize(
    "stirring, points, mean",
    [
        (0.0, TABLE["u_exact"], TABLE["mean"]),
        (TABLE["params"]["omega"], TABLE["rot_P2_160"]["u"], TABLE["rot_P2_160"]["mean"]),
    ],
    ids=["potential", "stirred"],
)
def test_fluxes_converge_to_finite_elements_at_order_2(stirring, points, mean):
    errors, shifts = [], []
    for n in (20, 40, 80):
        at, centre = summary(n, stirring)
        errors.append(np.abs(at - points).max())
        shifts.append(np.abs(centre - mean).max())
    # cells of 1/20 are as large as ε, hence the width
    assert (abs(-np.diff(np.log2(errors)) - 2) < 0.25).all(), errors
    assert (abs(-np.diff(np.log2(shifts)) - 2) < 0.25).all(), shifts
    assert shifts[-1] < 1e-3 and errors[-1] < 0.02


def test_stirring_matters():
    still, stirred = (np.array(values) for values in (TABLE["u_exact"], TABLE["rot_P2_160"]["u"]))
    assert np.abs(still - stirred).max() > 0.4
    assert np.abs(summary(80, 0.0)[0] - stirred).max() > 0.4
