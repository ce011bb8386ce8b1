"""`bayesrange fit` on a study with periods: each fitted, those finished kept, and what lies between them written."""

import hashlib
import json

import numpy as np
import pandas as pd
import pytest
import xarray as xr
from inference._tiny_study import write_study

from bayesrange import commands, differences, fit_periods, open_run
from bayesrange.study import StudyError

PERIODS = """
[periods]
before = { from = 2031-03-01, until = 2031-03-08 }
after = { from = 2031-03-09, until = 2031-12-31 }
"""


def write(folder, more=PERIODS, **changes):
    """The tiny study with two periods, one short chain."""
    sampling = {"chains": 1, "warmup": 30, "draws": 40} | changes.pop("sampling", {})
    path = write_study(folder, sampling=sampling, **changes)
    path.write_text(path.read_text(encoding="utf-8") + more, encoding="utf-8")
    return path


def state(folder):
    return {file: hashlib.sha256(file.read_bytes()).hexdigest() for file in folder.rglob("*") if file.is_file()}


@pytest.fixture(scope="module")
def study(tmp_path_factory):
    return write(tmp_path_factory.mktemp("periods") / "Tern Märsh")


@pytest.fixture(scope="module")
def answered(study, environment):
    """The command, in this process."""
    with pytest.MonkeyPatch.context() as patch:
        patch.setenv("XDG_CACHE_HOME", environment["XDG_CACHE_HOME"])
        status = commands.main(["fit", str(study)])
    return status, study.parent / "runs"


def test_each_period_has_its_run_and_the_differences_their_folder(answered):
    status, runs = answered
    assert status == 3  # one chain cannot be judged: not converged
    card = "avoidance-resources"
    assert {file.name for file in runs.iterdir()} == {f"{card}-before", f"{card}-after", f"{card}-differences"}
    for period, fixes in (("before", 96), ("after", 104)):
        folder = runs / f"{card}-{period}"
        info = json.loads((folder / "run.json").read_text(encoding="utf-8"))
        assert (info["period"], info["counts"]["fixes"]) == (period, fixes)
        assert (folder / "report.html").is_file()
    assert {file.name for file in (runs / f"{card}-differences").iterdir()} == {"differences.csv", "differences.html"}


def test_table_has_every_parameter_and_area_in_the_columns_of_the_format(answered):
    runs = answered[1]
    table = pd.read_csv(runs / "avoidance-resources-differences" / "differences.csv")
    assert list(table.columns) == [
        "quantity", "unit", "first", "second", "median", "lower", "upper", "prob", "ratio_median", "ratio_lower",
        "ratio_upper", "probability_above_zero", "note",
    ]  # fmt: skip
    assert set(table["first"]) == {"before"} and set(table["second"]) == {"after"}
    before, after = (open_run(runs / f"avoidance-resources-{period}") for period in ("before", "after"))
    parameters = list(before.parameters["parameter"])
    groups = ["north", "säter, <b>low</b>", "east wood"]
    assert list(table["quantity"]) == parameters + [f"area_{level}[{group}]" for group in groups for level in (50, 95)]
    assert table["note"].isna().all()  # same ground, same scales
    # Every pair of draws, by brute force; 20 random pairings of 40 draws are within four standard errors of that.
    draws = []
    for run in (before, after):
        with xr.open_datatree(run.folder / "posterior.nc", engine="h5netcdf") as tree:
            draws.append(tree["space_use/area_km2"].sel(isopleth=95, group="north").values.ravel())
    every = np.subtract.outer(draws[1], draws[0])
    row = table.set_index("quantity").loc["area_95[north]"]
    assert row["median"] == pytest.approx(np.median(every), abs=4 * 1.25 * every.std() / np.sqrt(20 * 40))
    pd.testing.assert_frame_equal(differences(before, after), table.assign(note=""), check_dtype=False)


def test_the_same_command_keeps_finished_runs_and_says_so(answered, study, capsys):
    runs = answered[1]
    before = state(study.parent)
    assert commands.main(["fit", str(study)]) == 3
    said = capsys.readouterr().out
    for period in ("before", "after"):
        assert f"with the same inputs is in {runs / f'avoidance-resources-{period}'}; it did not converge." in said
    assert "Not converged: before, after" in said and "after minus before" in said
    after = state(study.parent)
    page = runs / "avoidance-resources-differences" / "differences.html"
    assert {file: after[file] for file in after if file != page} == {f: before[f] for f in before if f != page}


def test_python_call_keeps_them_too(answered, study):
    messages = []
    runs = fit_periods(study, tell=messages.append)
    assert list(runs) == ["before", "after"]
    assert [(message["stage"], message["period"]) for message in messages] == [("kept", "before"), ("kept", "after")]


def test_a_report_that_an_interruption_left_out_is_written(answered, study, capsys):
    page = answered[1] / "avoidance-resources-after" / "report.html"
    page.unlink()
    assert commands.main(["fit", str(study)]) == 3
    assert page.is_file() and str(page) in capsys.readouterr().out


def test_finished_run_of_changed_inputs_is_refused_by_what_changed(answered, study, capsys):
    text = study.read_text(encoding="utf-8")
    before = state(answered[1])
    study.write_text(text.replace("seed = 4", "seed = 5"), encoding="utf-8")
    try:
        assert commands.main(["fit", str(study)]) == 2
    finally:
        study.write_text(text, encoding="utf-8")
    said = capsys.readouterr()
    assert said.err == (
        f"bayesrange: {answered[1] / 'avoidance-resources-before'}: a finished run is here and is never overwritten, "
        "and since it was made study.toml changed; undo the change to keep it, or add --again for new runs.\n"
    )
    assert said.out == "" and state(answered[1]) == before


def test_folder_of_differences_with_other_things_is_refused_before_anything_is_fitted(tmp_path, capsys):
    study = write(tmp_path)
    other = tmp_path / "runs" / "avoidance-resources-differences" / "thesis.txt"
    other.parent.mkdir(parents=True)
    other.write_text("x")
    before = state(tmp_path)
    assert commands.main(["fit", str(study)]) == 2
    assert "holds other things than a page of differences (thesis.txt)" in capsys.readouterr().err
    assert state(tmp_path) == before


def test_period_without_fixes_stops_all_before_anything_is_written(tmp_path, capsys):
    study = write(tmp_path, PERIODS + "winter = { from = 2032-01-01, until = 2032-02-01 }\n")
    before = sorted(tmp_path.rglob("*"))
    assert commands.main(["fit", str(study)]) == 2
    said = capsys.readouterr()
    assert said.out == "" and "[periods] winter: no fix is in it" in said.err
    assert sorted(tmp_path.rglob("*")) == before


def test_study_without_periods_is_no_study_of_periods(tmp_path):
    with pytest.raises(StudyError, match="study.toml: the study file has no section .periods.; fit it as a whole"):
        fit_periods(write_study(tmp_path))


def test_period_named_like_the_folder_of_differences_is_refused(tmp_path, capsys):
    study = write(tmp_path, PERIODS.replace("after", "Differences"))
    assert commands.main(["fit", str(study)]) == 2
    assert "[periods]: the name Differences is that of the folder" in capsys.readouterr().err
