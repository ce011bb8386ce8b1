"""Two groups on a line whose pull home grows with the other's density where they stand: boundary-value tables.

Tables by `scipy.integrate.solve_bvp` and again by quadrature, see data/SOURCE_flux.md. The drift, a tanh instead of the
package's smooth direction and no perception distance, is handed to the fluxes face by face.
"""

from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from bayesrange.spaceuse import null_density

DATA = Path(__file__).parent / "data"
TABLES = {
    "a": {"pull": 4.0, "home": (0.3, 0.7), "width": 0.05, "bhattacharyya": 0.6761122934019759},
    "b": {"pull": 6.0, "home": (0.25, 0.6), "width": 0.1, "bhattacharyya": 0.5248637878824132},
}


def by_cells(n, pull, home, width):
    """Densities in n cells, each group's drift made of the other's density until nothing changes."""
    faces = np.arange(1, n) / n
    towards = -np.tanh((faces - np.array(home)[:, None]) / width)
    area, density = np.full((1, n), 1 / n), np.ones((2, n))
    for _ in range(200):
        others = density[::-1]
        drift = pull * 0.5 * (others[:, 1:] + others[:, :-1]) * towards / n
        new = np.asarray(null_density(drift[:, None], np.zeros((2, 0, n)), area))[:, 0]
        change = np.abs(new - density).max()
        density = 0.5 * (new + density)
        if change < 1e-11:
            return density
    raise AssertionError(f"no steady state after 200 rounds, last change {change}")


@pytest.mark.parametrize("name", TABLES)
def test_cells_converge_to_the_table_at_order_2(name):
    case = dict(TABLES[name])
    published = case.pop("bhattacharyya")
    table = pd.read_csv(DATA / f"retreat_1d_{name}.csv")
    expected, errors, overlaps = table[["u1", "u2"]].to_numpy().T, [], []
    for n in (100, 200, 400):
        density = by_cells(n, **case)
        # the table's points are faces: the mean of two cells, or the line through the last two, is right to order 2
        padded = np.concatenate(
            [2 * density[:, :1] - density[:, 1:2], density, 2 * density[:, -1:] - density[:, -2:-1]], axis=1
        )
        at_faces = 0.5 * (padded[:, 1:] + padded[:, :-1])
        step = n // 20
        errors.append(np.abs(at_faces[:, ::step] - expected).max())
        overlaps.append(abs(np.sqrt(density[0] * density[1]).mean() - published))
    orders = -np.diff(np.log2(errors))
    assert (abs(orders - 2) < 0.1).all(), (errors, orders)
    assert errors[-1] < 1e-3 and errors[-1] < 1e-3 * expected.max()
    assert (abs(-np.diff(np.log2(overlaps)) - 2) < 0.1).all(), overlaps
