"""The page: whole, self-contained, escaped, and honest about convergence."""

import re
from base64 import b64decode
from pathlib import Path

import pandas as pd
import pytest
import xarray as xr
from page_text import Page

from bayesrange import StudyError
from bayesrange.report import Contents, read_contents, write
from bayesrange.report._format import bar, interval, number
from bayesrange.report._page_parts import priors
from bayesrange.report._parameters import Gate, parameter_blocks, split_name
from bayesrange.report._sentences import CAUTIONS, NOTES, sparse_note


def test_page_is_well_formed_and_has_every_section(written):
    page = Page(written.html)
    ids = [attrs["id"] for attrs in page.all("section")]
    assert ids == ["fitted", "parameters", "maps", "areas", "overlaps", "convergence", "warnings", "cautions", "record"]
    linked = [attrs["href"].removeprefix("#") for attrs in page.all("a")]
    assert linked == ids
    assert written.html.startswith("<!DOCTYPE html>")


def test_nothing_is_loaded_from_elsewhere(written):
    page = Page(written.html)
    for tag, attrs in page.tags:
        assert tag not in {"script", "link", "iframe", "object", "embed", "form"}
        assert not any(name.startswith("on") for name in attrs)
        for name in ("src", "href", "srcset", "xlink:href", "poster", "data"):
            assert attrs.get(name, "#").startswith(("#", "data:image/png;base64,"))
    assert not re.search(r"url\(|@import|https?://", written.html)
    assert "default-src 'none'" in written.html


def test_pictures_are_png_and_say_what_they_show(written):
    pictures = Page(written.html).all("img")
    assert len(pictures) >= 3
    for attrs in pictures:
        assert len(attrs["alt"]) > 30
        assert b64decode(attrs["src"].partition(",")[2])[:8] == b"\x89PNG\r\n\x1a\n"
    assert all(attrs.get("aria-label") for attrs in Page(written.html).all("svg"))


def test_names_with_markup_stay_names(written):
    page = Page(written.html)
    for raw in ("<b>bold", "Heath <i>", "<script>", "keep <off>"):
        assert raw not in written.html
    assert "North <b>bold</b>/End" in page.words
    assert page.words.startswith("Heath <i>of</i> Nowhere")
    assert "Group <script>x</script> has one collar." in page.words
    assert not page.all("i")


def test_convergence_is_said_once_and_plainly(written):
    words = Page(written.html).words
    if written.recipe.converged:
        assert "✓ converged" in words and "not converged" not in words
    else:
        assert "✗ not converged" in words and "✓ converged" not in words
        assert "R-hat of avoidance is too large, expected 1.01 at most: run longer chains." in words
        assert words.index("not converged") < words.index("Parameters")


def test_standing_sentences_follow_their_number(written):
    words = Page(written.html).words
    for name in ("avoidance", "resource"):
        assert words.count(NOTES[name]) == 1
        assert words.index(NOTES[name]) > words.index(f"{name}")
    assert NOTES["retreat"] not in words
    assert all(text in words for text in CAUTIONS)


def test_effective_fixes_and_why_stand_before_the_first_section(written):
    head = Page(written.html[: written.html.index("<main>")] + "</body></html>").words
    assert "carry the information of about" in head
    assert "Why fewer" in head


def test_many_groups_get_numbers_that_the_page_explains(twelve, five):
    words = Page(twelve.html).words
    assert "Numbers stand for groups: 1: North <b>bold</b>/End," in words and "12: Sett G" in words
    assert "localising by group" in words and "resource[cover] by group" in words
    assert "Numbers stand for groups" not in Page(five.html).words


def test_record_holds_seed_versions_and_hashes(five):
    words = Page(five.html).words
    facts = read_contents(five.folder).facts
    assert facts["files"]["fixes.csv"] in words and "seed 20" in words and "0.1.0" in words


def test_same_run_gives_the_same_page(new_run):
    folder = new_run()
    first = write(folder).read_bytes()
    assert write(folder).read_bytes() == first


def test_a_study_without_layers_has_no_layer_map(new_run):
    words = Page(write(new_run(groups=1, layers=())).read_text(encoding="utf-8")).words
    assert "mapped beside" not in words
    assert "One group only" in words
    assert NOTES["resource"] not in words


def test_sensitive_study_is_refused_before_anything_is_written(new_run):
    folder = new_run(sensitive="high")
    with pytest.raises(StudyError, match="sensitive = 'high'.*nothing was written"):
        write(folder)
    assert not (folder / "maps").exists() and not (folder / "report.html").exists()


@pytest.mark.parametrize("name", ["run.json", "posterior.nc", "tables/parameters.csv"])
def test_missing_file_is_named(new_run, name):
    folder = new_run()
    (folder / name).unlink()
    with pytest.raises(StudyError, match=f"has no {name}"):
        write(folder)


def test_format_of_another_version_is_refused(new_run):
    folder = new_run()
    file = folder / "run.json"
    file.write_text(file.read_text().replace('"format": 1', '"format": 7'))
    with pytest.raises(StudyError, match="has format 7, expected 1"):
        write(folder)


def test_grid_of_another_cell_is_refused(new_run):
    folder = new_run()
    file = folder / "run.json"
    file.write_text(file.read_text().replace('"cell_m": 100.0', '"cell_m": 50.0'))
    with pytest.raises(StudyError, match="steps of cell_m = 50 m"):
        write(folder)


def test_parameter_named_like_a_missing_value_stays_a_name(new_run):
    folder = new_run()
    file = folder / "tables" / "parameters.csv"
    table = pd.read_csv(file)
    table.loc[0, "parameter"] = "NA"
    table.to_csv(file, index=False)
    assert read_contents(folder).parameters.loc[0, "parameter"] == "NA"


@pytest.mark.parametrize(
    ("value", "width", "expected"),
    [
        (0.18234, 0.06, "0.182"),
        (12345.6, 300.0, "12,346"),
        (-0.4, 0.2, "−0.40"),
        (-0.0001, 2.0, "0.0"),
        (2.13e-5, 4e-6, "2.13 × 10⁻⁵"),
        (0.0, 1e-5, "0.0 × 10⁻⁵"),
        (float("nan"), 1.0, "–"),
        (3.0, float("nan"), "3.0"),
    ],
)
def test_numbers_have_two_digits_of_their_uncertainty(value, width, expected):
    assert number(value, width) == expected


def test_interval_keeps_the_digits_of_its_width():
    assert interval(-0.123, 1.456) == "−0.1 to 1.5"
    assert interval(0.5, float("nan")) == "–"


def test_bar_puts_values_in_order_between_the_ends():
    drawn = bar(1.0, 2.0, 4.0, (0.5, 20.0))
    places = [drawn.zero, drawn.prior_lower, drawn.lower, drawn.middle, drawn.upper, drawn.prior_upper]
    assert places == sorted(places) and 0 <= places[0] and places[-1] <= 100
    # Linear: the middle is a third of the way from lower to upper.
    assert drawn.middle - drawn.lower == pytest.approx((drawn.upper - drawn.lower) / 3)
    assert bar(float("nan"), 1.0, 2.0, None) is None
    assert bar(1.0, 1.0, 1.0, None).middle == pytest.approx(50)


def test_sparse_data_is_said_where_the_prior_makes_the_width(new_run):
    folder = new_run()
    file = folder / "tables" / "parameters.csv"
    table = pd.read_csv(file).assign(rhat=1.0, contraction=0.99)
    table.loc[table["parameter"] == "avoidance", "contraction"] = 0.36
    table.to_csv(file, index=False)
    blocks = parameter_blocks(read_contents(folder), Gate(chains=4))
    notes = {row.name: row.notes for row in blocks[0]["rows"]}
    # √(1 − 0.36) = 0.8
    assert notes["avoidance"][-1] == sparse_note("avoidance", 0.8) and "80 %" in notes["avoidance"][-1]
    assert notes["localising"] == []


def test_rows_that_miss_the_gate_are_marked():
    row = {
        "parameter": "localising", "unit": "1/km", "median": 7.0, "lower": 6.0, "upper": 8.0, "prior_lower": 1.0,
        "prior_upper": 20.0, "contraction": 0.9, "ess_bulk": 900.0, "ess_tail": 399.0, "rhat": 1.01,
    }  # fmt: skip
    good = row | {"parameter": "avoidance", "ess_tail": 400.0, "rhat": 1.0099}
    table = pd.DataFrame([row, good])
    made = read_rows(table)
    assert (made[0].weak_ess, made[0].weak_rhat) == (True, True)
    assert (made[1].weak_ess, made[1].weak_rhat) == (False, False)


def read_rows(table):
    empty = xr.Dataset()
    run = Contents(Path("nowhere"), {}, table, empty, empty, empty, empty, empty)
    return parameter_blocks(run, Gate(chains=4))[0]["rows"]


@pytest.mark.parametrize(
    ("name", "parts"),
    [
        ("avoidance raw", ("avoidance", "")),
        ("localising:sex=male", ("localising", "")),
        ("resource[earthworms, North] raw", ("resource", "earthworms, North")),
        ("localising[a[1]]", ("localising", "a[1]")),
        ("resource[earthworms] spread", ("resource", "earthworms")),
    ],
)
def test_parameter_names_are_taken_apart(name, parts):
    assert split_name(name) == parts


def test_priors_of_spreads_and_covariates_are_listed_and_those_of_other_parameters_are_not():
    empty, names = xr.Dataset(), ("localising", "localising spread", "covariate", "over_marking")
    facts = {"card": {"priors": {name: f"prior of {name}" for name in names}}}
    table = pd.DataFrame({"parameter": ["localising", "localising spread", "localising:size", "localising[north]"]})
    run = Contents(Path("nowhere"), facts, table, empty, empty, empty, empty, empty)
    assert [name for name, _, _ in priors(run)] == ["localising", "localising spread", "covariate"]
