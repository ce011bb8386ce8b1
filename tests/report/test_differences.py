"""The page of differences: whole, self-contained, escaped, and plain about what may be compared."""

import re

import numpy as np
import pandas as pd
import pytest
from inference._made_runs import SCALES, plain_run, write_run
from page_text import Page

from bayesrange import StudyError
from bayesrange.inference import between_periods
from bayesrange.report import write_differences
from bayesrange.report._differences_figure import differences_figure

SHAPE = (2, 50)
NAME = "Heath <i>of</i> Nowhere"


def made(folder, period, seed, **changes):
    rng = np.random.default_rng(seed)
    draws = {name: centre + 0.1 * rng.normal(size=SHAPE) for name, centre in
             (("localising", 5 + seed), ("avoidance", 0.9), ("resource", 0.2))}  # fmt: skip
    areas = np.exp(0.1 * rng.normal(size=(*SHAPE, 2, 2)) - seed)
    return plain_run(folder / period, period, draws, areas, name=NAME, **changes)


def page_of(tmp_path, *runs):
    found = write_differences(runs, tmp_path / "differences")
    html = (tmp_path / "differences" / "differences.html").read_text(encoding="utf-8")
    return found, html, Page(html)


def test_page_is_self_contained_and_names_stay_names(tmp_path):
    _, html, page = page_of(tmp_path, made(tmp_path, "before", 1), made(tmp_path, "after", 2))
    for tag, attrs in page.tags:
        assert tag not in {"script", "link", "iframe", "object", "embed", "form"}
        assert attrs.get("src", "#").startswith(("#", "data:image/png;base64,"))
    assert not re.search(r"url\(|@import|https?://", html) and "default-src 'none'" in html
    assert page.words.startswith("Heath <i>of</i> Nowhere: avoidance-resources, differences between periods")
    assert "area_95[säter, <b>low</b>]" in page.words and not page.all("i")
    ids = [attrs["id"] for attrs in page.all("section")]
    assert [attrs["href"].removeprefix("#") for attrs in page.all("a")] == ids
    assert all(len(attrs["alt"]) > 30 for attrs in page.all("img")) and page.all("img")


def test_rows_of_the_page_are_those_of_the_table(tmp_path):
    found, _, page = page_of(tmp_path, made(tmp_path, "before", 1), made(tmp_path, "after", 2))
    shown = {row[0]: row for row in page.rows if len(row) == 8}
    assert list(shown)[1:] == list(found.table["quantity"])
    row = found.table.set_index("quantity").loc["localising"]
    # two significant digits of the width of the interval, about 0.46
    assert shown["localising"][1:4] == [
        f"{row['median']:.2f}", f"{row['lower']:.2f} to {row['upper']:.2f}", "1/km"
    ]  # fmt: skip
    assert shown["localising"][7] == "1.00" and shown["resource[worms]"][5] == ""
    written = pd.read_csv(tmp_path / "differences" / "differences.csv", keep_default_na=False)
    assert list(written["quantity"]) == list(found.table["quantity"])


def test_clear_differences_are_counted_and_named(tmp_path):
    words = page_of(tmp_path, made(tmp_path, "before", 1), made(tmp_path, "after", 2))[2].words
    # localising and four areas moved by ten sd; raw rows are not counted twice
    assert "before to after: 5 of 7 intervals leave out zero (about 10 % would by chance" in words
    assert "localising rose" in words and "area_50[north] fell" in words and "avoidance raw rose" not in words


def test_same_scales_and_other_scales_are_said(tmp_path):
    one, two = made(tmp_path, "before", 1), made(tmp_path, "after", 2)
    assert "are the same in these runs, so that every row means the same" in page_of(tmp_path, one, two)[2].words
    other = made(tmp_path, "later", 3, scales=SCALES | {"a0_km2": 0.8})
    _, _, page = page_of(tmp_path, one, other)
    assert "are not all the same in these runs. Where they differ only rows in raw units are given" in page.words
    at = next(i for i, row in enumerate(page.rows) if row[0] == "avoidance raw")
    assert page.rows[at + 1] == ["A₀ is 0.5 km² and 0.8 km²: only raw rows compare."]
    assert "before to later, left out: avoidance: A₀ is" in page.words


def test_convergence_of_each_run_is_said(tmp_path):
    one = made(tmp_path, "before", 1)
    two = made(tmp_path, "after", 2, converged=False, diagnostics={"problems": ["Raise <b>draws</b>."]})
    assert "✓ converged" in page_of(tmp_path, one, made(tmp_path, "later", 3))[2].words
    words = page_of(tmp_path, one, two)[2].words
    assert "✗ not converged The run of after did not converge" in words and "after: Raise <b>draws</b>." in words


def test_sparse_data_are_said_beside_the_row(tmp_path):
    one, two = made(tmp_path, "before", 1), made(tmp_path, "after", 2)
    file = two.folder / "tables" / "parameters.csv"
    table = pd.read_csv(file)
    table.loc[table["parameter"] == "avoidance", "contraction"] = 0.36  # sd 80 % of the prior's
    table.to_csv(file, index=False)
    rows = page_of(tmp_path, one, two)[2].rows
    at = next(i for i, row in enumerate(rows) if row[0] == "avoidance")
    assert rows[at + 1][0].startswith("Sparse data: the posterior sd is 80 % in after of the prior’s")


def test_three_periods_have_a_table_each_way(tmp_path):
    runs = [made(tmp_path, period, at) for at, period in enumerate(("before", "after", "later"), 1)]
    words = page_of(tmp_path, *runs)[2].words
    assert words.index("after minus before") < words.index("later minus after") < words.index("later minus before")
    assert "periods before, after and later" in words


def test_long_tables_are_drawn_in_part_and_said_so(tmp_path):
    found = between_periods([made(tmp_path, "before", 1), made(tmp_path, "after", 2)])
    many = pd.concat([found.table.assign(quantity=f"q{at}", unit="m") for at in range(70)])
    assert "10 more quantities are in the tables." in differences_figure(many).caption


def test_sensitive_studies_and_single_runs_are_refused(tmp_path):
    one, two = made(tmp_path, "before", 1), made(tmp_path, "after", 2, sensitive="high")
    with pytest.raises(StudyError, match="sensitive = 'high'"):
        write_differences([one, two], tmp_path / "out")
    with pytest.raises(StudyError, match="at least two periods, got 1"):
        write_differences([one], tmp_path / "out")
    assert not (tmp_path / "out").exists()


def test_runs_with_nothing_in_common_make_a_page_without_rows(tmp_path):
    one, two = (
        write_run(tmp_path / period, period, run.posterior["posterior"].to_dataset().load(), table)
        for period, run, table in (
            ("early", plain_run(tmp_path / "a", "after", {"localising": np.ones(SHAPE)}), pd.DataFrame(
                {"parameter": ["localising"], "unit": ["1/km"], "contraction": [0.9]})),
            ("after", plain_run(tmp_path / "b", "after", {"avoidance": np.ones(SHAPE)}), pd.DataFrame(
                {"parameter": ["avoidance"], "unit": ["1"], "contraction": [0.9]})),
        )
    )  # fmt: skip
    found, _, page = page_of(tmp_path, one, two)
    assert found.table.empty and not page.all("img") and "not in the run of" in page.words
