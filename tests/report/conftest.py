"""Run folders with and without their report."""

import importlib.util
import sys
from dataclasses import dataclass
from pathlib import Path

import pytest


def _beside(name: str):
    """A helper file: test files are imported by path, so that a file beside them is no importable module."""
    spec = importlib.util.spec_from_file_location(name, Path(__file__).with_name(f"_{name}.py"))
    module = sys.modules[name] = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


fake_run = _beside("fake_run")
_beside("fake_tracks")
fake_memory_run = _beside("fake_memory_run")


@dataclass(frozen=True)
class Written:
    folder: Path
    html: str
    recipe: fake_run.Recipe


@pytest.fixture(scope="session", params=list(fake_run.RECIPES))
def written(request, tmp_path_factory) -> Written:
    """A run folder with its report; one for each recipe."""
    return _written(request.param, tmp_path_factory)


@pytest.fixture(scope="session")
def five(tmp_path_factory) -> Written:
    """Five groups, shared parameters, one home estimated."""
    return _written("five", tmp_path_factory)


@pytest.fixture(scope="session")
def twelve(tmp_path_factory) -> Written:
    """Twelve groups, parameters by group, two layers."""
    return _written("twelve", tmp_path_factory)


@pytest.fixture(scope="session")
def new_run(tmp_path_factory):
    """A function that writes a run folder of its own, to spoil."""

    def build(**recipe) -> Path:
        folder = tmp_path_factory.mktemp("spoilt") / "run"
        return fake_run.build_run(folder, fake_run.Recipe(**({"groups": 2, "draws": 5} | recipe)))

    return build


_made: dict[str, Written] = {}


def _written(name: str, tmp_path_factory) -> Written:
    from bayesrange.report import write

    if name not in _made:
        folder = fake_run.build_run(tmp_path_factory.mktemp(name) / "run", fake_run.RECIPES[name])
        html = write(folder).read_text(encoding="utf-8")
        _made[name] = Written(folder, html, fake_run.RECIPES[name])
    return _made[name]
