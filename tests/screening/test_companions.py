"""Travelling pairs, against counting by hand."""

import itertools

import numpy as np
import pandas as pd
import pytest
from screening._tracks import table, wandering

from bayesrange.screening import travelling_pairs


def herd(n=600):
    leader = wandering(n, seed=1)
    rng = np.random.default_rng(5)
    beside = leader + 15 * rng.normal(size=(n, 2))
    beside[400:] = wandering(n, seed=9)[400:] + 3000
    tracks = {"A1": leader, "A2": beside, "B1": wandering(n, seed=3) + 400}
    return pd.concat([table(place, animal=name) for name, place in tracks.items()], ignore_index=True)


def by_hand(fixes):
    shares = {}
    for a, b in itertools.combinations(sorted(set(fixes["animal"])), 2):
        both = fixes[fixes["animal"] == a].merge(fixes[fixes["animal"] == b], on="time")
        near = np.hypot(both["x_x"] - both["x_y"], both["y_x"] - both["y_y"]) <= 100
        shares[a, b] = (len(both), int(near.sum()))
    return shares


def test_shares_are_those_counted_by_hand():
    fixes = herd().drop(index=range(0, 300, 7))
    found = travelling_pairs(fixes, 2.0)
    told = {(p.first, p.second): (p.simultaneous, p.near) for p in found.itertuples()}
    assert told == by_hand(fixes)


def test_the_pair_that_travels_together_comes_first():
    first = travelling_pairs(herd(), 2.0).iloc[0]
    assert (first["first"], first["second"]) == ("A1", "A2")
    assert first["share"] == pytest.approx(400 / 600, abs=0.01)


def test_fixes_a_minute_apart_are_simultaneous_and_an_hour_apart_are_not():
    fixes = herd()
    for minutes, pairs in ((1, 3), (60, 1)):
        late = fixes["animal"] == "A2"
        moved = fixes.assign(time=fixes["time"] + pd.to_timedelta(np.where(late, minutes, 0), unit="min"))
        assert len(travelling_pairs(moved, 2.0)) == pairs


def test_in_pieces_as_in_one(monkeypatch):
    whole = travelling_pairs(herd(), 2.0)
    monkeypatch.setattr("bayesrange.screening._companions._AT_ONCE", 100)
    pd.testing.assert_frame_equal(travelling_pairs(herd(), 2.0), whole)


def test_one_animal_makes_no_pair():
    assert travelling_pairs(table(wandering()), 2.0).empty
