"""Exact traces against the double loop of their definition."""

import math

import numpy as np
from memory._cases import SHORTEST, SIGMA, walk

from bayesrange.memory import (
    Reference,
    Stays,
    decay_basis,
    exact_trace,
    fixed_range,
    make_nodes,
    make_stays,
    make_steps,
    tabulate,
)
from bayesrange.memory import places as places_of

EPS = np.finfo(float).eps


def some_places(fixes=90, nodes=6):
    track = walk(fixes, 7)
    steps, _ = make_steps(track, 1.0, 0.1, SHORTEST, np.ones(len(track.time), bool))
    x, y = places_of(steps, make_nodes(steps, Reference(0.9, 0.4), nodes, 1))
    return make_stays(track, 1.0), steps.time, x, y


def test_the_trace_is_the_double_loop():
    stays, time, x, y = some_places()
    found = exact_trace(stays, time, x, y, 25.0, SIGMA)
    for i in range(0, len(time), 7):
        for j in range(x.shape[1]):
            total = 0.0
            for s in range(len(stays.time)):
                if stays.time[s] < time[i]:
                    d2 = (x[i, j] - stays.x[s]) ** 2 + (y[i, j] - stays.y[s]) ** 2
                    kept = stays.duration[s] * math.exp(-(time[i] - stays.time[s]) / 25.0)
                    total += kept * math.exp(-d2 / (2 * SIGMA**2))
            # sums of up to 90 positive terms: 90 roundings, and exponents good to their own size in ulps
            assert abs(found[i, j] - total) <= 1000 * EPS * total + 1e-300


def test_the_interval_that_starts_now_counts_in_no_trace():
    stays = Stays(np.array([0.0, 1.0]), np.ones(2), np.zeros(2), np.zeros(2), np.ones(2, bool))
    here = np.zeros((3, 1))
    found = exact_trace(stays, np.array([0.0, 1.0, 2.0]), here, here, 5.0, SIGMA)
    newest, older = math.exp(-1 / 5), math.exp(-2 / 5)  # the newest stay is one interval old
    assert np.allclose(found[:, 0], [0.0, newest, newest + older], rtol=4 * EPS)


def test_a_gap_is_remembered_along_its_line():
    track = walk(40, 2, keep_all=True)
    missing = (track.time < 10) | (track.time > 13)
    holed = type(track)(*(column[missing] for column in track))
    at = np.searchsorted(holed.time, 14.0)
    share = (np.arange(10, 14) - 9) / 5
    line = holed.x[at - 1] + share * (holed.x[at] - holed.x[at - 1])
    filled = track.x.copy()
    filled[10:14] = line
    filled_y = track.y.copy()
    filled_y[10:14] = holed.y[at - 1] + share * (holed.y[at] - holed.y[at - 1])
    x, y = track.x[None, ::5], track.y[None, ::5]
    now = np.array([30.0])
    by_hand = exact_trace(make_stays(type(track)(track.time, filled, filled_y), 1.0), now, x, y, 20.0, SIGMA)
    assert np.allclose(exact_trace(make_stays(holed, 1.0), now, x, y, 20.0, SIGMA), by_hand, rtol=1e-12)
    assert not np.allclose(exact_trace(make_stays(track, 1.0), now, x, y, 20.0, SIGMA), by_hand, rtol=1e-3)


def test_the_exact_traces_of_the_table_are_the_same_sums():
    stays, time, x, y = some_places()
    pairs = [(25.0, SIGMA), (700.0, 0.3), (2.0, SIGMA)]
    exact = tabulate(stays, time, x, y, decay_basis(0.9, 100.0, 1.0, 1000.0, 4), fixed_range(SIGMA), pairs)[1]
    for i, (decay, sigma) in enumerate(pairs):
        twin = exact_trace(stays, time, x, y, decay, sigma)
        # stays beyond 7 × 0.3 km are left out: below 3e-11 of an hour each, 90 stays
        assert np.abs(exact[..., i] - twin).max() < 90 * 3e-11
