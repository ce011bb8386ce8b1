"""`[fixes.drop]`: flagged fixes are left out only when the study file says so, and then they are counted."""

from typing import get_args

import pandas as pd
import pytest

from bayesrange.study import DROPPABLE, StudyError, StudySettings, read_study


def spoilt(folder):
    """One duplicate, one fix 90 km off, one 500 m outside the area."""
    far, out = folder.fixes.index[30], folder.fixes.index[90]
    folder.fixes.loc[far, "x"] += 90_000
    folder.fixes.loc[out, "x"] = folder.west - 500
    folder.fixes = pd.concat([folder.fixes, folder.fixes.iloc[[5]]], ignore_index=True)
    return folder


def dropping(folder, *flags, **more):
    folder.toml["fixes"] |= {"drop": {"flags": list(flags)}, **more}
    return folder


def test_the_study_file_knows_the_flags_that_can_be_dropped():
    section = StudySettings.model_fields["fixes"].annotation.model_fields["drop"].annotation
    (kind,) = (k for k in get_args(section) if hasattr(k, "model_fields"))
    assert get_args(get_args(kind.model_fields["flags"].annotation)[0]) == DROPPABLE


def test_nothing_is_dropped_unless_said(folder):
    with pytest.raises(StudyError, match=r"1 fix repeats .*fixes.csv line 182\); keep one row for each, or drop"):
        spoilt(folder).read()
    with pytest.raises(StudyError, match="2 fixes outside the study area"):
        dropping(folder, "duplicate").read()


def test_what_is_dropped_is_counted_and_said(folder):
    clean = folder.read()
    study = dropping(spoilt(folder), "duplicate", "speed", "outside").read()
    assert len(study.fixes) == len(clean.fixes) - 2
    assert study.counts["rows"] == 181 and study.counts["fixes"] == 178
    assert {k: v for k, v in study.counts.items() if k.startswith("dropped")} == {
        "dropped_duplicate": 1,
        "dropped_speed": 1,  # the fix 90 km off is outside too: counted once
        "dropped_outside": 1,
    }
    assert "[fixes.drop] outside: 1 of 181 fixes were dropped." in study.warnings
    left = clean.fixes.merge(study.fixes, on=["animal", "time"], suffixes=("", "_left"))
    assert (left["x"] == left["x_left"]).all() and len(left) == 178


def test_of_duplicates_the_first_row_stays(folder):
    folder.fixes = pd.concat([folder.fixes, folder.fixes.iloc[[5]].assign(x=folder.west + 2000)], ignore_index=True)
    study = dropping(folder, "duplicate").read()
    assert study.fixes["row"].max() == 181 and study.counts["dropped_duplicate"] == 1


def test_flags_that_find_nothing_change_nothing(folder):
    clean = folder.read()
    study = dropping(folder, *DROPPABLE).read()
    pd.testing.assert_frame_equal(study.fixes, clean.fixes)
    assert all(study.counts[f"dropped_{flag}"] == 0 for flag in DROPPABLE)


def test_the_users_fastest_speed_is_what_counts(folder):
    folder.fixes.loc[30, "x"] = folder.west + 3900
    assert dropping(folder, "speed", max_speed_kmh=50).read().counts["dropped_speed"] == 0
    assert dropping(folder, "speed", max_speed_kmh=0.01).read().counts["dropped_speed"] > 100


BROKEN = {
    "unknown flag": ({"drop": {"flags": ["speeding"]}}, r"\[fixes.drop\] flags.*expected a list such as"),
    "flag that cannot be dropped": ({"drop": {"flags": ["gap"]}}, "of duplicate, speed, spike, stationary and outside"),
    "no list": ({"drop": {"flags": "speed"}}, 'expected a list such as .*got "speed"'),
    "no flags": ({"drop": {}}, r"\[fixes.drop\] flags: this is missing"),
    "unknown key": ({"drop": {"flag": ["speed"]}}, 'did you mean "flags"'),
    "speed of nothing": ({"max_speed_kmh": 0}, "expected a number of kilometres an hour above 0, got 0"),
}


@pytest.mark.parametrize("case", BROKEN)
def test_a_wrong_key_is_answered_in_one_sentence(folder, case):
    keys, match = BROKEN[case]
    folder.toml["fixes"] |= keys
    with pytest.raises(StudyError, match=match) as caught:
        read_study(folder.write())
    assert str(caught.value).count("\n") == 0


def test_dropping_everything_is_refused(folder):
    folder.area(folder.box(50_000, 50_000, 60_000, 60_000))
    with pytest.raises(StudyError, match=r"\[fixes.drop\] flags: all 180 fixes are dropped"):
        dropping(folder, "outside").read()
