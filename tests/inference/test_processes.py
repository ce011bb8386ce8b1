"""Worker processes seen from the parent: what they say, how they end, and that none stays behind."""

import subprocess
import sys
import threading

import pytest

from bayesrange.inference import _processes
from bayesrange.inference._processes import WorkerError, run_workers, worker_environment


@pytest.fixture
def workers(monkeypatch, tmp_path):
    """`run_workers` on small scripts in place of the worker module."""
    begun = []

    def launch(arguments, errors):
        folder, script = arguments
        process = subprocess.Popen(
            [sys.executable, "-c", script], stdout=subprocess.PIPE, stderr=errors, text=True, cwd=folder
        )
        begun.append(process)
        return process

    monkeypatch.setattr(_processes, "_launch", launch)

    def run(scripts, at_once=2, tell=None):
        heard = []
        run_workers([[str(tmp_path), script] for script in scripts], at_once, tell or heard.append, tmp_path / "log")
        return heard

    run.begun, run.folder = begun, tmp_path
    return run


def test_messages_arrive_in_the_order_of_each_worker_and_other_lines_are_passed_over(workers):
    script = 'print("a library says hello"); print(\'{"stage": "x", "done": 1}\'); print(\'{"stage": "x", "done": 2}\')'
    heard = workers([script, script])
    assert [message["done"] for message in heard if "done" in message].count(1) == 2
    assert all(message["stage"] == "x" for message in heard) and len(heard) == 4


def test_messages_are_told_in_the_callers_thread(workers):
    threads = set()
    workers(['print("{}")'], tell=lambda message: threads.add(threading.get_ident()))
    assert threads == {threading.get_ident()}


def test_failed_worker_is_quoted_and_the_others_are_stopped(workers):
    with pytest.raises(WorkerError, match="ended with status 1: ValueError: no density"):
        workers(["raise ValueError('no density')", "import time; time.sleep(600)"])
    assert all(process.poll() is not None for process in workers.begun)


def test_interrupt_stops_every_worker(workers):
    def interrupt(message):
        raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        workers(
            ['print("{}", flush=True); import time; time.sleep(600)', "import time; time.sleep(600)"], tell=interrupt
        )
    assert len(workers.begun) == 2 and all(process.poll() is not None for process in workers.begun)


def test_no_more_workers_run_at_once_than_allowed(workers):
    script = """
import os, pathlib
pathlib.Path(f"running-{os.getpid()}").touch()
print('{"together": %d}' % len(list(pathlib.Path().glob("running-*"))))
pathlib.Path(f"running-{os.getpid()}").unlink()
"""
    assert [message["together"] for message in workers([script] * 3, at_once=1)] == [1, 1, 1]


def test_worker_has_one_thread_double_precision_and_a_cache(monkeypatch, tmp_path):
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path))
    monkeypatch.setenv("OMP_NUM_THREADS", "8")
    settings = worker_environment()
    assert settings["OMP_NUM_THREADS"] == "1" and settings["JAX_ENABLE_X64"] == "1"
    assert settings["JAX_COMPILATION_CACHE_DIR"] == str(tmp_path / "bayesrange" / "compiled")


def test_worker_takes_no_module_from_the_folder_where_the_user_works(tmp_path, monkeypatch):
    # A script of the user's called resource.py or json.py must not run inside the worker.
    for name in ("resource.py", "json.py", "numpy.py"):
        (tmp_path / name).write_text("raise SystemExit('a file of the user ran inside the worker')")
    monkeypatch.chdir(tmp_path)
    with (tmp_path / "log").open("ab") as errors:
        with _processes._launch([str(tmp_path / "nowhere"), "start"], errors) as process:
            assert process.wait() == 1
    said = (tmp_path / "log").read_text()
    assert "of the user" not in said
    assert "FileNotFoundError" in said and "task.pkl" in said  # it got as far as looking for its task
