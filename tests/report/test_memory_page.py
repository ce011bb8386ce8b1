"""The page of a memory run: whole, self-contained, escaped, and its numbers those of the tables."""

import json
import re
from base64 import b64decode
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import xarray as xr
from page_text import Page

from bayesrange import StudyError
from bayesrange.report import MemoryContents, read_memory, write
from bayesrange.report._memory_sentences import CAUTIONS, UNMAPPED
from bayesrange.report._steps import numerics, step_rows

ALWAYS = ["fitted", "tracks", "parameters", "numerics", "convergence", "warnings", "cautions", "record"]


def change(folder, **new):
    """Change run.json; a name with two underscores reaches into a table."""
    file = folder / "run.json"
    facts = json.loads(file.read_text(encoding="utf-8"))
    for key, value in new.items():
        *outer, last = key.split("__")
        inner = facts
        for name in outer:
            inner = inner[name]
        inner[last] = value
    file.write_text(json.dumps(facts), encoding="utf-8")


def page_of(folder) -> Page:
    return Page(write(folder).read_text(encoding="utf-8"))


def shown(text: str) -> tuple[float, float]:
    """A number as it stands on the page, and half a unit of its last digit."""
    plain = text.replace(",", "").replace("−", "-")
    return float(plain), 0.5000001 * 10.0 ** -len(plain.partition(".")[2])


def test_page_is_well_formed_and_has_the_sections_of_its_card(memory):
    page = Page(memory.html)
    ids = [attrs["id"] for attrs in page.all("section")]
    assert [attrs["href"].removeprefix("#") for attrs in page.all("a")] == ids
    assert [name for name in ids if name in ALWAYS] == ALWAYS
    assert ("memory" in ids, "recall" in ids, "selection" in ids) == (memory.recipe.memory, memory.recipe.memory, True)


def test_nothing_is_loaded_from_elsewhere(memory):
    for tag, attrs in Page(memory.html).tags:
        assert tag not in {"script", "link", "iframe", "object", "embed", "form"}
        assert not any(name.startswith("on") for name in attrs)
        for name in ("src", "href", "srcset", "xlink:href", "poster", "data"):
            assert attrs.get(name, "#").startswith(("#", "data:image/png;base64,"))
    assert not re.search(r"url\(|@import|https?://", memory.html)
    assert "default-src 'none'" in memory.html


def test_pictures_are_png_and_say_what_they_show(memory):
    pictures = Page(memory.html).all("img")
    assert len(pictures) == (3 if not memory.recipe.memory else 6 if memory.recipe.hierarchical else 5)
    for attrs in pictures:
        assert len(attrs["alt"]) > 30
        assert b64decode(attrs["src"].partition(",")[2])[:8] == b"\x89PNG\r\n\x1a\n"
    assert all(attrs.get("aria-label") for attrs in Page(memory.html).all("svg"))


def test_names_with_markup_stay_names(memory):
    page = Page(memory.html)
    for raw in ("<b>1", "Fell <i>", "<script>", "by <resources>"):
        assert raw not in memory.html
    assert "Hind <b>1</b>" in page.words and "Hind 2 $x$" in page.words
    assert "<script>x</script> has a short track." in page.words
    assert not page.all("i")


def test_parameters_on_the_page_are_those_of_the_table(memory):
    table = pd.read_csv(memory.folder / "tables" / "parameters.csv", keep_default_na=False).set_index("parameter")
    found = 0
    for row in Page(memory.html).rows:
        if len(row) != 9 or not re.match(r"\d\.\d{3}", row[8]):  # R-hat ends a row of parameters
            continue
        name = row[0].partition("|")[0]
        known = [one for one in table.index if one == name or one.endswith((f"[{name}]", f", {name}]"))]
        (value, half), hours = shown(row[1].partition("|")[0]), row[3] == "h"
        near = [
            one for one in known if abs(table.loc[one, "median"] - value) <= half and table.loc[one, "unit"] == row[3]
        ]
        assert near, row
        ends = [shown(end) for end in row[2].partition("|")[0].split(" to ")]
        assert any(
            all(abs(table.loc[one, key] - end) <= tol for key, (end, tol) in zip(("lower", "upper"), ends, strict=True))
            for one in near
        )
        assert ("days" in row[1]) == (hours and value > 72)
        if "days" in row[1]:
            days, tol = shown(row[1].partition("|")[2].removesuffix(" days"))
            assert abs(value / 24 - days) <= tol + half / 24
        found += 1
    raw_of_animals = sum("," in name and name.endswith("raw") for name in table.index)
    assert found == len(table) - raw_of_animals


def test_population_comes_first_then_spreads_animals_and_covariates(eight):
    words = Page(eight.html).words
    order = [
        "Population parameter",
        "Spread sd between animals",
        "selection[forage] by animal",
        "Effects of covariates",
    ]
    places = [words.index(text) for text in order]
    assert places == sorted(places)
    names = [row[0] for row in Page(eight.html).rows if len(row) == 9]
    at = names.index("Hind <b>1</b>")
    assert names[at : at + 9] == [*eight.recipe.names, "new animal"]


def test_question_and_counts_stand_before_the_first_section(memory):
    head = Page(memory.html[: memory.html.index("<main>")] + "</body></html>").words
    steps = json.loads((memory.folder / "run.json").read_text())["memory"]["steps"]
    counted = sum(row["steps"] for row in steps.values())
    assert f"{counted:,} steps that count." in head
    assert ("How strongly does memory" in head) == memory.recipe.memory
    assert ("held to one centre?" in head) == memory.recipe.home


def test_steps_that_count_are_those_of_the_run(memory):
    rows = {row[0]: row for row in Page(memory.html).rows if len(row) > 5 and row[1] == "naive"}
    steps = json.loads((memory.folder / "run.json").read_text())["memory"]["steps"]
    assert list(rows) == list(steps)
    for name, counts in steps.items():
        wanted = [counts[key] for key in ("fixes", "steps", "not_nominal", "turn_unknown", "short")]
        assert [int(cell.replace(",", "")) for cell in rows[name][3:8]] == wanted


def test_columns_of_steps_left_out_are_there_when_there_are_any(new_memory_run):
    folder = new_memory_run()
    steps = json.loads((folder / "run.json").read_text())["memory"]["steps"]
    next(iter(steps.values()))["off_ground"] = 5
    change(folder, memory__steps=steps)
    made = step_rows(read_memory(folder))
    assert made["names"] == ["not nominal", "turn unknown", "short", "off the ground"]
    assert [row["others"][3] for row in made["rows"]] == ["5", "0"] and made["total"][-1] == "5"
    assert any("off the ground: steps that start" in text for text in made["words"]) and len(made["words"]) == 4


def test_standing_sentences_follow_their_number(memory):
    words = Page(memory.html).words
    assert words.count("holds for steps of this interval (1 h)") == 1
    assert (UNMAPPED in words) == memory.recipe.memory
    if memory.recipe.memory:
        assert words.index(UNMAPPED) > words.index("reference_strength")
    assert all(text in words for text in CAUTIONS)
    assert "failed solve" not in words and "steady state" not in words


@pytest.mark.parametrize(("record_h", "said"), [(100_000.0, False), (300.0, True)])
def test_decay_beyond_the_record_is_the_prior_speaking(new_memory_run, record_h, said):
    folder = new_memory_run(layers=())
    change(folder, memory__record_h={name: record_h for name in read_memory(folder).animals})
    words = page_of(folder).words
    assert ("its upper end is the prior speaking" in words) == said
    assert ("1 month after a visit lies beyond the longest record" in words) == said


def test_convergence_is_said_once_and_plainly(memory):
    words = Page(memory.html).words
    assert ("✓ converged" in words) == memory.recipe.converged
    assert ("✗ not converged" in words) == (not memory.recipe.converged)


def test_animals_fitted_alone_meet_the_gate_of_shared_parameters(eight, alone):
    assert "(single animals: 1.05)" in eight.html
    assert "(single animals: 1.01)" in alone.html


def test_numerics_that_miss_their_limit_are_marked(new_memory_run):
    run = read_memory(new_memory_run())
    assert all(row["good"] for row in numerics(run)["rows"])
    run.numerics.update(trace_error=2e-3, quadrature_shift={"step_shape": -0.12, "step_scale": -0.0002})
    made = numerics(run)
    assert [row["good"] for row in made["rows"]] == [True, True, False, False]
    assert made["shifts"] == [("step_shape", "−0.120", False), ("step_scale", "0.000", True)]


def test_only_the_largest_shifts_are_listed_and_the_rest_counted(new_memory_run):
    run = read_memory(new_memory_run())
    run.numerics["quadrature_shift"] = {f"p{at}": 0.001 * at for at in range(25)}
    made = numerics(run)
    assert [name for name, *_ in made["shifts"]] == [f"p{at}" for at in range(24, 14, -1)]
    assert made["other_shifts"] == 15


@pytest.mark.parametrize(
    ("figures", "said"),
    [({"lag_1": 0.6, "day": 0.0}, "2.00"), ({"lag_1": 0.05}, "1.05"), ({"lag_1": -0.3, "day": None}, "1.00")],
)
def test_autocorrelation_says_how_much_too_narrow(new_memory_run, figures, said):
    run = read_memory(new_memory_run(animals=1))
    run.numerics["step_autocorrelation"] = {"Hind <b>1</b>": figures}
    made = numerics(run)
    # √((1 + 0.6)/(1 − 0.6)) = 2; √(1.05/0.95) = 1.051: variance of the mean of a first-order autoregression.
    assert [row["wide"] for row in made["autocorrelation"]] == [said]
    assert ("which the model takes as independent" in made["autocorrelation_note"]) == (figures["lag_1"] > 0.1)


def test_animals_that_travel_together_are_named_with_what_was_done(eight, alone):
    pair = "Hind <b>1</b> with Hind 2 $x$ (83 % of simultaneous fixes)."
    assert f"{pair} They count together in population intervals" in Page(eight.html).words
    assert f"{pair} Each is fitted alone" in Page(alone.html).words


def test_one_animal_alone_has_one_table_of_parameters(new_memory_run):
    folder = new_memory_run(animals=1, hierarchical=False)
    page = page_of(folder)
    assert "step_shape by animal" not in page.words and "Population parameter" not in page.words
    names = [row[0].partition("|")[0] for row in page.rows if len(row) == 9 and re.match(r"\d\.\d{3}", row[8])]
    assert names == list(pd.read_csv(folder / "tables" / "parameters.csv")["parameter"])
    assert "reaches" in page.words and "its upper end is the prior speaking" in page.words


def test_a_card_without_layers_has_no_selection(new_memory_run):
    page = page_of(new_memory_run(layers=(), card="memory"))
    assert "selection" not in [attrs["id"] for attrs in page.all("section")]
    assert "as against the resources" not in page.words and "Layer" not in page.words


def test_selection_by_part_of_the_day_and_an_estimated_range_are_said(new_memory_run):
    page = page_of(new_memory_run(animals=1, daily=True, estimate_range=True))
    assert "selection[forage, day] by animal" in page.words and "selection[forage, night] by animal" in page.words
    assert "selection by animal" not in page.words
    assert ["distance over which a visit is remembered", "estimated"] in page.rows
    assert ["columns of the compressed traces", "18 × 10", ""] in page.rows


def test_same_run_gives_the_same_page(new_memory_run):
    folder = new_memory_run(animals=1, hierarchical=False)
    first = write(folder).read_bytes()
    assert write(folder).read_bytes() == first


def test_sensitive_study_is_refused_before_anything_is_written(new_memory_run):
    folder = new_memory_run(sensitive="high")
    with pytest.raises(StudyError, match="sensitive = 'high'.*nothing was written"):
        write(folder)
    assert not (folder / "maps").exists() and not (folder / "tables" / "decay.csv").exists()


def test_missing_group_is_named(new_memory_run):
    folder = new_memory_run()
    with xr.open_datatree(folder / "posterior.nc", engine="h5netcdf") as tree:
        tree = tree.load()
    del tree["constant_data"]
    tree.to_netcdf(folder / "posterior.nc", engine="h5netcdf")
    with pytest.raises(StudyError, match="no group constant_data"):
        write(folder)


def test_grid_of_another_cell_is_refused(new_memory_run):
    folder = new_memory_run()
    change(folder, cell_m=50.0)
    with pytest.raises(StudyError, match="constant_data/x must ascend in steps of cell_m = 50 m"):
        write(folder)


@pytest.mark.parametrize(
    ("base", "inner", "whose"),
    [
        ("step_shape", "A, B", ("step_shape", "A, B")),
        ("step_shape", "", ("step_shape", None)),
        ("selection", "forage", ("selection", None)),
        ("selection", "forage, day", ("selection", None)),
        ("selection", "forage, day, A, B", ("selection[forage, day]", "A, B")),
        ("selection", "forage, new animal", ("selection[forage]", "new animal")),
        ("step_rhythm", "cos 24 h", ("step_rhythm", None)),
        ("step_rhythm", "cos 24 h, A, B", ("step_rhythm[cos 24 h]", "A, B")),
    ],
)
def test_names_of_layers_and_animals_may_hold_commas(base, inner, whose):
    posterior = xr.Dataset(
        {"selection": ("layer", np.zeros(2)), "step_rhythm": ("harmonic", np.zeros(1))},
        coords={"layer": ["forage", "forage, day"], "harmonic": ["cos 24 h"]},
    )
    empty, constant = xr.Dataset(), xr.Dataset(coords={"animal": ["A, B"]})
    run = MemoryContents(
        Path("nowhere"), {"card": {"pooling": "hierarchical"}}, pd.DataFrame(), posterior, empty, empty, constant, None
    )
    assert run.whose(base, inner) == whose
