"""Groups that come and go: epochs, who is there in each, and animals that switch groups."""

import numpy as np
import pandas as pd
import pytest

from bayesrange.study import StudyError, autocorrelation_weights

# Fixes are every 4 h from 2031-03-01T00:00+01:00 (02-28T23:00Z) to 03-10T20:00+01:00 (19:00Z): 236 h.


def come_and_go(folder, start=("", "", ""), until=("", "", "")):
    folder.groups["from"], folder.groups["until"] = start, until


def without_fixes_of(folder, group, before="", after="9999"):
    own = (folder.fixes["group"] == group) & ((folder.fixes["time"] < before) | (folder.fixes["time"] >= after))
    folder.fixes = folder.fixes[~own]


def test_no_epochs_where_all_are_there_all_the_time(folder):
    come_and_go(folder, ("2031-02-01", "", "2031-02-27"), ("", "2031-03-10", "2031-04-01"))
    assert folder.read().epochs is None
    folder.groups = folder.groups.drop(columns=["from", "until"])
    assert folder.read().epochs is None


def test_epochs_go_from_coming_to_going(folder):
    come_and_go(folder, ("2031-03-03T11:00Z", "", ""), ("", "2031-03-06T23:00Z", ""))
    without_fixes_of(folder, "north", before="2031-03-03T12:00")
    without_fixes_of(folder, "south", after="2031-03-07T00:00")
    study = folder.read()
    epochs = study.epochs
    # By hand: 60 h without north, 84 h of all, 92 h without south
    np.testing.assert_allclose(epochs.hours, [60, 84, 92])
    np.testing.assert_array_equal(epochs.present, [[0, 1, 1], [1, 1, 1], [1, 0, 1]])
    assert {tuple(map(bool, row)) for row in epochs.sets} == {
        (False, True, True),
        (True, True, True),
        (True, False, True),
    }
    np.testing.assert_allclose(epochs.there, [176 / 236, 144 / 236, 1])
    np.testing.assert_allclose(epochs.share.sum(axis=0), 1)
    which = epochs.set_of(study.fixes["time"])
    early = study.fixes["time"] < pd.Timestamp("2031-03-03T11:00Z")
    np.testing.assert_array_equal(epochs.sets[which[early]], np.tile([False, True, True], (early.sum(), 1)))
    first = epochs.as_json(list(study.groups["group"]))[0]
    assert first == {
        "from": "2031-02-28T23:00:00+00:00",
        "until": "2031-03-03T11:00:00+00:00",
        "groups": ["south", "east"],
    }
    [told] = [w for w in study.warnings if "only part of the time" in w]
    assert told.startswith("groups.csv: 2 groups are there only part of the time (north, south); 3 epochs with 3 diff")


def test_the_same_groups_at_two_times_are_one_set(folder):
    folder.groups.loc[3] = ["west", folder.west + 600, folder.south + 600, 2, 0.1]
    come_and_go(folder, ("", "", "", "2031-03-03T11:00Z"), ("", "", "", "2031-03-05T11:00Z"))
    epochs = folder.read().epochs
    np.testing.assert_array_equal(epochs.present[:, 3], [False, True, False])
    assert len(epochs.sets) == 2
    with_west = int(np.flatnonzero(epochs.sets[:, 3])[0])
    # West is there for 48 of the 236 hours; the others' time is split the same way
    np.testing.assert_allclose(epochs.share[with_west], [48 / 236, 48 / 236, 48 / 236, 1])
    moments = pd.Series(pd.to_datetime(["2031-03-01T00:00Z", "2031-03-03T11:00Z", "2031-03-05T11:00Z"]))
    assert (epochs.set_of(moments) == with_west).tolist() == [False, True, False]


def test_a_time_when_nobody_is_there_is_no_set(folder):
    come_and_go(folder, ("", "2031-03-06T23:00Z", "2031-03-06T23:00Z"), ("2031-03-05T23:00Z", "", ""))
    without_fixes_of(folder, "north", after="2031-03-06")
    for group in ("south", "east"):
        without_fixes_of(folder, group, before="2031-03-07")
    epochs = folder.read().epochs
    assert len(epochs.hours) == 3 and len(epochs.sets) == 2
    np.testing.assert_array_equal(epochs.share.sum(axis=0), 1)
    assert not epochs.present[1].any()


def test_fixes_of_a_group_that_has_gone_are_refused(folder):
    come_and_go(folder, until=("", "", "2031-03-10T18:59Z"))
    with pytest.raises(
        StudyError, match=r'1 fix is of a group at a time when it is not there .* "east" \(fixes.csv line 181\)'
    ):
        folder.read()
    come_and_go(folder, until=("", "", "2031-02-20"))  # not there at all
    with pytest.raises(StudyError, match='60 fixes are of a group at a time when it is not there .* "east"'):
        folder.read()


def switching(folder):
    """N1 is of the north until 03-06 and of the south from then on, by the table of animals."""
    folder.fixes = folder.fixes.drop(columns="group")
    lines = ["animal,from,until,group", "N1,,2031-03-05,north", "N1,2031-03-06,,south", "S1,,,south", "E1,,,east"]
    folder.path("animals.csv").write_text("\n".join(lines) + "\n")
    folder.toml["fixes"]["zone"] = "Europe/Oslo"
    folder.toml["animals"] = {"file": "animals.csv"}
    return folder.read()


def test_an_animal_switches_groups_by_the_table_of_animals(folder):
    study = switching(folder)
    own = study.fixes[study.fixes["animal"] == "N1"]
    border = pd.Timestamp("2031-03-05T23:00Z")
    assert own["group"].tolist() == np.where(own["time"] < border, "north", "south").tolist()
    assert own["group"].value_counts().to_dict() == {"north": 30, "south": 30}
    assert study.counts["outside_deployment"] == 0
    assert 'The animal "N1" has fixes in more than one group.' in study.warnings


def test_an_animal_that_switches_may_not_be_in_a_group_before_it_comes(folder):
    folder.groups["from"] = ["", "2031-03-07", ""]
    with pytest.raises(StudyError, match='fixes are of a group at a time when it is not there .* "south"'):
        switching(folder)


def test_autocorrelation_is_that_within_each_group_of_an_animal_that_switches(folder):
    fixes = switching(folder).fixes
    parts = [rows for _, rows in fixes[fixes["animal"] == "N1"].groupby("group")]
    alone = [autocorrelation_weights(rows.drop(columns="group")).effective for rows in parts]
    table = autocorrelation_weights(fixes).table.set_index("animal")["effective"]
    assert set(table.index) == {"N1 in north", "N1 in south", "S1", "E1"}
    np.testing.assert_allclose(table[["N1 in north", "N1 in south"]], alone)
