"""Flags: each finds what was planted, and nothing on clean tracks of several kinds of animal."""

import numpy as np
import pandas as pd
import pytest
import shapely

from bayesrange.study import find_flags


def wandering(n=600, hours=1.0, tau_h=12.0, spread_m=600.0, error_m=10.0, seed=3):
    """An animal about its home centre: Ornstein–Uhlenbeck, fixed every `hours`, with location error."""
    rng = np.random.default_rng(seed)
    phi = np.exp(-hours / tau_h)
    place = spread_m * rng.normal(size=(n, 2))
    for k in range(1, n):
        place[k] = phi * place[k - 1] + np.sqrt(1 - phi**2) * place[k]
    return table(place + error_m * rng.normal(size=(n, 2)), hours, error_m)


def table(place, hours=1.0, error_m=10.0, animal="A1"):
    time = pd.Timestamp("2031-03-01T00:00Z") + pd.to_timedelta(np.arange(len(place)) * hours, unit="h")
    made = pd.DataFrame({"animal": animal, "time": time, "x": place[:, 0] + 5e5, "y": place[:, 1] + 5.6e6})
    return made.assign(error_m=error_m, file="fixes.csv", row=np.arange(2, len(place) + 2))


def resting_by_day(n=1200, seed=4):
    """Four fifths of the fixes at dens within the location error, the rest 200 to 1,500 m off."""
    rng = np.random.default_rng(seed)
    place = 12 * rng.normal(size=(n, 2))
    out = np.arange(n) % 24 < 5
    angle, away = rng.uniform(0, 2 * np.pi, n), rng.uniform(200, 1500, n)
    place[out] += (away[:, None] * np.stack([np.cos(angle), np.sin(angle)], axis=1))[out]
    return table(place, error_m=12.0)


def of(flags, name):
    return flags.loc[flags["flag"] == name, "fix"].tolist()


CLEAN = {
    "wandering": wandering(),
    "often fixed": wandering(n=3000, hours=1 / 12, error_m=5.0),
    "seldom fixed": wandering(n=200, hours=24.0),
    "no error given": wandering().assign(error_m=0.0),
    "den": resting_by_day(),
    "exponential steps": table(np.cumsum(np.random.default_rng(5).laplace(size=(2000, 2)) * 80, axis=0)),
    "two fixes": wandering(n=2),
    "one fix": wandering(n=1),
}


@pytest.mark.parametrize("kind", CLEAN)
def test_nothing_is_flagged_on_a_clean_track(kind):
    fixes = CLEAN[kind]
    area = shapely.box(*fixes[["x", "y"]].min() - 1, *fixes[["x", "y"]].max() + 1)
    assert find_flags(fixes, area=area).empty


def test_nothing_is_flagged_on_many_clean_tracks():
    tracks = [
        wandering(n=400, hours=h, seed=s).assign(animal=f"A{s}") for s, h in enumerate((0.25, 1.0, 4.0, 12.0) * 10)
    ]
    assert find_flags(pd.concat(tracks, ignore_index=True)).empty


def test_a_duplicate_is_the_later_row_with_its_distance_from_the_first():
    fixes = pd.concat([wandering(), wandering().iloc[[7]].assign(x=lambda t: t["x"] + 30, row=900)])
    fixes = fixes.sort_values(["animal", "time"], kind="stable", ignore_index=True)
    (found,) = find_flags(fixes).query("flag == 'duplicate'").itertuples()
    assert (found.flag, found.fix, fixes["row"][found.fix]) == ("duplicate", 8, 900)
    assert found.value == pytest.approx(30)


def test_of_three_at_one_time_two_are_duplicates_of_the_first():
    fixes = wandering().iloc[[0, 1, 1, 1, 2]].reset_index(drop=True).assign(row=[2, 3, 4, 5, 6])
    assert of(find_flags(fixes), "duplicate") == [2, 3]


def test_rows_out_of_order_say_by_how_much():
    fixes = wandering()
    fixes.loc[[20, 21], "row"] = fixes.loc[[21, 20], "row"].to_numpy()
    flags = find_flags(fixes)
    assert of(flags, "order") == [20]  # the row that comes too late in the file
    assert flags["value"].tolist() == [1.0]


@pytest.mark.parametrize("at", [[0], [300], [300, 301, 302], [599], [598, 599], [0, 1]])
def test_fixes_far_off_the_track_are_too_fast_and_no_others(at):
    fixes = wandering()
    fixes.loc[at, "x"] += 60_000
    flags = find_flags(fixes)
    assert of(flags, "speed") == at
    speeds = flags[flags["flag"] == "speed"]
    assert (speeds["value"] > speeds["limit"]).all()
    assert speeds["value"].max() == pytest.approx(60, rel=0.1)  # 60 km within an hour


def test_an_animal_that_was_carried_off_is_flagged_once_on_arrival():
    fixes = wandering()
    fixes.loc[400:, "x"] += 60_000
    assert of(find_flags(fixes), "speed") == [400]


def test_the_users_speed_goes_before_what_is_usual():
    fixes = wandering()
    fixes.loc[100, "x"] += 2_000
    assert of(find_flags(fixes), "speed") == []
    assert of(find_flags(fixes, max_speed_kmh=1.5), "speed") == [100]
    fixes.loc[100, "x"] += 60_000
    assert of(find_flags(fixes, max_speed_kmh=100.0), "speed") == []


def test_speed_is_judged_among_steps_of_the_same_interval():
    # One fix a day, and bursts of one a minute: metres a minute are fast for a day but not for a minute.
    rng = np.random.default_rng(6)
    days = wandering(n=100, hours=24.0)
    bursts = [
        days.iloc[[k]].assign(
            time=lambda t, m=m: t["time"] + pd.Timedelta(minutes=m), x=lambda t, m=m: t["x"] + 60 * m * rng.normal()
        )
        for k in range(0, 80, 2)
        for m in (1, 2)
    ]
    fixes = pd.concat([days, *bursts]).sort_values("time", ignore_index=True)
    assert of(find_flags(fixes), "speed") == []


def test_a_spike_out_and_straight_back_is_found_below_the_limit_of_speed():
    fixes = wandering(n=1000, hours=0.5, tau_h=24.0)
    fixes.loc[500, "y"] += 1_200
    flags = find_flags(fixes)
    assert of(flags, "spike") == [500] and of(flags, "speed") == []
    (spike,) = flags.itertuples()
    assert spike.limit < spike.value < 1.5


def test_a_journey_there_and_on_is_no_spike():
    fixes = wandering(n=1000, hours=0.5, tau_h=24.0)
    fixes.loc[500, "y"] += 1_200
    fixes.loc[501:, "y"] += 2_400
    assert of(find_flags(fixes), "spike") == []


@pytest.mark.parametrize("error_m", [0.0, 10.0])
def test_a_dropped_collar_is_the_whole_tail_and_its_rest_before(error_m):
    rng = np.random.default_rng(7)
    place = wandering()[["x", "y"]].to_numpy() - (5e5, 5.6e6)
    place[480:] = place[479] + 7 * rng.normal(size=(120, 2))
    flags = find_flags(table(place, error_m=error_m))
    tail = of(flags, "stationary")
    assert set(range(480, 600)) <= set(tail) and min(tail) >= 477  # the animal may have come near just before
    assert flags["value"].iloc[0] == pytest.approx(119, abs=3) and flags["limit"].iloc[0] < 30


def test_a_tail_no_longer_than_rests_before_is_not_flagged():
    rng = np.random.default_rng(8)
    place = wandering()[["x", "y"]].to_numpy() - (5e5, 5.6e6)
    place[200:300] = place[200] + 7 * rng.normal(size=(100, 2))
    place[480:] = place[479] + 7 * rng.normal(size=(120, 2))
    assert of(find_flags(table(place)), "stationary") == []


def test_a_stray_fix_does_not_hide_a_dropped_collar():
    rng = np.random.default_rng(7)
    place = wandering()[["x", "y"]].to_numpy() - (5e5, 5.6e6)
    place[480:] = place[479] + 7 * rng.normal(size=(120, 2))
    place[[520, 540], 0] += 80  # within what a collar under cover strays
    place[560] += 90_000
    flags = find_flags(table(place))
    assert of(flags, "speed") == [560] and {480, 520, 559, 561, 599} <= set(of(flags, "stationary"))


def test_outside_is_beyond_three_standard_deviations():
    fixes = wandering(error_m=10.0)
    west = fixes["x"].min() - 1
    fixes.loc[3, "x"], fixes.loc[5, "x"] = west - 29, west - 31
    area = shapely.box(west, 0, fixes["x"].max() + 1, 1e7)
    flags = find_flags(fixes, area=area)
    assert of(flags, "outside") == [5]
    assert flags[["value", "limit"]].iloc[0].tolist() == [pytest.approx(31), 30]


def test_outside_an_error_ellipse_is_judged_by_its_long_axis():
    fixes = wandering(error_m=10.0).assign(error_major_m=40.0)
    west = fixes["x"].min() - 1
    fixes.loc[3, "x"], fixes.loc[5, "x"] = west - 100, west - 121
    assert of(find_flags(fixes, area=shapely.box(west, 0, fixes["x"].max() + 1, 1e7)), "outside") == [5]


def test_what_bearings_doubt_is_a_flag():
    fixes = wandering().assign(flag="")
    fixes.loc[7, "flag"] = "crossing under 20°"
    assert of(find_flags(fixes), "bearing") == [7]


def test_flags_do_not_depend_on_where_the_animals_are_or_what_they_are_called():
    fixes = pd.concat([wandering(seed=1), wandering(seed=2).assign(animal="B1")], ignore_index=True)
    fixes.loc[[100, 800], "x"] += [50_000, 3_500]
    fixes.loc[1100:, ["x", "y"]] = fixes.loc[1100, ["x", "y"]].to_numpy()
    flags = find_flags(fixes)
    assert set(flags["flag"]) == {"speed", "spike", "stationary"}
    turned = fixes.assign(x=5e5 - fixes["y"], y=fixes["x"] + 1e5, time=fixes["time"] + pd.Timedelta(days=900))
    moved = find_flags(turned.assign(animal=fixes["animal"].map({"A1": "wolf 1", "B1": "wolf 2"})))
    pd.testing.assert_frame_equal(moved, flags, rtol=1e-9)


def test_a_gap_is_more_than_a_day_and_ten_intervals():
    fixes = wandering()
    fixes.loc[250:, "time"] += pd.Timedelta(hours=40)
    flags = find_flags(fixes)
    assert of(flags, "gap") == [250] and flags["value"].tolist() == [41.0] and flags["limit"].tolist() == [24.0]


def test_animals_are_judged_each_by_itself():
    slow, fast = wandering(), wandering(spread_m=30_000).assign(animal="B1")
    slow.loc[300, "x"] += 30_000
    fixes = pd.concat([slow, fast], ignore_index=True)
    assert of(find_flags(fixes), "speed") == [300]


def test_the_location_error_makes_no_speed():
    # Two fixes ten seconds apart scatter by their error of 10 m: up to 15 km/h, and the animal stood still.
    fixes = wandering(n=200)
    again = fixes.assign(time=fixes["time"] + pd.Timedelta(seconds=10), x=fixes["x"] + 20, y=fixes["y"] - 25)
    both = pd.concat([fixes, again]).sort_values("time", ignore_index=True)
    assert of(find_flags(both, max_speed_kmh=5.0), "speed") == []
    assert of(find_flags(both.assign(error_m=1.0), max_speed_kmh=5.0), "speed") != []
