"""Which cards data can carry, and why not the others."""

import re
from types import SimpleNamespace

import pandas as pd
import pytest

from bayesrange.screening import Evidence, carried

RANGE = SimpleNamespace(name="avoidance", kind="range", terms=("localising", "avoidance"))
ALONE = SimpleNamespace(name="localising", kind="range", terms=("localising",))
RESOURCES = SimpleNamespace(name="resources", kind="range", terms=("resources",))
MEMORY = SimpleNamespace(name="memory", kind="memory", terms=("steps", "memory"))


def evidence(groups=None, animals=None, **more):
    columns = ["group", "fixes", "effective", "across_m", "cells", "home"]
    rows = [("north", 300, 60.0, 2000.0, 20.0, True), ("south", 300, 60.0, 2400.0, 24.0, False)]
    tracks = [("A1", 299, 290, 300.0, 10.0, "settled"), ("B1", 299, 280, 300.0, 10.0, "settled")]
    return Evidence(
        **{
            "groups": pd.DataFrame(rows if groups is None else groups, columns=columns),
            "animals": pd.DataFrame(
                tracks if animals is None else animals,
                columns=["animal", "steps", "usable", "step_m", "error_m", "verdict"],
            ),
            "interval_h": 2.0, "area": True, "layers": ["worms"], "loose": 0,
        }
        | more
    )  # fmt: skip


def test_sound_data_carry_every_card():
    for one in carried(evidence(), [RANGE, ALONE, RESOURCES, MEMORY]):
        assert (one.verdict, one.against, one.mind) == ("yes", [], [])


CASES = {
    "one group": (RANGE, {"groups": [("north", 300, 60.0, 2000.0, 20.0, True)]}, "no", "there is one group"),
    "no groups": (ALONE, {"groups": [], "loose": 600}, "not yet", "no fix names a group"),
    "some without": (ALONE, {"loose": 3}, "not yet", "3 fixes are without a group"),
    "coarse cells": (
        ALONE,
        {"groups": [("north", 300, 60.0, 640.0, 6.4, True), ("south", 300, 60.0, 2e3, 20.0, True)]},
        "not yet",
        r'the range of "north" is 6.4 cells across \(of 2 groups 1 have fewer than 10\): cell_m at most 64, better 32',
    ),
    "no home": (
        ALONE,
        {"groups": [("north", 300, 60.0, 2e3, 20.0, True), ("west", 0, 0.0, float("nan"), float("nan"), False)]},
        "not yet",
        'the group "west" has neither fixes nor a home centre',
    ),
    "no layer": (RESOURCES, {"layers": []}, "not yet", "there is no layer yet"),
    "no area": (MEMORY, {"area": False}, "not yet", "there is no study area yet"),
    "few steps": (
        MEMORY,
        {"animals": [("A1", 90, 49, 300.0, 10.0, "settled"), ("B1", 90, 80, 300.0, 10.0, "settled")]},
        "not yet",
        '"A1" fewer than 50 steps of 2 h',
    ),
    "no steps": (
        MEMORY,
        {"animals": [("A1", 90, 10, 300.0, 10.0, "settled")]},
        "no",
        "no animal has 50 steps of 2 h, the commonest interval",
    ),
}


@pytest.mark.parametrize("case", CASES)
def test_what_speaks_against_a_card_is_said(case):
    card, changed, verdict, match = CASES[case]
    (one,) = carried(evidence(**changed), [card])
    assert one.verdict == verdict
    assert re.search(match, "\n".join(one.against))


MINDED = {
    "few independent": (
        ALONE,
        {"groups": [("north", 300, 4.0, 2e3, 20.0, True)]},
        '"north": fewer than 10 independent',
    ),
    "migrant": (ALONE, {"animals": [("A1", 299, 290, 300.0, 10.0, "migrating")]}, 'not so are "A1"'),
    "irregular": (MEMORY, {"animals": [("A1", 500, 90, 300.0, 10.0, "settled")]}, "only 18% of the intervals are 2 h"),
    "rough": (MEMORY, {"animals": [("A1", 299, 290, 15.0, 10.0, "settled")]}, "less than two standard deviations"),
}


@pytest.mark.parametrize("case", MINDED)
def test_what_is_to_be_minded_does_not_forbid_a_card(case):
    card, changed, words = MINDED[case]
    (one,) = carried(evidence(**changed), [card])
    assert one.verdict == "yes" and any(words in text for text in one.mind), one.mind
