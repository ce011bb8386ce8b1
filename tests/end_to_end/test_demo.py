"""The bundled study from raw files to report, against what its simulated animals really did.

Truth: case_studies/marram_heath/truth.json, from an individual-based simulator that shares no code with the package.
Its seed and the sampler's were fixed before the first fit.
"""

import subprocess
import sys

import pytest

from bayesrange import StudyError, open_run
from bayesrange._demo import TOO_FAR, copy_study, truth_table


@pytest.fixture(scope="module")
def demo(tmp_path_factory):
    folder = tmp_path_factory.mktemp("demo") / "heath"
    command = [sys.executable, "-m", "bayesrange", "demo", "--out", str(folder)]
    done = subprocess.run(command, capture_output=True, text=True, timeout=1200)
    return folder, done


def test_the_demo_converges_and_says_where_everything_is(demo):
    folder, done = demo
    assert done.returncode == 0, done.stdout + done.stderr
    assert (folder / "runs" / "avoidance-resources" / "report.html").is_file()
    assert "report.html" in done.stdout.replace("\n", "")


def test_no_parameter_of_the_demo_is_far_from_the_truth(demo):
    folder, done = demo
    table = truth_table(open_run(folder / "runs" / "avoidance-resources").parameters)
    assert list(table["parameter"]) == ["localising", "avoidance", "resource[earthworms]"]
    assert table["z"].abs().max() < TOO_FAR
    words = " ".join(done.stdout.split())
    assert f"{table['inside'].sum()} of 3 90 % intervals hold the truth; by chance 1 to 3 would" in words


def test_truth_lies_in_the_interval_by_the_table_itself(demo):
    folder, _ = demo
    table = truth_table(open_run(folder / "runs" / "avoidance-resources").parameters)
    shifted = open_run(folder / "runs" / "avoidance-resources").parameters.copy()
    shifted[["mean", "median", "lower", "upper"]] += 10 * shifted[["sd"]].to_numpy()
    moved = truth_table(shifted)
    assert not moved["inside"].any()
    assert (moved["z"] - table["z"]).to_numpy() == pytest.approx(10)


def test_an_unfinished_demo_is_gone_on_with_and_a_finished_one_left_alone(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    first = copy_study(None)
    assert copy_study(None) == first
    run = first / "runs" / "avoidance-resources"
    run.mkdir(parents=True)
    (run / "run.json").write_text("{}")
    assert copy_study(None).name == "bayesrange-demo-2"


def test_a_changed_file_of_the_demo_is_not_overwritten(tmp_path):
    folder = copy_study(tmp_path / "heath")
    (folder / "groups.csv").write_text("group,x,y,animals\n")
    with pytest.raises(StudyError, match="groups.csv: differs from the bundled study's file; choose another folder"):
        copy_study(folder)
    assert (folder / "groups.csv").read_text() == "group,x,y,animals\n"
