"""Stays and steps of a track, against what a person would write down from the fixes."""

import numpy as np
import pytest
from memory._cases import SHORTEST, walk

from bayesrange.memory import Track, make_stays, make_steps


def track(*fixes):
    time, x, y = np.array(fixes, float).T
    return Track(time, x, y)


def steps_of(fixes, on_ground=None, learning=0.0, shortest=0.01):
    ground = np.ones(len(fixes.time), bool) if on_ground is None else np.array(on_ground, bool)
    return make_steps(fixes, 1.0, 0.1, shortest, ground, learning)


def test_a_gap_is_spent_in_nominal_pieces_along_the_line():
    stays = make_stays(track((0, 0, 0), (1, 1, 0), (4, 4, 6), (5, 4, 6)), 1.0)
    assert np.allclose(stays.time, [0, 1, 2, 3, 4], atol=1e-15)
    assert np.allclose(stays.duration, 1, atol=1e-15)
    assert np.allclose(stays.x, [0, 1, 2, 3, 4], atol=1e-15)
    assert np.allclose(stays.y, [0, 0, 2, 4, 6], atol=1e-15)
    assert stays.observed.tolist() == [True, True, False, False, True]


def test_an_odd_interval_is_cut_evenly_and_a_short_one_stays_whole():
    stays = make_stays(track((0, 0, 0), (2.6, 2.6, 0), (2.8, 0, 0)), 1.0)
    assert np.allclose(stays.time, [0, 2.6 / 3, 5.2 / 3, 2.6], atol=1e-15)
    assert np.allclose(stays.duration, [2.6 / 3] * 3 + [0.2], atol=1e-15)


def test_stays_add_up_to_the_record():
    fixes = walk(200, 3)
    assert np.isclose(make_stays(fixes, 1.0).duration.sum(), fixes.time[-1] - fixes.time[0], rtol=1e-13)


def test_turns_are_measured_from_the_step_before():
    steps, counts = steps_of(track((0, 0, 0), (1, 1, 0), (2, 1, 1), (3, 0, 1), (4, -1, 0.9999)))
    assert steps.turn_known.tolist() == [False, True, True, True]
    assert np.allclose(steps.turn[:3], [0, np.pi / 2, np.pi / 2], atol=1e-15)
    assert np.isclose(steps.turn[3], np.arctan(1e-4), rtol=1e-9)  # across the cut at ±π
    assert np.allclose(steps.heading, [0, 0, np.pi / 2, np.pi], atol=1e-15)
    assert counts == {
        "intervals": 4, "steps": 4, "not_nominal": 0, "off_ground": 0, "learning": 0, "short": 0, "turn_unknown": 1,
    }  # fmt: skip


def test_turning_back_is_a_turn_of_pi():
    steps, _ = steps_of(track((0, 0, 0), (1, 1, 0), (2, 0, 0)))
    assert np.isclose(steps.turn[1], np.pi, rtol=1e-15)


def test_after_a_gap_or_a_rest_the_turn_is_unknown():
    fixes = track((0, 0, 0), (1, 1, 0), (3, 2, 0), (4, 3, 0), (5, 3, 0.001), (6, 3, 1), (7, 3, 2))
    steps, counts = steps_of(fixes)
    assert steps.fix.tolist() == [0, 2, 3, 4, 5]
    assert steps.turn_known.tolist() == [False, False, True, False, True]
    assert steps.short.tolist() == [False, False, True, False, False]
    assert steps.turn[2] == 0  # its own turn is not used
    assert (counts["not_nominal"], counts["short"], counts["turn_unknown"]) == (1, 1, 3)


def test_steps_off_the_ground_and_while_learning_are_counted_apart():
    fixes = track(*[(t, t, 0) for t in range(8)])
    steps, counts = steps_of(fixes, on_ground=[1, 1, 1, 1, 0, 1, 1, 1], learning=2.0)
    assert steps.fix.tolist() == [2, 5, 6]
    assert (counts["off_ground"], counts["learning"], counts["steps"]) == (2, 2, 3)
    assert steps.turn_known.all()  # the fixes are there, though their steps do not count


def test_every_interval_is_counted_once():
    fixes = walk(300, 4)
    ground = np.random.default_rng(0).random(len(fixes.time)) > 0.05
    steps, counts = make_steps(fixes, 1.0, 0.1, SHORTEST, ground, 30.0)
    assert counts["steps"] + counts["not_nominal"] + counts["off_ground"] + counts["learning"] == counts["intervals"]
    assert counts["steps"] == len(steps.time) and min(counts.values()) > 0


def test_the_tolerance_is_a_share_of_the_interval():
    fixes = track((0, 0, 0), (1.1, 1, 0), (2.0, 2, 0), (3.11, 3, 0))
    assert steps_of(fixes)[0].fix.tolist() == [0, 1]


@pytest.mark.parametrize(
    ("fixes", "shortest", "interval", "sentence"),
    [
        (track((0, 0, 0), (1, 1, 1)), 0.0, 1.0, "`shortest` is the length"),
        (track((0, 0, 0), (1, 1, 1)), 0.1, 0.0, "`interval` is the nominal time"),
        (track((0, 0, 0), (1, 1, 1), (1, 2, 2)), 0.1, 1.0, "fix 2 is not later"),
    ],
)
def test_wrong_input_is_named(fixes, shortest, interval, sentence):
    with pytest.raises(ValueError, match=sentence):
        make_steps(fixes, interval, 0.1, shortest, np.ones(len(fixes.time), bool))
