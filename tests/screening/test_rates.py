"""Intervals and the 24-hour rhythm."""

import numpy as np
import pytest
from screening._tracks import wandering

from bayesrange.screening import commonest_interval_h, rhythm
from bayesrange.screening._rates import histogram


def test_the_commonest_interval_is_found_among_jitter_and_gaps():
    rng = np.random.default_rng(1)
    intervals = np.concatenate([4 + rng.normal(0, 0.01, 300), np.full(40, 8.0), np.full(100, 0.25)])
    assert commonest_interval_h(intervals, 0.1) == pytest.approx(4.0, abs=1 / 60)


def test_intervals_are_counted_once_each():
    intervals = np.array([0.25, 1.0, 1.0, 4.0, 24.0, 500.0])
    table = histogram(intervals)
    assert table["intervals"].sum() == 6
    assert table.loc[(table["from_h"] <= 1.0) & (table["to_h"] > 1.0), "intervals"].item() == 2


def den(n=1440, hours=2.0, seed=2):
    """At a den for the sixteen hours of the day, out for eight."""
    rng = np.random.default_rng(seed)
    out = (np.arange(n) * hours) % 24 < 8
    return np.where(out[:, None], wandering(n, hours, tau_h=4.0, seed=seed), 0.0) + 12 * rng.normal(size=(n, 2))


def test_a_den_animal_has_a_24_hour_rhythm_with_its_trough_at_12():
    n = 1440
    found = rhythm(np.arange(n) * 2.0, den(n) / 1000, 2.0, 0.1)
    at = {h: found.correlation[np.argmin(np.abs(found.lag_h - h))] for h in (12, 24)}
    assert found.verdict == "24-hour rhythm" and at[24] > 0.5 and at[12] < 0


@pytest.mark.parametrize("seed", range(10))
def test_a_wanderer_has_none(seed):
    found = rhythm(np.arange(1200) * 2.0, wandering(seed=seed) / 1000, 2.0, 0.1)
    assert found.verdict == "no 24-hour rhythm"
    assert np.abs(found.correlation).max() < 5 / np.sqrt(1000)  # five standard errors


def test_gaps_do_not_hide_a_rhythm():
    hours, place = np.arange(1440) * 2.0, den() / 1000
    kept = np.random.default_rng(3).random(1440) > 0.3
    assert rhythm(hours[kept], place[kept], 2.0, 0.1).verdict == "24-hour rhythm"


@pytest.mark.parametrize(("n", "hours"), [(1200, 12.0), (10, 2.0), (1, 2.0)])
def test_too_rare_or_too_few_fixes_cannot_tell(n, hours):
    assert rhythm(np.arange(n) * hours, wandering(n, hours) / 1000, hours, 0.1).verdict == "cannot be told"


def test_lively_and_lazy_weeks_are_no_24_hour_rhythm():
    rng = np.random.default_rng(6)
    lively = np.exp(1.5 * np.sin(2 * np.pi * np.arange(1440) / (12 * 14)))  # a period of two weeks
    place = np.cumsum(lively[:, None] * rng.normal(size=(1440, 2)) * 100, axis=0)
    found = rhythm(np.arange(1440) * 2.0, place / 1000, 2.0, 0.1)
    assert found.correlation[np.argmin(np.abs(found.lag_h - 24))] > 0.3 and found.verdict == "no 24-hour rhythm"
