"""Differences between periods: their names are those of the tables, their numbers those of independent posteriors."""

from dataclasses import replace

import numpy as np
import pytest
from inference._made_runs import SCALES, plain_run, write_run
from scipy import stats

from bayesrange import StudyError, differences
from bayesrange.inference import RangeSpec, Scales, between_periods
from bayesrange.inference._assemble import parameter_dataset
from bayesrange.inference._cards import SIGNED
from bayesrange.inference._memory_data import EXCESS, MemorySpec
from bayesrange.inference._memory_results import _coefficients
from bayesrange.inference._memory_results import parameter_dataset as memory_dataset
from bayesrange.inference._memory_rows import memory_rows
from bayesrange.inference._memory_scales import MemoryScales
from bayesrange.inference._reported import reported
from bayesrange.inference._scales import LayerScale
from bayesrange.inference._summary import parameter_table, rows

SHAPE = (4, 1000)
# Quantiles of 4,000 independent draws each side: standard error of an end of a 90 % interval of a normal is
# √(0.05 × 0.95 / 4000) / 0.103 = 0.034 sd of one posterior; four of them, on the scale of the difference.
FOUR_ERRORS = 4 * 0.034


def normal(seed, mean, sd, shape=SHAPE):
    return mean + sd * np.random.default_rng(seed).normal(size=shape)


def pair(tmp_path, before, after, **changes):
    one = plain_run(tmp_path / "one", "before", before)
    return one, plain_run(tmp_path / "two", "after", after, **changes)


def test_difference_of_two_normals_is_that_of_the_textbook(tmp_path):
    # N(0.5, 0.4²) − N(0.2, 0.3²) = N(0.3, 0.5²)
    table = differences(
        *pair(tmp_path, {"resource": normal(1, 0.2, 0.3)}, {"resource": normal(2, 0.5, 0.4)})
    ).set_index("quantity")
    row, law = table.loc["resource[worms]"], stats.norm(0.3, 0.5)
    assert (row["first"], row["second"], row["unit"], row["prob"]) == ("before", "after", "per sd", 0.9)
    found = row[["lower", "median", "upper"]].astype(float)
    np.testing.assert_allclose(found, law.ppf([0.05, 0.5, 0.95]), atol=FOUR_ERRORS * 0.5)
    # Standard error of the probability: that of the mean difference times the density, √2 × 0.5 / √4000 × 0.67
    assert row["probability_above_zero"] == pytest.approx(law.sf(0), abs=4 * 0.0075)
    assert np.isnan(row["ratio_median"])  # a response may be negative
    raw = table.loc["resource[worms] raw", ["lower", "median", "upper"]].astype(float)
    np.testing.assert_allclose(raw, found / 8.0)  # sd of the layer


def test_ratio_of_two_log_normals_is_that_of_the_textbook(tmp_path):
    one = {"localising": np.exp(normal(3, 1.0, 0.3))}
    two = {"localising": np.exp(normal(4, 1.5, 0.4))}
    row = differences(*pair(tmp_path, one, two)).set_index("quantity").loc["localising"]
    found = np.log(row[["ratio_lower", "ratio_median", "ratio_upper"]].astype(float))
    np.testing.assert_allclose(found, stats.norm(0.5, 0.5).ppf([0.05, 0.5, 0.95]), atol=FOUR_ERRORS * 0.5)


def test_chains_that_ran_alike_do_not_make_the_difference_sure(tmp_path):
    # Fits begin with the same random numbers: here the draws are the same but for 1, in the same order.
    draws = normal(5, 6.0, 0.5)
    row = differences(*pair(tmp_path, {"localising": draws}, {"localising": draws + 1})).iloc[0]
    width = stats.norm(0, 0.5 * np.sqrt(2)).interval(0.9)
    assert row["median"] == pytest.approx(1, abs=FOUR_ERRORS * 0.7)
    assert row["upper"] - row["lower"] == pytest.approx(np.ptp(width), abs=2 * FOUR_ERRORS * 0.7)


def test_runs_of_other_lengths_are_differenced_too(tmp_path):
    row = differences(
        *pair(tmp_path, {"localising": normal(1, 5, 0.5)}, {"localising": normal(2, 6, 0.5, (2, 300))})
    ).iloc[0]
    assert row["median"] == pytest.approx(1, abs=4 * 0.5 * np.sqrt(np.pi / 2) * np.sqrt(1 / 4000 + 1 / 600))


def test_areas_are_differenced_by_group_and_isopleth(tmp_path):
    one, two = (np.exp(normal(seed, at, 0.1, (*SHAPE, 2, 2))) for seed, at in ((1, 0.0), (2, 0.5)))
    two[..., 1, 1] *= 3
    runs = [
        plain_run(tmp_path / str(at), period, {"localising": normal(at, 5, 0.5)}, areas)
        for at, (period, areas) in enumerate({"before": one, "after": two}.items())
    ]
    table = differences(*runs).set_index("quantity")
    names = [f"area_{level}[{group}]" for group in ("north", "säter, <b>low</b>") for level in (50, 95)]
    assert list(table.index) == ["localising", *names]
    assert set(table.loc[names, "unit"]) == {"km²"}
    wanted = np.exp(0.5) * np.array([1, 1, 1, 3])  # isopleth 95 of the second group
    np.testing.assert_allclose(table.loc[names, "ratio_median"].astype(float), wanted, rtol=FOUR_ERRORS * 0.15)


def test_three_periods_are_compared_in_turn_and_with_the_first(tmp_path):
    runs = [
        plain_run(tmp_path / period, period, {"localising": normal(at, 5 + at, 0.1)})
        for at, period in enumerate(("before", "after", "later"))
    ]
    found = between_periods(runs)
    assert list(zip(found.table["first"], found.table["second"], strict=True)) == [
        ("before", "after"), ("after", "later"), ("before", "later"),
    ]  # fmt: skip
    np.testing.assert_allclose(found.table["median"], [1, 1, 2], atol=FOUR_ERRORS * 0.15)
    assert found.left_out == [] and set(found.table["note"]) == {""}


def scales_with(**changes):
    return SCALES | changes


LAYERS = SCALES["layers"]
OTHER = {
    "A0": ({"a0_km2": 0.7}, ["avoidance"], "avoidance raw", "A₀ is 0.5 km² and 0.7 km²: only raw rows compare"),
    "layer": (
        {"layers": LAYERS | {"worms": LAYERS["worms"] | {"mean": 44.0, "sd": 9.0}}},
        ["resource[worms]"],
        "resource[worms] raw",
        'the layer "worms" has the mean 40 (sd 8) and 44 (sd 9): only raw rows compare',
    ),
    "perception": ({"perception_m": 300.0}, ["avoidance"], "avoidance raw", "scent is perceived over 200 m and 300 m"),
}


@pytest.mark.parametrize("case", OTHER)
def test_scaled_rows_are_left_out_where_the_scales_differ(tmp_path, case):
    scales, gone, noted, words = OTHER[case]
    draws = {"localising": normal(1, 5, 0.1), "avoidance": normal(2, 3, 0.1), "resource": normal(3, 0, 1)}
    table = differences(*pair(tmp_path, draws, draws, scales=scales_with(**scales)))
    everything = {"localising", "avoidance", "avoidance raw", "resource[worms]", "resource[worms] raw"}
    assert set(table["quantity"]) == everything - set(gone)
    notes = table.set_index("quantity")["note"]
    assert words in notes[noted] and (notes.drop(noted) == "").all()
    assert len(table.attrs["left_out"]) == 1 and words in table.attrs["left_out"][0]
    assert table.attrs["left_out"][0].startswith(f"before to after, left out: {gone[0]}: ")


def test_raw_row_is_in_the_scales_of_its_own_run(tmp_path):
    draws = {"avoidance": np.full(SHAPE, 2.0)}
    row = differences(*pair(tmp_path, draws, draws, scales=scales_with(a0_km2=0.7))).iloc[0]
    assert row["quantity"] == "avoidance raw"
    np.testing.assert_allclose(row[["lower", "median", "upper"]].astype(float), 2.0 * (0.7 - 0.5))


def test_rows_of_one_run_only_and_other_units_are_left_out_and_said(tmp_path):
    one = {"localising": normal(1, 5, 0.1), "avoidance": normal(2, 3, 0.1)}
    table = differences(*pair(tmp_path, one, {"localising": normal(1, 5, 0.1), "resource": normal(3, 0, 1)}))
    assert list(table["quantity"]) == ["localising"]
    assert table.attrs["left_out"] == [
        'before to after, left out: avoidance, avoidance raw: not in the run of "after".',
        'before to after, left out: resource[worms], resource[worms] raw: not in the run of "before".',
    ]
    two = tmp_path / "two" / "tables" / "parameters.csv"
    two.write_text(two.read_text().replace("1/km", "1/m"))
    table = differences(tmp_path / "one", tmp_path / "two")
    assert table.empty
    assert 'left out: localising: its unit is "1/km" in one run and "1/m"' in table.attrs["left_out"][0]


def run_of(tmp_path, name, period="after", **changes):
    return plain_run(tmp_path / name, period, {"localising": normal(1, 5, 0.1, (1, 10))}, **changes)


WRONG = {
    "card": ({"card": {"name": "localising"}}, "runs of different cards, avoidance-resources and localising; fit both"),
    "study": ({"study": {"name": "Sedge Fen"}}, 'different studies, "Tern Marsh" (EPSG:32631) and "Sedge Fen"'),
    "crs": ({"crs": "EPSG:32632"}, "runs of different studies"),
    "no period": ({"period": None}, "this run is of no period; give runs of two periods, which the study file names"),
    "same period": ({"period": "before"}, 'both runs are of the period "before"; give runs of two periods'),
}


@pytest.mark.parametrize("case", WRONG)
def test_runs_that_do_not_belong_together_are_refused_in_one_sentence(tmp_path, case):
    changes, words = WRONG[case]
    first = run_of(tmp_path, "first", "before")
    with pytest.raises(StudyError) as caught:
        differences(first, run_of(tmp_path, "second", **changes))
    text = str(caught.value)
    assert words in text and str(first.folder.parent) in text and "\n" not in text and text.endswith(".")


def test_runs_whose_fixes_overlap_in_time_are_refused(tmp_path):
    # Named otherwise, but from the same days: the study file was changed between the fits.
    first, second = run_of(tmp_path, "first", "early"), run_of(tmp_path, "second", "late")
    with pytest.raises(StudyError, match='fixes of "early" and "late" are from times that overlap'):
        differences(first, second)


def test_unfinished_run_is_refused(tmp_path):
    first = run_of(tmp_path, "first", "before")
    (tmp_path / "second" / "checkpoints").mkdir(parents=True)
    with pytest.raises(StudyError, match="second: no finished run here; it is unfinished; `bayesrange fit`"):
        differences(first.folder, tmp_path / "second")
    with pytest.raises(StudyError, match="nowhere: no finished run here; give the folder"):
        differences(first, tmp_path / "nowhere")


GROUPS = ("north", "säter, <b>low</b>", "east, wood")
RANGE = RangeSpec(
    parameters=("localising", "retreat", "resource"), families=(), varying=("localising", "resource"), solver="flux",
    coupled=True, over_marking=False, layers=("worms", "cover=wood"), groups=GROUPS, covariates=("size", "site=wet"),
    estimated=(0, 2),
)  # fmt: skip
FROZEN = Scales(
    0.6, 1.4, 200.0, 50.0, {"worms": LayerScale(40.0, 8.0, "kg/ha"), "cover=wood": LayerScale(0, 1, "", "grass")}
)


def range_sites(lead, seed=0):
    rng = np.random.default_rng(seed)
    shapes = {
        "localising_population": (), "localising_spread": (1,), "localising_effect": (1, 2), "localising": (3,),
        "retreat": (), "resource_population": (2,), "resource_spread": (2,), "resource_effect": (2, 2),
        "resource": (2, 3), "group_correlation": (3, 3), "home_x": (2,), "home_y": (2,),
    }  # fmt: skip
    return {name: rng.gamma(2, size=(*lead, *shape)) for name, shape in shapes.items()}


def check_names_and_draws(run, found):
    """What is read back from a run folder is what its table was made of."""
    wanted = {row.name: row for row in found if "new group]" not in row.name and "new animal]" not in row.name}
    back = reported(run)
    assert list(back) == list(wanted)
    for name, row in wanted.items():
        np.testing.assert_array_equal(back[name].draws, row.draws.ravel())
        assert (back[name].unit, back[name].single) == (row.unit, row.individual)


def test_rows_of_a_hierarchical_range_card_are_read_back_under_their_names(tmp_path):
    posterior, prior = (parameter_dataset(RANGE, range_sites(lead)) for lead in ((2, 5), (1, 9)))
    found = rows(RANGE, FROZEN, posterior, prior, seed=3)
    run = write_run(tmp_path / "run", "before", posterior, parameter_table(found), scales=FROZEN.as_json())
    check_names_and_draws(run, found)
    other = write_run(tmp_path / "two", "after", posterior, parameter_table(found), scales=FROZEN.as_json())
    (said,) = between_periods([run, other]).left_out
    assert "localising[new group]" in said and "not tracked" in said
    assert {name for name, row in reported(run).items() if row.has_ratio} == {
        "localising", *(f"localising[{group}]" for group in GROUPS), "retreat", "retreat raw",
    }  # fmt: skip


def test_covariates_of_other_groups_are_not_compared(tmp_path):
    runs = []
    for period, spec in (("before", RANGE), ("after", replace(RANGE, groups=("north", "säter, <b>low</b>", "moor")))):
        posterior, prior = (parameter_dataset(spec, range_sites(lead)) for lead in ((2, 5), (1, 9)))
        table = parameter_table(rows(spec, FROZEN, posterior, prior, seed=3))
        runs.append(write_run(tmp_path / period, period, posterior, table, scales=FROZEN.as_json()))
    found = between_periods(runs)
    assert not found.table["quantity"].str.contains(":size|:site=wet").any()
    assert {"localising", "localising spread", "localising[north]"} <= set(found.table["quantity"])
    assert any("localising:size" in text and "members of the population" in text for text in found.left_out)
    assert any("localising[east, wood]" in text and 'not in the run of "after"' in text for text in found.left_out)


POOLED = MemorySpec(
    parameters=("step_shape", "step_scale", "selection", "reference_strength", "reference_decay", "working_strength",
                "working_decay", "recall_half", "home_pull", "step_rhythm"),
    families=(), pooled=True, layers=("worms, day", "worms, night", "cover=wood, day", "cover=wood, night"),
    animals=("Åse", "<b>Bo</b>", "old tom"), units=("Åse", "<b>Bo</b>", "old tom"), covariates=("sex=m", "mass"),
    rhythm=True, estimated_range=False, range_limits=(0.1, 0.1),
)  # fmt: skip
ALONE = replace(
    POOLED, parameters=(*POOLED.parameters[:8], "encoding_range", "step_rhythm"), pooled=False, covariates=(),
    estimated_range=True,
)  # fmt: skip
STEPS = MemoryScales(120.0, 150.0, 2.0, 10.0, 1.0, 50.0, FROZEN.layers)


def with_families(spec):
    law = [(EXCESS.get(name, name), "normal" if name in SIGNED else "log-normal") for name in spec.parameters]
    return replace(spec, families=tuple(law))


def track_sites(spec, lead, seed=0):
    """Sites of a memory model with draws from a gamma law; excesses stand for decay times."""
    rng, count = np.random.default_rng(seed), len(spec.animals)
    shapes = {"step_rhythm": (4,), "recall_half": ()} if spec.pooled else {"step_rhythm": (4, count)}
    if "home_pull" in spec.parameters:
        shapes |= {"home_x": (count,), "home_y": (count,)}
    for parameter in spec.parameters:
        name = EXCESS.get(parameter, parameter)
        layers = (len(spec.layers),) if name == "selection" else ()
        if name in ("step_rhythm", "recall_half") and name in shapes:
            continue
        shapes[name] = (*layers, count)
        if name in EXCESS.values():
            shapes[parameter] = (count,)
        if spec.pooled:
            one = layers or (1,)
            shapes |= {f"{name}_population": layers, f"{name}_spread": one, f"{name}_effect": (*one, 2)}
    sites = {name: rng.gamma(2, size=(*lead, *shape)) for name, shape in shapes.items()}
    free = len(_coefficients(spec))
    return sites | ({"animal_correlation": np.broadcast_to(np.eye(free), (*lead, free, free))} if free else {})


@pytest.mark.parametrize("spec", [with_families(POOLED), with_families(ALONE)], ids=["pooled", "alone"])
def test_rows_of_memory_cards_are_read_back_under_their_names(tmp_path, spec):
    posterior, prior = (memory_dataset(spec, track_sites(spec, lead), 0.5) for lead in ((2, 6), (1, 9)))
    found = memory_rows(spec, STEPS, posterior, prior, 0.5, 1)
    info = {"card": {"name": "memory", "kind": "memory"}, "memory": {"encoding_range_m": 150.0}}
    table, scales = parameter_table(found), STEPS.as_json()
    run = write_run(tmp_path / "one", "before", posterior, table, scales=scales, **info)
    check_names_and_draws(run, found)

    wider = info | {"memory": {"encoding_range_m": 170.0}}
    other = write_run(tmp_path / "two", "after", posterior, table, scales=scales, **wider)
    notes = between_periods([run, other]).table.set_index("quantity")["note"]
    of_memory = notes.index.str.contains("reference_|working_|recall_half")
    assert notes[of_memory].str.contains("remembered within 150 m and 170 m").all()
    assert of_memory.any() and (notes[~of_memory] == "").all()

    third = write_run(tmp_path / "three", "after", posterior, table, scales=scales | {"interval_h": 2.0}, **info)
    slower = between_periods([run, third])
    kept = "home_" if spec.pooled else "encoding_range["
    assert len(slower.table) and slower.table["quantity"].str.startswith(kept).all()
    assert any("belongs to the interval between fixes, 1 h and 2 h" in text for text in slower.left_out)
