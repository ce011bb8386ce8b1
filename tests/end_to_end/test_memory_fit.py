"""Memory cards from study to run folder: each animal alone, a population, a fit that was killed."""

import json
import os
import signal
import subprocess
import sys
import time

import numpy as np
import pandas as pd
import pytest
import xarray as xr
from inference._tiny_tracks import BO, TOM, fixes_table, write_tracks

TINY = {"chains": 2, "warmup": 20, "draws": 30}
FIT = """
import bayesrange, sys
run = bayesrange.fit(sys.argv[1], again=True, processes=int(sys.argv[2]))
print(run.folder)
"""


def two_animals():
    fixes = fixes_table()
    return fixes[fixes["animal"].isin([BO, TOM])]


@pytest.fixture(scope="module")
def alone(tmp_path_factory):
    """The study of two animals, each fitted by itself with memory."""
    folder = tmp_path_factory.mktemp("memory") / "Fern Hollöw"
    write_tracks(folder, two_animals(), model={"pooling": "individual"}, sampling=TINY)
    return folder


@pytest.fixture(scope="module")
def fit(environment, elsewhere):
    """Call `bayesrange.fit` in a process of its own; a new session, so that the whole family can be killed."""

    def start(study, processes):
        return subprocess.Popen(
            [sys.executable, "-c", FIT, str(study), str(processes)], env=environment, cwd=elsewhere, text=True,
            start_new_session=True, stdout=subprocess.PIPE, stderr=subprocess.PIPE,
        )  # fmt: skip

    return start


@pytest.fixture(scope="module")
def straight(alone, fit):
    """A run that nothing stopped."""
    process = fit(alone, 2)
    out, said = process.communicate()
    assert process.returncode == 0, said
    assert out.strip() == str(alone / "runs" / "memory-resources")
    return alone / "runs" / "memory-resources"


@pytest.fixture(scope="module")
def resumed(straight, alone, fit):
    """The same run, killed as the second animal's first chain had left its warmup, then gone on with."""
    folder = alone / "runs" / "memory-resources-2"
    process, mark = fit(alone, 1), folder / "checkpoints" / "animal-2" / "chain-1" / "part-0000.pkl"
    while not mark.exists():
        assert process.poll() is None, process.stderr.read()
        time.sleep(0.02)
    os.killpg(process.pid, signal.SIGKILL)
    process.communicate()
    left = sorted(str(file.relative_to(folder)) for file in folder.rglob("*") if file.is_file())
    again = fit(alone, 2)
    out, said = again.communicate()
    assert again.returncode == 0 and out.strip() == str(folder), said
    return folder, left


def test_run_of_animals_alone_has_the_files_and_groups_that_were_agreed(straight):
    assert {file.name for file in straight.iterdir()} == {"posterior.nc", "run.json", "tables"}
    with xr.open_datatree(straight / "posterior.nc", engine="h5netcdf") as tree:
        groups = {
            "posterior",
            "prior",
            "sample_stats",
            "log_likelihood",
            "observed_data",
            "constant_data",
            "memory_use",
        }
        assert set(tree.children) == groups
        assert dict(tree["posterior"].sizes) == {"chain": 2, "draw": 30, "animal": 2, "layer": 1}
        assert tree["posterior/reference_decay"].attrs["units"] == "h"
        assert (tree["posterior/reference_decay"] > tree["posterior/working_decay"]).all()
        assert tree["sample_stats/diverging"].dims == ("chain", "draw", "animal")
        assert tree["log_likelihood/steps"].sizes["step"] == tree["constant_data/length_m"].size == 119 + 159
        assert tree["log_likelihood/steps"].dtype == np.float32
        recall = tree["memory_use/recall_mean"]
        assert recall.dims == ("animal", "y", "x") and ((recall >= 0) & (recall < 1)).all() and recall.max() > 0.1


def test_run_json_says_what_was_counted_and_how_exact_it_is(straight):
    run = json.loads((straight / "run.json").read_text(encoding="utf-8"))
    assert (run["format"], run["card"]["kind"], run["card"]["pooling"]) == (1, "memory", "individual")
    memory = run["memory"]
    assert memory["trace_error"] < memory["trace_error_limit"] and memory["nodes"] == 16
    assert memory["steps"][TOM] == {
        "fixes": 160, "intervals": 159, "steps": 159, "not_nominal": 0, "off_ground": 0, "learning": 0, "short": 5,
        "turn_unknown": 6, "without_nodes": 0,
    }  # fmt: skip
    assert set(memory["step_autocorrelation"]) == {BO, TOM}
    rows = pd.read_csv(straight / "tables" / "parameters.csv")["parameter"]
    assert set(memory["quadrature_shift"]) == {row for row in rows if not row.endswith(" raw")}
    assert all(np.isfinite(value) for value in memory["quadrature_shift"].values())
    assert run["effective"] is None and run["scales"]["encoding_range_m"] == memory["encoding_range_m"]
    assert run["warnings"] and run["warnings"][0].startswith("278 steps of 1 h")


def test_table_of_animals_alone_has_every_parameter_of_each(straight):
    table = pd.read_csv(straight / "tables" / "parameters.csv").set_index("parameter")
    names = ("step_shape", "step_scale", "turn_concentration", "reference_strength", "reference_decay",
             "working_strength", "working_decay", "recall_half")  # fmt: skip
    wanted = {f"{name}[{a}]" for name in names for a in (BO, TOM)}
    wanted |= {f"selection[forage, {a}]{raw}" for a in (BO, TOM) for raw in ("", " raw")}
    assert set(table.index) == wanted
    # Gamma lengths about 214 m in the median: shape × scale, the mean step, is told well even by few draws.
    mean = table.loc[f"step_shape[{TOM}]", "mean"] * table.loc[f"step_scale[{TOM}]", "mean"]
    assert 100 < mean < 500


def test_killed_run_left_checkpoints_of_each_animal_and_nothing_finished(resumed):
    _, left = resumed
    assert "run.json" not in left and "posterior.nc" not in left
    parts = {f"checkpoints/animal-{k}/{name}" for k in (1, 2) for name in ("task.pkl", "start.npz")}
    assert parts | {"checkpoints/animal-1/chain-1/derived.npz", "checkpoints/inputs.json"} <= set(left)


def test_draws_of_a_killed_run_are_those_of_one_that_nothing_stopped(resumed, straight):
    folder, _ = resumed
    with (
        xr.open_datatree(folder / "posterior.nc", engine="h5netcdf") as ours,
        xr.open_datatree(straight / "posterior.nc", engine="h5netcdf") as theirs,
    ):
        for group in theirs.children:
            for name, variable in theirs[group].dataset.data_vars.items():
                np.testing.assert_array_equal(ours[group].dataset[name], variable, err_msg=f"{group}/{name}")
    table = "tables/parameters.csv"
    assert (folder / table).read_bytes() == (straight / table).read_bytes()
    facts = [json.loads((run / "run.json").read_text(encoding="utf-8"))["memory"] for run in (folder, straight)]
    assert facts[0] == facts[1]
    assert not (folder / "checkpoints").exists()


def test_animals_and_chains_differ(straight):
    with xr.open_datatree(straight / "posterior.nc", engine="h5netcdf") as tree:
        draws = tree["posterior/step_scale"].values.reshape(-1, 2)
        assert not np.any(draws[:, 0] == draws[:, 1])
        chains = tree["posterior/step_scale"].values
        assert not np.any(chains[0] == chains[1])


def test_population_is_fitted_in_one_with_covariate_and_new_animal(tmp_path, fit):
    model = {"card": "steps-resources", "pooling": "hierarchical", "covariates": ["sex"]}
    write_tracks(tmp_path, model=model, sampling=TINY)
    process = fit(tmp_path, 2)
    said = process.communicate()[1]
    assert process.returncode == 0, said
    folder = tmp_path / "runs" / "steps-resources"
    rows = set(pd.read_csv(folder / "tables" / "parameters.csv")["parameter"])
    assert {"step_scale", "step_scale spread", "step_scale:sex=m", "step_scale[Åse]", "step_scale[new animal]"} <= rows
    assert {"selection[forage]", "selection[forage] raw", "selection[forage, new animal]"} <= rows
    with xr.open_datatree(folder / "posterior.nc", engine="h5netcdf") as tree:
        assert tree["posterior/selection"].dims == ("chain", "draw", "layer", "animal")
        assert tree["sample_stats/energy"].dims == ("chain", "draw")
        assert "memory_use" not in tree and "animal_correlation" not in tree["posterior"].dataset
    run = json.loads((folder / "run.json").read_text(encoding="utf-8"))
    assert run["card"]["pooling"] == "hierarchical" and run["memory"]["units"] == [BO, TOM, "vixen", "Åse"]
    assert run["memory"]["encoding_range_m"] is None and run["memory"]["trace_error"] == 0
