"""Run folders with and without their report."""

import importlib.util
import sys
from dataclasses import dataclass, replace
from pathlib import Path

import pytest


def _beside(name: str):
    """A helper file: test files are imported by path, so that a file beside them is no importable module."""
    spec = importlib.util.spec_from_file_location(name, Path(__file__).with_name(f"_{name}.py"))
    module = sys.modules[name] = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


_beside("page_text")
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


@dataclass(frozen=True)
class WrittenMemory:
    folder: Path
    html: str
    recipe: fake_memory_run.Recipe


@pytest.fixture(scope="session", params=list(fake_memory_run.RECIPES))
def memory(request, tmp_path_factory) -> WrittenMemory:
    """A run folder of a memory card with its report; one for each recipe."""
    return _written_memory(request.param, tmp_path_factory)


@pytest.fixture(scope="session")
def eight(tmp_path_factory) -> WrittenMemory:
    """Eight animals from one population, with a covariate, and a run without memory on the same data beside it."""
    return _written_memory("hierarchical", tmp_path_factory)


@pytest.fixture(scope="session")
def alone(tmp_path_factory) -> WrittenMemory:
    """Three animals, each fitted alone, two layers, thinned surfaces."""
    return _written_memory("individual", tmp_path_factory)


@pytest.fixture(scope="session")
def no_memory(tmp_path_factory) -> WrittenMemory:
    """Three animals under the card with one centre and no memory, not converged."""
    return _written_memory("null", tmp_path_factory)


@pytest.fixture(scope="session")
def new_memory_run(tmp_path_factory):
    """A function that writes a memory run folder of its own, to spoil."""

    def build(**recipe) -> Path:
        folder = tmp_path_factory.mktemp("spoilt") / "run"
        return fake_memory_run.build_run(folder, fake_memory_run.Recipe(**({"animals": 2, "draws": 5} | recipe)))

    return build


_made_memory: dict[str, WrittenMemory] = {}


def _written_memory(name: str, tmp_path_factory) -> WrittenMemory:
    from bayesrange.report import write

    if name not in _made_memory:
        recipe = fake_memory_run.RECIPES[name]
        folder = fake_memory_run.build_run(tmp_path_factory.mktemp(name) / "run", recipe)
        if name == "hierarchical":
            beside = replace(recipe, memory=False, card="steps-resources", selection=0.95, seed=9)
            fake_memory_run.build_run(folder.with_name("steps-resources"), beside)
        html = write(folder).read_text(encoding="utf-8")
        _made_memory[name] = WrittenMemory(folder, html, recipe)
    return _made_memory[name]
