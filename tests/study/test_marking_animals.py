"""Numbers of marking animals, known or within a range."""

import numpy as np
import pytest

from bayesrange.study import StudyError


def test_a_known_number_stays_whole_and_adds_no_column(folder):
    folder.groups["animals"] = ["2", "", "4-4"]
    groups = folder.read().groups
    assert groups["animals"].tolist() == [2, 1, 4] and groups["animals"].dtype == np.int64
    assert not {"animals_low", "animals_high"} & set(groups)


@pytest.mark.parametrize("written", ["3-5", "3 - 5", "3–5"])
def test_a_range_has_its_ends_and_its_middle(folder, written):
    folder.groups["animals"] = ["2", written, "3-4"]
    groups = folder.read().groups
    assert groups["animals"].tolist() == [2, 4, 3.5]
    assert groups["animals_low"].tolist() == [2, 3, 3] and groups["animals_high"].tolist() == [2, 5, 4]


def test_more_tracked_than_there_can_be_is_said(folder):
    folder.groups["animals"] = ["1-2", "2", "2"]
    own = folder.fixes["group"] == "north"
    folder.fixes.loc[own, "animal"] = [f"N{k % 3}" for k in range(own.sum())]
    assert 'The group "north" counts at most 2 animals, but 3 have fixes.' in folder.read().warnings


def test_a_covariate_cannot_have_the_name_of_an_end(folder):
    folder.groups["animals_low"] = 1.0
    assert folder.read().groups["animals_low"].tolist() == [1, 1, 1]
    folder.groups["animals"] = ["2", "3-5", "4"]
    with pytest.raises(StudyError, match='groups.csv: there is a column "animals_low", a name that is needed .*rename'):
        folder.read()
