"""From a study to tracks: what counts as a step, what is set aside, who knew its range, who travels together."""

import numpy as np
import pandas as pd
import pytest
import shapely
from inference._tiny_tracks import (
    ASE,
    BO,
    GAP_H,
    IRREGULAR,
    RESTS,
    TOM,
    VIXEN,
    animals_table,
    companion,
    fixes_table,
    track,
    write_tracks,
)

from bayesrange import StudyError
from bayesrange.inference._companions import travelling_together
from bayesrange.inference._memory_study import make_tracks, nominal_interval
from bayesrange.inference._prepare import prepare
from bayesrange.study import read_study

REASONS = ("steps", "not_nominal", "off_ground", "learning")


def tracks_of(folder, **changes):
    return make_tracks(read_study(write_tracks(folder, **changes)))


def by_name(tracks):
    return {one.name: one for one in tracks.animals}


AWAY = shapely.box(1900, 1900, 1990, 1990)
"""A pond in nobody's way."""


def table_with(*more):
    """The animals table with rows (animal, sex, batch, mass) more."""
    own = animals_table()
    return pd.concat([own, pd.DataFrame(more, columns=own.columns)], ignore_index=True)


@pytest.fixture(scope="module")
def plain(tmp_path_factory):
    return tracks_of(tmp_path_factory.mktemp("plain"))


def test_interval_of_jittered_times_is_the_one_they_scatter_about(plain):
    assert plain.interval_h == 1.0


def test_interval_that_is_given_goes_before_the_commonest(tmp_path):
    study = read_study(write_tracks(tmp_path, model={"interval_h": 25 / 60}))
    assert nominal_interval(study) == 25 / 60


def test_interval_nobody_uses_is_refused_with_the_commonest(tmp_path):
    study = read_study(write_tracks(tmp_path, model={"interval_h": 2.0}))
    with pytest.raises(StudyError, match=r"interval_h: no two successive fixes .* 2 h apart; the commonest .* is 1 h"):
        nominal_interval(study)


def test_animals_with_one_fix_each_have_no_step(tmp_path):
    fixes = fixes_table().groupby("animal").head(1)
    with pytest.raises(StudyError, match="no animal has two fixes"):
        tracks_of(tmp_path, fixes=fixes)


def test_steps_and_what_is_set_aside_add_up_to_the_intervals(plain):
    for name, own in by_name(plain).items():
        assert sum(own.counts[key] for key in REASONS) == own.counts["intervals"] == own.counts["fixes"] - 1
        assert own.steps.time.size == own.hour.size == own.day.size == own.counts["steps"], name
    counts = {name: own.counts for name, own in by_name(plain).items()}
    assert counts[ASE]["not_nominal"] == 1 and counts[BO]["not_nominal"] == len(IRREGULAR)
    assert counts[TOM]["short"] == len(RESTS)
    # No turn is known at a first step, after a gap, after a stretch of another interval and after a rest.
    assert [counts[name]["turn_unknown"] for name in (VIXEN, ASE, BO, TOM)] == [1, 2, 2, 1 + len(RESTS)]
    assert plain.warnings[0].startswith("560 steps of 1 h ± 10% count, of 581 intervals: 21 are of another length")
    assert "11 have no known turn, and 5 are shorter than 1 m" in plain.warnings[0]


def test_gap_is_spent_in_pieces_of_the_interval(plain):
    own = by_name(plain)[ASE]
    assert (~own.stays.observed).sum() == GAP_H - 1
    assert own.stays.duration.sum() == pytest.approx(own.record_h)


def test_solar_hour_of_a_step_is_that_of_its_start(plain):
    # 3 degrees east: solar time is UTC + 12 minutes + the equation of time, about −12 minutes on the first of March
    # (Meeus 1998, Astronomical Algorithms, chapter 28; from memory). Every record begins at midnight.
    own = by_name(plain)[TOM]
    apart = (own.hour - own.steps.time + 12) % 24 - 12
    assert np.abs(apart).max() < 0.1
    assert own.day[np.argmin(np.abs(own.hour - 12))] and not own.day[np.argmin(np.abs(own.hour - 1))]


def test_median_step_is_of_the_steps_that_are_no_rests(plain):
    lengths = np.concatenate([own.steps.length[~own.steps.short] for own in plain.animals])
    assert plain.median_step_m == pytest.approx(1000 * np.median(lengths))
    assert (lengths > 0).all()


def test_shortest_step_is_the_rounding_the_error_or_what_is_given(tmp_path, plain):
    assert plain.shortest_m == 1.0  # coordinates are whole metres
    noisy = fixes_table().assign(error_m=7.0)
    assert tracks_of(tmp_path / "error", fixes=noisy).shortest_m == 7.0
    given = tracks_of(tmp_path / "given", fixes=noisy, model={"shortest_step_m": 60.0})
    assert given.shortest_m == 60.0
    own = by_name(given)[TOM]
    assert own.counts["short"] == (own.steps.length < 0.06).sum() > len(RESTS)


def test_location_error_is_said_and_warned_of_beyond_a_quarter_of_the_median_step(tmp_path, plain):
    assert not any("Location error" in said for said in plain.warnings)
    quarter = plain.median_step_m / 4
    for name, error, large in (("small", quarter - 5, False), ("large", quarter + 5, True)):
        said = tracks_of(tmp_path / name, fixes=fixes_table().assign(error_m=error), model={"shortest_step_m": 1.0})
        (sentence,) = [one for one in said.warnings if "Location error" in one]
        assert ("passes a quarter of the median step" in sentence) == large


def test_learning_days_hold_for_every_animal_or_for_those_that_the_table_names(tmp_path):
    model = {"memory_start": "learned", "learning_days": 2}
    everyone = tracks_of(tmp_path / "all", model=model)
    assert all(own.learned for own in everyone.animals)
    assert by_name(everyone)[VIXEN].counts["learning"] in (47, 48, 49)  # hourly, give or take the jitter
    one = animals_table().assign(memory_start=["", "learned", "naive", ""])
    some = by_name(tracks_of(tmp_path / "some", animals=one, model={"learning_days": 2}))
    assert [name for name, own in some.items() if own.learned] == [BO]
    assert [name for name, own in some.items() if own.counts["learning"]] == [BO]
    other = by_name(tracks_of(tmp_path / "other", animals=one, model=model))
    assert [name for name, own in other.items() if not own.learned] == [TOM]


def test_learned_start_without_learning_days_is_refused(tmp_path):
    with pytest.raises(StudyError, match=r'\[model\] learning_days: animals whose memory_start is "learned" need it'):
        tracks_of(tmp_path / "model", model={"memory_start": "learned"})
    animals = animals_table().assign(memory_start=["", "", "", "learned"])
    with pytest.raises(StudyError, match=r"\[model\] learning_days"):
        tracks_of(tmp_path / "table", animals=animals)


def test_learning_days_of_which_nobody_makes_use_are_refused(tmp_path):
    with pytest.raises(StudyError, match=r'learning_days: it has no use unless memory_start = "learned", here or in'):
        tracks_of(tmp_path, model={"learning_days": 2})


def test_unknown_start_of_memory_is_refused_by_file_animal_and_word(tmp_path):
    animals = animals_table().assign(memory_start=["", "", "knows it", ""])
    with pytest.raises(StudyError, match='animals.csv: memory_start of "old tom" is "knows it"; expected naive'):
        tracks_of(tmp_path, animals=animals)


def test_steps_across_a_no_go_strip_are_counted_by_their_straight_lines(tmp_path, plain):
    strip = shapely.box(950, 800, 1050, 1300)
    crossing = 0
    for own in plain.animals:
        x, y, to_x, to_y = (1000 * getattr(own.steps, name) for name in ("x", "y", "end_x", "end_y"))
        lines = shapely.linestrings(np.stack([np.stack([x, y], 1), np.stack([to_x, to_y], 1)], axis=1))
        crossed = shapely.intersection(lines, shapely.affinity.translate(strip, 500_000, 5_600_000))
        # A line that cuts a corner by less than half a cell may be missed, one that only touches it may not count.
        assert (shapely.length(crossed) > 50).sum() <= own.crossing <= (shapely.length(crossed) > 0).sum(), own.name
        crossing += own.crossing
    assert crossing and f"{crossing} steps cross, in a straight line, ground" in plain.warnings[1]
    assert not any("cross" in said for said in tracks_of(tmp_path, pond=AWAY).warnings)


def test_animal_all_of_whose_steps_cross_no_go_ground_is_refused(tmp_path):
    # To and fro across the pond
    fixes = fixes_table()
    own = fixes["animal"] == VIXEN
    fixes.loc[own, "x"] = 500_000.0 + np.where(np.arange(own.sum()) % 2, 900, 1100)
    fixes.loc[own, "y"] = 5_600_000.0 + np.linspace(850, 1250, own.sum()).round()
    with pytest.raises(StudyError, match='every step of the animal "vixen" crosses ground that is not habitable'):
        tracks_of(tmp_path, fixes=fixes)


@pytest.mark.parametrize("count", [50, 51])
def test_fewer_than_50_usable_steps_are_refused_with_the_reasons(tmp_path, count):
    fixes = pd.concat([track(BO), track(VIXEN).head(count)])
    if count == 51:
        assert by_name(tracks_of(tmp_path, fixes=fixes))[VIXEN].counts["steps"] == 50
        return
    with pytest.raises(StudyError, match='"vixen" has 49 usable steps of 49 intervals; at least 50 are needed'):
        tracks_of(tmp_path, fixes=fixes)


def test_reasons_for_few_steps_are_given_with_their_counts(tmp_path):
    fixes = pd.concat([track(VIXEN), track(BO).head(75)])
    animals = animals_table().assign(memory_start=["", "learned", "", ""])
    with pytest.raises(StudyError, match=r"of 74 intervals \(20 not 1 h apart, 24 in the learning days\)"):
        tracks_of(tmp_path, fixes=fixes, animals=animals, model={"learning_days": 23.5 / 24})


def test_companions_of_one_batch_are_found_and_others_are_not(tmp_path):
    fixes = pd.concat([fixes_table(), companion(track(VIXEN), "wren")])
    same = table_with(("wren", "m", "two", 2.5))
    study = read_study(write_tracks(tmp_path / "same", fixes, same))
    assert travelling_together(study, 1.0) == [(VIXEN, "wren", 1.0)]
    apart = table_with(("wren", "m", "one", 2.5))
    assert not travelling_together(read_study(write_tracks(tmp_path / "apart", fixes, apart)), 1.0)
    blank = same.drop(columns="release_batch")  # no batches: everyone is compared
    assert travelling_together(read_study(write_tracks(tmp_path / "blank", fixes, blank)), 1.0) == [
        (VIXEN, "wren", 1.0)
    ]


def test_company_is_more_than_half_of_the_simultaneous_fixes_within_100_m(tmp_path):
    other = companion(track(VIXEN), "wren")
    near = 80
    other.loc[near:, "x"] += 120

    def found(folder):
        fixes, animals = pd.concat([fixes_table(), other]), table_with(("wren", "m", "two", 1))
        return travelling_together(read_study(write_tracks(tmp_path / folder, fixes, animals, pond=AWAY)), 1.0)

    ((_, _, share),) = found("most")
    assert share == near / len(other)
    other.loc[60:80, "x"] += 120
    assert not found("fewer")


def test_company_is_seen_whatever_the_minute_of_the_fixes(tmp_path):
    # Fixes half an interval off the full hour, jittered: an hour's bins would tear pairs apart.
    first = track(VIXEN)
    first["time"] = (pd.to_datetime(first["time"]) + pd.Timedelta(minutes=29)).dt.strftime("%Y-%m-%dT%H:%MZ")
    fixes = pd.concat([track(ASE), first, companion(first, "wren")])
    study = read_study(write_tracks(tmp_path, fixes, table_with(("wren", "m", "two", 2.5))))
    assert travelling_together(study, 1.0) == [(VIXEN, "wren", 1.0)]


def test_fixes_half_an_interval_apart_are_not_simultaneous(tmp_path):
    late = track(VIXEN)
    late["time"] = (pd.to_datetime(late["time"]) + pd.Timedelta(minutes=30)).dt.strftime("%Y-%m-%dT%H:%MZ")
    fixes = pd.concat([fixes_table(), late.assign(animal="wren")])
    study = read_study(write_tracks(tmp_path, fixes, table_with(("wren", "m", "two", 2.5))))
    assert not travelling_together(study, 1.0)


@pytest.fixture(scope="module")
def party():
    """Three that go together in a chain, and the others."""
    first = track(VIXEN)
    fixes = pd.concat([fixes_table(), companion(first, "wren", 70), companion(first, "xan", 140)])
    return fixes, table_with(("wren", "f", "two", 2.5), ("xan", "f", "two", 3.0))


def test_links_make_one_unit_that_is_named_and_counts_once(tmp_path, party):
    fixes, animals = party
    found = tracks_of(tmp_path / "once", fixes=fixes, animals=animals, pond=AWAY)
    names = [one.name for one in found.animals]
    assert [[names[i] for i in unit] for unit in found.units] == [[BO], [TOM], [VIXEN, "wren", "xan"], [ASE]]
    assert [(a, b) for a, b, _ in found.together] == [(VIXEN, "wren"), ("wren", "xan")]
    assert "vixen and wren (100%), wren and xan (100%); they count as one" in found.warnings[-1]
    model = {"travelling_together": "counted_each"}
    each = tracks_of(tmp_path / "each", fixes=fixes, animals=animals, pond=AWAY, model=model)
    assert each.units == [[k] for k in range(6)] and each.together == found.together
    assert (
        "each counts by itself, as the study file asks, so that population intervals are too narrow"
        in each.warnings[-1]
    )


def test_weights_of_a_unit_add_up_to_one(tmp_path, party):
    fixes, animals = party
    model = {"pooling": "hierarchical"}
    prepared = prepare(read_study(write_tracks(tmp_path, fixes, animals, pond=AWAY, model=model)))
    data = prepared.task.data
    assert prepared.plan.spec.units == (BO, TOM, "vixen + wren + xan", ASE)
    np.testing.assert_allclose(np.bincount(data.unit, np.asarray(data.steps.weight)), 1.0)
    np.testing.assert_array_equal(data.unit, [0, 1, 2, 2, 2, 3])


def test_covariate_that_differs_within_a_unit_is_refused(tmp_path, party):
    fixes, animals = party
    model = {"pooling": "hierarchical", "covariates": ["mass"]}
    with pytest.raises(
        StudyError, match="vixen and wren and xan travel together and count as one, but differ in 'mass'"
    ):
        prepare(read_study(write_tracks(tmp_path / "a", fixes, animals, pond=AWAY, model=model)))
    model["covariates"] = ["sex"]
    plan = prepare(read_study(write_tracks(tmp_path / "b", fixes, animals, pond=AWAY, model=model))).plan
    assert plan.spec.covariates == ("sex=m",)
    np.testing.assert_allclose(plan.covariates[:, 0], [0.5, 0.5, -0.5, -0.5])  # m, m, f, f of four units


def test_covariate_that_the_table_lacks_is_refused(tmp_path):
    model = {"pooling": "hierarchical", "covariates": ["wingspan"]}
    with pytest.raises(StudyError, match="the animals table has no column 'wingspan'"):
        prepare(read_study(write_tracks(tmp_path, model=model)))


def test_null_takes_the_study_file_of_its_memory_card_and_says_what_it_leaves_aside(tmp_path):
    changes = {"encoding_range_m": 120, "memory_start": "learned", "learning_days": 2}
    with_memory = prepare(read_study(write_tracks(tmp_path / "a", model=changes)))
    null = prepare(read_study(write_tracks(tmp_path / "b", model={**changes, "card": "steps-home"})))
    said = "encoding_range_m has no use for the card steps-home"
    assert any(said in text for text in null.warnings) and not any(said in text for text in with_memory.warnings)
    for one, other in zip(with_memory.plan.tracks.animals, null.plan.tracks.animals, strict=True):
        assert one.counts == other.counts and one.counts["learning"] > 0
