"""Whole commands on a tiny study. Fits are few and shared: every worker process takes seconds to start."""

import os
import subprocess
import sys
from pathlib import Path

import pytest
from inference._tiny_study import write_study

ROOT = Path(__file__).parents[2]


@pytest.fixture(scope="session")
def environment(pytestconfig):
    """Environment of the commands: the package from the checkout, compiled programs in pytest's own cache."""
    path = os.pathsep.join([str(ROOT), *filter(None, [os.environ.get("PYTHONPATH")])])
    cache = pytestconfig.cache.mkdir("commands")
    return {**os.environ, "PYTHONPATH": path, "XDG_CACHE_HOME": str(cache), "COLUMNS": "200"}


@pytest.fixture(scope="session")
def elsewhere(tmp_path_factory):
    """A working directory that is neither the checkout nor the study's folder."""
    return tmp_path_factory.mktemp("elsewhere")


@pytest.fixture(scope="session")
def bayesrange(environment, elsewhere):
    """Run the command line in a process of its own."""

    def run(*words, **options):
        command = [sys.executable, "-m", "bayesrange", *map(str, words)]
        return subprocess.run(command, env=environment, cwd=elsewhere, text=True, capture_output=True, **options)

    return run


@pytest.fixture(scope="session")
def study_folder(tmp_path_factory):
    """The tiny study, in a folder with a blank and an accent in its name."""
    folder = tmp_path_factory.mktemp("end to end") / "Tern Märsh"
    write_study(folder, sampling={"draws": 710})
    return folder


@pytest.fixture(scope="session")
def fitted(bayesrange, study_folder):
    """What the command `fit` answered, one chain at a time."""
    return bayesrange("fit", study_folder, "--processes", 1)


@pytest.fixture(scope="session")
def run_folder(fitted, study_folder):
    assert fitted.returncode in (0, 3), fitted.stderr
    return study_folder / "runs" / "avoidance-resources"
