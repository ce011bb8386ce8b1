"""Run folders: nothing finished is overwritten, nothing foreign is touched, nothing half-written is left."""

import json
import os

import pytest

from bayesrange import StudyError, open_run
from bayesrange.inference._folder import choose_folder, make_folder, write_atomically, write_json


def finished(folder):
    folder.mkdir(parents=True)
    (folder / "run.json").write_text("{}")
    return folder


def unfinished(folder, fingerprint="abc"):
    (folder / "checkpoints").mkdir(parents=True)
    (folder / "checkpoints" / "inputs.json").write_text(json.dumps({"fingerprint": fingerprint, "inputs": {}}))
    return folder


def test_run_goes_beside_the_study(tmp_path):
    assert choose_folder(tmp_path, "avoidance", None, False) == tmp_path / "runs" / "avoidance"
    assert not (tmp_path / "runs").exists()  # choosing writes nothing


def test_folder_of_the_users_choice_is_taken(tmp_path):
    assert choose_folder(tmp_path, "avoidance", tmp_path / "a b", False) == tmp_path / "a b"


def test_finished_run_is_never_taken(tmp_path):
    run = finished(tmp_path / "runs" / "avoidance")
    with pytest.raises(StudyError, match="a finished run is here and is never overwritten; add --again"):
        choose_folder(tmp_path, "avoidance", None, False)
    with pytest.raises(StudyError, match="never overwritten"):
        choose_folder(tmp_path, "localising", run, False)


def test_again_takes_the_next_free_number(tmp_path):
    finished(tmp_path / "runs" / "avoidance")
    assert choose_folder(tmp_path, "avoidance", None, True) == tmp_path / "runs" / "avoidance-2"
    finished(tmp_path / "runs" / "avoidance-2")
    assert choose_folder(tmp_path, "avoidance", None, True) == tmp_path / "runs" / "avoidance-3"


def test_again_takes_the_plain_name_where_nothing_stands(tmp_path):
    assert choose_folder(tmp_path, "avoidance", None, True) == tmp_path / "runs" / "avoidance"


def test_unfinished_run_is_gone_on_with(tmp_path):
    run = unfinished(tmp_path / "runs" / "avoidance")
    assert choose_folder(tmp_path, "avoidance", None, False) == run


def test_again_goes_on_with_its_own_unfinished_run_and_with_no_other(tmp_path):
    finished(tmp_path / "runs" / "avoidance")
    unfinished(tmp_path / "runs" / "avoidance-2", "other")
    third = unfinished(tmp_path / "runs" / "avoidance-3", "ours")
    assert choose_folder(tmp_path, "avoidance", None, True, "ours") == third
    assert choose_folder(tmp_path, "avoidance", None, True, "new") == tmp_path / "runs" / "avoidance-4"


def test_folder_that_cannot_be_made_is_an_error_of_the_input(tmp_path):
    (tmp_path / "runs").write_text("a file where folders of runs should go")
    with pytest.raises(StudyError, match="avoidance: this folder cannot be made .*choose another with --out"):
        make_folder(choose_folder(tmp_path, "avoidance", None, False))


def test_empty_folder_will_do(tmp_path):
    (tmp_path / "out").mkdir()
    assert choose_folder(tmp_path, "avoidance", tmp_path / "out", False) == tmp_path / "out"


def test_folder_with_other_things_is_refused(tmp_path):
    (tmp_path / "out").mkdir()
    (tmp_path / "out" / "thesis.txt").write_text("x")
    with pytest.raises(StudyError, match="this folder holds other things than a run; choose another with --out"):
        choose_folder(tmp_path, "avoidance", tmp_path / "out", False)


def test_file_in_place_of_the_folder_is_refused(tmp_path):
    (tmp_path / "out").write_text("x")
    with pytest.raises(StudyError, match="expected a folder to write the run into, and a file is there"):
        choose_folder(tmp_path, "avoidance", tmp_path / "out", False)


def test_file_appears_whole(tmp_path):
    write_atomically(tmp_path / "a.csv", b"one")
    write_atomically(tmp_path / "a.csv", b"two")
    assert [(file.name, file.read_bytes()) for file in tmp_path.iterdir()] == [("a.csv", b"two")]


@pytest.mark.parametrize("moment", ["fsync", "replace"])
def test_interrupted_write_leaves_the_old_file_and_no_other(tmp_path, monkeypatch, moment):
    write_atomically(tmp_path / "a.csv", b"old")

    def stop(*arguments):
        raise KeyboardInterrupt

    monkeypatch.setattr(os, moment, stop)
    with pytest.raises(KeyboardInterrupt):
        write_atomically(tmp_path / "a.csv", b"new and longer")
    assert [(file.name, file.read_bytes()) for file in tmp_path.iterdir()] == [("a.csv", b"old")]


def test_json_is_readable_and_knows_no_nan(tmp_path):
    write_json(tmp_path / "run.json", {"name": "säter", "value": None})
    assert json.loads((tmp_path / "run.json").read_text(encoding="utf-8")) == {"name": "säter", "value": None}
    with pytest.raises(ValueError, match="not JSON compliant"):
        write_json(tmp_path / "other.json", {"value": float("nan")})
    assert not (tmp_path / "other.json").exists()


def test_opening_what_is_no_run_says_what_is_there(tmp_path):
    with pytest.raises(StudyError, match="no finished run here; give the folder that `bayesrange fit` wrote"):
        open_run(tmp_path / "nowhere")
    with pytest.raises(StudyError, match="it is unfinished; `bayesrange fit` with the same study goes on with it"):
        open_run(unfinished(tmp_path / "half"))


def test_open_run_takes_a_folder_as_text(tmp_path):
    assert open_run(str(finished(tmp_path / "run"))).folder == tmp_path / "run"
