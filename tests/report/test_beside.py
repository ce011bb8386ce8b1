"""Selection with and without memory: side by side exactly when a matching run stands there."""

import json
import shutil

import pandas as pd
import pytest
from page_text import Page

from bayesrange.report import read_memory, write
from bayesrange.report._beside import Estimate, find_nulls, pairs, times_as_large
from bayesrange.report._beside_figure import beside


@pytest.fixture(scope="module")
def two(new_memory_run):
    """A memory run and, beside it, one without memory on the same data."""
    here, there = new_memory_run(), new_memory_run(memory=False, card="steps-resources", selection=0.95)
    shutil.move(there, here.with_name("steps-resources"))
    return here


@pytest.fixture
def copied(two, tmp_path):
    """A copy of both, to spoil; gives the folder of the memory run and that of the other."""
    folder = shutil.copytree(two.parent, tmp_path / "runs")
    return folder / "run", folder / "steps-resources"


def edit(folder, change):
    file = folder / "run.json"
    facts = json.loads(file.read_text(encoding="utf-8"))
    change(facts)
    file.write_text(json.dumps(facts), encoding="utf-8")


def test_a_run_without_memory_on_the_same_data_is_found(copied):
    here, _ = copied
    (null,) = find_nulls(read_memory(here))
    assert (null.card, null.folder.name) == ("steps-resources", "steps-resources")


SPOILT = {
    "another data file": lambda facts: facts["files"].update({"fixes.csv": "0" * 64}),
    "one file more": lambda facts: facts["files"].update({"cover.tif": "0" * 64}),
    "another period": lambda facts: facts.update(period="after"),
    "another cell": lambda facts: facts.update(cell_m=50.0),
    "another interval": lambda facts: facts["memory"].update(interval_h=2.0),
    "a range card": lambda facts: facts["card"].update(kind="range"),
    "another format": lambda facts: facts.update(format=2),
}


@pytest.mark.parametrize("why", list(SPOILT))
def test_a_run_that_saw_something_else_is_not_set_beside(copied, why):
    here, there = copied
    edit(there, SPOILT[why])
    assert find_nulls(read_memory(here)) == []


@pytest.mark.parametrize("name", ["run.json", "tables/parameters.csv"])
def test_an_unfinished_run_is_not_set_beside(copied, name):
    here, there = copied
    (there / name).unlink()
    assert find_nulls(read_memory(here)) == []


def test_a_file_that_is_no_run_of_ours_is_passed_over(copied):
    here, there = copied
    (there / "run.json").write_text("not JSON")
    assert find_nulls(read_memory(here)) == []


def test_study_file_and_card_may_differ(copied):
    here, there = copied
    edit(there, lambda facts: facts["files"].update({"study.toml": "1" * 64, "models/steps-resources.toml": "2" * 64}))
    assert len(find_nulls(read_memory(here))) == 1


def test_another_run_with_memory_is_no_null(copied):
    here, there = copied
    shutil.rmtree(there)
    shutil.copytree(here, here.with_name("memory-resources-2"))
    assert find_nulls(read_memory(here)) == []


def test_of_two_runs_of_one_card_the_newer_is_taken(copied):
    here, there = copied
    newer = shutil.copytree(there, there.with_name("steps-resources-2"))
    edit(newer, lambda facts: facts.update(finished="2032-01-01T00:00:00+00:00"))
    (null,) = find_nulls(read_memory(here))
    assert null.folder.name == "steps-resources-2"


def test_page_sets_both_side_by_side_with_the_numbers_of_both_tables(eight):
    page = Page(eight.html)
    here, there = (
        pd.read_csv(folder / "tables" / "parameters.csv", keep_default_na=False).set_index("parameter")["median"]
        for folder in (eight.folder, eight.folder.with_name("steps-resources"))
    )
    rows = [row for row in page.rows if len(row) == 7 and row[0] == "forage"]
    assert [row[1] for row in rows] == ["population", *eight.recipe.names]
    for row in rows:
        name = "selection[forage]" if row[1] == "population" else f"selection[forage, {row[1]}]"
        for cell, table in ((row[2], here), (row[4], there)):
            assert abs(float(cell.replace("−", "-")) - float(table[name])) <= 0.0050001
    assert "without memory (steps-resources), 1.9 times as large" in page.words
    # 1.9 is the ratio of the two medians.
    assert there["selection[forage]"] / here["selection[forage]"] == pytest.approx(1.9, abs=0.05)
    assert "nothing can be compared" not in page.words


def test_without_a_null_run_the_page_says_how_to_get_one(alone):
    words = Page(alone.html).words
    assert 'Set card = "steps-resources" in the study file' in words
    assert "times as large" not in words


def test_a_card_without_memory_says_that_its_selection_is_too_large(no_memory):
    assert "takes the return for selection, which then comes out too large" in Page(no_memory.html).words


def test_animals_fitted_alone_are_compared_one_by_one(new_memory_run):
    here = new_memory_run(hierarchical=False)
    there = new_memory_run(hierarchical=False, memory=False, card="steps-home", home=True)
    shutil.move(there, here.with_name("steps-home"))
    run = read_memory(here)
    found = pairs(run, find_nulls(run))
    assert [pair.animal for pair in found] == run.animals
    words = Page(write(here).read_text(encoding="utf-8")).words
    assert "without: steps-home" in words and "times as large" not in words


def test_an_only_animal_is_compared_in_words(new_memory_run):
    here = new_memory_run(animals=1, hierarchical=False)
    there = new_memory_run(animals=1, hierarchical=False, memory=False, card="steps-resources", selection=1.6)
    shutil.move(there, here.with_name("steps-resources"))
    (sentence, *_) = beside(read_memory(here))["sentences"]
    assert sentence.startswith("Selection of forage is 0.") and "without memory (steps-resources)" in sentence


@pytest.mark.parametrize(
    ("here", "there", "times"),
    [
        (Estimate(0.5, 0.3, 0.7), Estimate(1.0, 0.8, 1.2), 2.0),
        (Estimate(-0.5, -0.7, -0.3), Estimate(-1.0, -1.2, -0.8), 2.0),
        (Estimate(0.1, -0.1, 0.3), Estimate(1.0, 0.8, 1.2), None),
        (Estimate(0.5, 0.3, 0.7), Estimate(-1.0, -1.2, -0.8), None),
        (Estimate(0.5, 0.3, 0.7), Estimate(0.1, 0.0, 0.2), None),
    ],
)
def test_a_ratio_is_given_only_where_neither_may_be_zero(here, there, times):
    assert times_as_large(here, there) == times
