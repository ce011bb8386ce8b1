"""An interrupted fit: what it answers, that it goes on where it stopped, and that the draws are the same bit for bit.

One run is interrupted by Ctrl-C, then killed, then finished by a user's own script with two chains at a time; the run
it is compared with was never interrupted and had one chain at a time.
"""

import os
import pickle
import signal
import subprocess
import sys
import time

import numpy as np
import pytest
import xarray as xr

from bayesrange import StudyError, commands, fit

SCRIPT = """
import bayesrange, sys
study = bayesrange.read_study(sys.argv[1])
run = bayesrange.fit(study, again=True, processes=2, tell=lambda message: print(message["stage"]))
print(run.folder)
"""  # a plain script: no `if __name__ == "__main__"`


LISTEN = "import os, signal, sys; signal.signal(signal.SIGINT, signal.SIG_DFL); os.execv(sys.executable, sys.argv[1:])"
"""A shell starts background jobs with SIGINT ignored, and children inherit that; a terminal's command listens."""


class Interrupted:
    """What became of the run at each stop."""

    def __init__(self, study, environment, elsewhere):
        self.study, self.environment, self.elsewhere = study, environment, elsewhere
        self.folder = study / "runs" / "avoidance-resources-2"
        self.checkpoints = self.folder / "checkpoints"

    def stop_at(self, file, sign):
        """Start the command, send its whole process group a signal once a file is there; status and standard error."""
        command = [sys.executable, "-m", "bayesrange", "fit", str(self.study), "--again", "--processes", "1"]
        process = subprocess.Popen(
            [sys.executable, "-c", LISTEN, *command], env=self.environment, cwd=self.elsewhere, text=True,
            start_new_session=True, stdout=subprocess.DEVNULL, stderr=subprocess.PIPE,
        )  # fmt: skip
        while not (self.checkpoints / file).exists():
            assert process.poll() is None, process.stderr.read()
            time.sleep(0.02)
        os.killpg(process.pid, sign)
        said = process.communicate()[1]
        return process.returncode, said

    def drop_parts_from(self, chain, number):
        """As if the stop had come a moment earlier: parts are written whole and one after another."""
        for file in (self.checkpoints / f"chain-{chain}").iterdir():
            if file.name == "derived.npz" or file.name >= f"part-{number:04d}.pkl":
                file.unlink()


@pytest.fixture(scope="module")
def story(run_folder, study_folder, environment, elsewhere):
    it = Interrupted(study_folder, environment, elsewhere)
    it.interrupted = it.stop_at("chain-1/part-0002.pkl", signal.SIGINT)
    it.drop_parts_from(1, 3)
    it.after_interrupt = sorted(file.name for file in it.checkpoints.rglob("*"))
    it.killed = it.stop_at("chain-1/part-0005.pkl", signal.SIGKILL)
    it.drop_parts_from(1, 6)
    it.changed = _try_with_changed_fixes(study_folder)
    started = (it.checkpoints / "start.npz").read_bytes()
    (elsewhere / "my script.py").write_text(SCRIPT)
    command = [sys.executable, "my script.py", str(study_folder)]
    it.script = subprocess.run(command, env=environment, cwd=elsewhere, text=True, capture_output=True)
    it.started = started
    return it


def _try_with_changed_fixes(folder):
    file = folder / "fixes.csv"
    content = file.read_bytes()
    file.write_bytes(content.replace(b"\n", b"\r\n"))
    try:
        fit(folder, out=folder / "runs" / "avoidance-resources-2")
    except StudyError as error:
        return str(error)
    finally:
        file.write_bytes(content)


def test_ctrl_c_ends_with_status_130_and_says_that_nothing_is_lost(story):
    status, said = story.interrupted
    assert status == 130
    assert said == "bayesrange: stopped; the same command goes on from here.\n"


def test_checkpoints_are_whole_after_an_interrupt(story):
    assert {"task.pkl", "inputs.json", "start.npz", "chain-1", "part-0000.pkl"} <= set(story.after_interrupt)
    assert not [name for name in story.after_interrupt if name.startswith(".")]


def test_killed_run_leaves_nothing_that_looks_finished(story):
    assert story.killed[0] == -signal.SIGKILL


def test_changed_fixes_do_not_resume_and_are_named(story):
    assert "an unfinished run is here, and since it began fixes.csv changed; undo the change" in story.changed


def test_plain_script_without_a_main_guard_finishes_the_run(story):
    assert story.script.returncode == 0, story.script.stderr
    lines = story.script.stdout.splitlines()
    assert lines[-1] == str(story.folder)
    assert lines[0] == "read" and "started" not in lines  # the mode was not looked for again
    assert not story.checkpoints.exists() and (story.folder / "run.json").exists()


def test_draws_are_those_of_the_uninterrupted_run_bit_for_bit(story, run_folder):
    with (
        xr.open_datatree(story.folder / "posterior.nc", engine="h5netcdf") as resumed,
        xr.open_datatree(run_folder / "posterior.nc", engine="h5netcdf") as straight,
    ):
        for group in ("posterior", "prior", "sample_stats", "log_likelihood", "space_use"):
            for name, variable in straight[group].dataset.data_vars.items():
                np.testing.assert_array_equal(resumed[group].dataset[name], variable, err_msg=f"{group}/{name}")
    table = "tables/parameters.csv"
    assert (story.folder / table).read_bytes() == (run_folder / table).read_bytes()


def test_chains_of_one_run_differ(run_folder):
    with xr.open_datatree(run_folder / "posterior.nc", engine="h5netcdf") as tree:
        draws = tree["posterior/localising"].values
    assert not np.any(draws[0] == draws[1])


def test_finished_run_of_the_python_call_is_not_overwritten_either(run_folder, study_folder):
    with pytest.raises(StudyError, match="never overwritten"):
        fit(study_folder)


@pytest.mark.parametrize("processes", [0, -1])
def test_no_process_at_all_is_refused(study_folder, processes):
    with pytest.raises(ValueError, match="`processes` is a number of chains and must be at least 1"):
        fit(study_folder, processes=processes)


def test_torn_part_is_sampled_again(tmp_path):
    from bayesrange.inference._task import load_parts, save_part

    for number in range(3):
        save_part(tmp_path, number, {"count": number})
    whole = (tmp_path / "part-0001.pkl").read_bytes()
    (tmp_path / "part-0001.pkl").write_bytes(whole[:-4])
    assert [part["count"] for part in load_parts(tmp_path)] == [0]
    (tmp_path / "part-0001.pkl").write_bytes(b"")
    assert [part["count"] for part in load_parts(tmp_path)] == [0]
    (tmp_path / "part-0001.pkl").write_bytes(pickle.dumps({"count": 1}))
    assert [part["count"] for part in load_parts(tmp_path)] == [0, 1, 2]


def test_command_line_answers_a_resumed_change_with_status_2(tmp_path, study_folder, capsys):
    # The unfinished run of another input, as the command meets it
    checkpoints = tmp_path / "run" / "checkpoints"
    checkpoints.mkdir(parents=True)
    (checkpoints / "inputs.json").write_text('{"fingerprint": "x", "inputs": {"worms.tif": "0"}}')
    assert commands.main(["fit", str(study_folder), "--out", str(tmp_path / "run")]) == 2
    assert "worms.tif" in capsys.readouterr().err
    assert [file.name for file in checkpoints.iterdir()] == ["inputs.json"]


def test_second_fit_of_a_run_in_the_making_is_refused(tmp_path, study_folder, capsys):
    # Another process that samples into the same folder holds its lock
    checkpoints = tmp_path / "run" / "checkpoints"
    checkpoints.mkdir(parents=True)
    hold = "import fcntl, sys; file = open(sys.argv[1], 'w'); fcntl.flock(file, 2); print('held'); sys.stdin.read()"
    with subprocess.Popen(
        [sys.executable, "-uc", hold, str(checkpoints / "lock")], stdin=subprocess.PIPE, stdout=subprocess.PIPE
    ) as other:
        assert other.stdout.readline()
        assert commands.main(["fit", str(study_folder), "--out", str(tmp_path / "run")]) == 2
        assert "another fit is writing this run right now" in capsys.readouterr().err
        assert [file.name for file in checkpoints.iterdir()] == ["lock"]
        other.stdin.close()
