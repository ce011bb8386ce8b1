"""Buffer zones between packs and where marks are laid, as signs.

Source: the abstracts of Nature 366:738 (1993) and J. Math. Biol. 35:749 (1997): zones with few animals form between
neighbouring packs, and scent marking rises near them. The papers give signs, no numbers: margins here only keep
rounding from passing for an effect.
"""

import numpy as np
import pytest
from spaceuse._grounds import make_parameters, make_setting, solve, square

from bayesrange.spaceuse import SOLVED

ROW, WEST, MIDDLE, EAST = 20, 17, slice(29, 31), 42  # cells of the homes and of the line between them
HOMES = [[0.875, 1.025], [2.125, 1.025]]


def two_packs(avoidance, over_marking=0.0):
    """Densities of two packs of 3 × 2 km, and the marks p that they lay, recomputed from q by its two-group formula."""
    setting = make_setting(square(60, 0.05, perception=0.1, ny=40), animals=[5.0, 5.0], softening=0.025)
    solution = solve(make_parameters(HOMES, 2.0, avoidance, over_marking=over_marking), setting)
    assert int(solution.result) == SOLVED
    q = np.asarray(setting.marking)[:, None, None] * np.asarray(solution.density)
    both = over_marking * q[0] * q[1]
    return np.asarray(solution.density), q, (q + both) / (1 - over_marking * both)


def test_a_buffer_with_few_animals_forms_between_neighbours():
    free, avoiding, strongly = (two_packs(alpha)[0] for alpha in (0.0, 0.5, 1.0))
    met = [(u[0] * u[1])[:, MIDDLE].sum() for u in (free, avoiding, strongly)]
    assert met[2] < met[1] < met[0]
    assert met[2] < 0.7 * met[0]  # the product of the densities on the mid-line
    animals = [u.sum(0)[:, MIDDLE].sum() for u in (free, avoiding, strongly)]
    assert animals[2] < animals[1] < animals[0]
    # a valley between the two homes, and deeper than that of two ranges that merely end
    for u in (avoiding, strongly):
        assert u.sum(0)[ROW, 29] / u.sum(0)[ROW, WEST] < 0.8 * free.sum(0)[ROW, 29] / free.sum(0)[ROW, WEST]


def test_ranges_draw_back_from_the_neighbour_and_not_from_the_other_side():
    free, avoiding = (two_packs(alpha)[0] for alpha in (0.0, 1.0))
    away, towards = 2 * WEST - 29, 29  # equally far from the western home
    assert avoiding[0][ROW, towards] < 0.9 * avoiding[0][ROW, away]
    # without avoidance distance is all that counts: closed form
    assert free[0][ROW, towards] == pytest.approx(free[0][ROW, away], rel=1e-12)


def test_marking_rises_near_the_edge_where_neighbours_meet():
    u, q, p = two_packs(0.5, over_marking=0.3)
    rate = p[0] / q[0]  # marks per visit
    away, towards = 2 * WEST - 29, 29
    assert rate[ROW, towards] > 1.1 * rate[ROW, WEST] and rate[ROW, WEST] > rate[ROW, away]
    # Marks of the western pack weigh more to the east than its animals do, and without over-marking they don't.
    x = 0.05 * (np.arange(60) + 0.5)
    means = [(field[0] * x).sum() / field[0].sum() for field in (p, q, u)]
    assert means[0] > means[1] + 0.02 and means[1] == pytest.approx(means[2], rel=1e-12)
    _, plain_q, plain_p = two_packs(0.5)
    assert np.array_equal(plain_p, plain_q)


def test_extra_marks_are_densest_between_the_homes():
    _, q, p = two_packs(0.5, over_marking=0.3)
    extra = (p - q)[0][ROW]
    assert WEST < extra.argmax() < EAST
    assert extra[WEST : EAST + 1].sum() > 0.6 * extra.sum()
