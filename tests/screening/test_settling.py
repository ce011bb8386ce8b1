"""When an animal settled: simulated tracks whose move is known. Shapes after Bunnefeld et al. (2011)."""

import numpy as np
import pandas as pd
import pytest
from screening._tracks import START, times, wandering

from bayesrange.screening import settling

N = 1200
SHARE = np.arange(N) / N
DAYS = N * 2 / 24


def verdicts(move, seeds=20, **how):
    """Verdict and settled date (share of the record) of tracks that follow `move` [m] in the east."""
    found = []
    for seed in range(seeds):
        place = (wandering(N, seed=seed, **how) + np.column_stack([move, np.zeros(N)])) / 1000
        one = settling(times(N), place)
        when = None if one.settled is None else (one.settled - START) / pd.Timedelta(days=1) / DAYS
        found.append((one.verdict, when))
    return found


@pytest.mark.parametrize("tau_h", [12.0, 72.0])
def test_an_animal_that_stays_is_settled_from_the_start(tau_h):
    assert verdicts(np.zeros(N), tau_h=tau_h) == [("settled", None)] * 20


@pytest.mark.parametrize("until", [0.1, 0.2, 0.35])
def test_a_drift_at_the_start_is_dated(until):
    found = verdicts(10_000 * np.clip(1 - SHARE / until, 0, 1))
    assert {verdict for verdict, _ in found} == {"settled"}
    # The shape's 95 % point lies within a tenth of the record of the end of the drift, and near it in the middle.
    assert all(abs(when - until) < 0.12 for _, when in found)
    assert np.median([when for _, when in found]) == pytest.approx(until, abs=0.04)


def test_out_and_back_is_migrating():
    found = verdicts(10_000.0 * ((SHARE > 0.3) & (SHARE < 0.7)))
    assert {verdict for verdict, _ in found} == {"migrating"}


def test_a_late_move_is_migrating_with_its_date():
    found = verdicts(10_000.0 * (SHARE > 0.5))
    assert {verdict for verdict, _ in found} == {"migrating"}
    assert np.median([when for _, when in found]) == pytest.approx(0.5, abs=0.03)


def test_one_that_goes_on_drifting_is_not_settled():
    assert {verdict for verdict, _ in verdicts(10_000 * SHARE)} == {"not settled"}


def test_the_shape_passes_through_the_displacement():
    place = (wandering(N) + np.column_stack([10_000 * np.clip(1 - SHARE / 0.2, 0, 1), np.zeros(N)])) / 1000
    one = settling(times(N), place)
    late = one.days > 0.4 * DAYS
    # Shapes come from a grid of times and widths, so that the plateau is not exactly the mean.
    assert one.shape_km2[late].mean() == pytest.approx(one.nsd_km2[late].mean(), rel=0.05)


@pytest.mark.parametrize("n", [1, 2, 30])
def test_few_fixes_give_no_verdict(n):
    assert settling(times(n), wandering(n) / 1000).verdict == "too few fixes"


def test_an_animal_that_never_moved_is_settled():
    assert settling(times(N), np.zeros((N, 2))).verdict == "settled"


@pytest.mark.parametrize(("n", "hours", "tau_h"), [(60, 6.0, 1.0), (150, 6.0, 12.0), (300, 4.0, 12.0)])
def test_few_fixes_seldom_make_a_journey_by_chance(n, hours, tau_h):
    found = [settling(times(n, hours), wandering(n, hours, tau_h, seed=s) / 1000).verdict for s in range(100)]
    assert found.count("settled") >= 97  # seen: at most 1 of 100
