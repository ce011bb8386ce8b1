"""Studies and compiled programs that several test files share: compiling one takes seconds."""

from collections import namedtuple
from pathlib import Path

import jax
import jax.numpy as jnp
import numpy as np
import pytest
from inference._memory_twin import twin_tracks
from inference._tiny_study import HOMES, NORTH, SOUTH, WEST, fixes_table, groups_table, write_study
from inference._tiny_tracks import write_tracks
from jax.flatten_util import ravel_pytree

from bayesrange.inference import (
    Program,
    Whitening,
    as_arrays,
    find_card,
    find_start,
    make_data,
    make_scales,
    make_spec,
    read_card,
)  # fmt: skip
from bayesrange.inference._prepare import prepare
from bayesrange.inference._start import whitening_scale
from bayesrange.study import autocorrelation_weights, read_study

Model = namedtuple("Model", "study card spec scales weight data program")


def pytest_collection_modifyitems(items):
    # A cached program that another process is just writing, or that was cut short, is compiled anew: no failure.
    harmless = pytest.mark.filterwarnings("ignore:Error (reading|writing) persistent compilation cache:UserWarning")
    for item in items:
        if Path(__file__).parent in item.path.parents:
            item.add_marker(harmless)


@pytest.fixture(scope="module", autouse=True)
def compiled_programs(pytestconfig):
    """Compiled programs outlive the session, as they do in a fit: compiling is most of what these tests cost."""
    jax.config.update("jax_compilation_cache_dir", str(pytestconfig.cache.mkdir("programs")))
    jax.config.update("jax_persistent_cache_min_compile_time_secs", 0.5)
    yield
    jax.config.update("jax_compilation_cache_dir", None)


def build(file, warmup=60, chunk=50):
    """Everything that a fit makes of a study before it samples."""
    study = read_study(file)
    model = study.settings.model
    card = read_card(find_card(model.card, study.path.parent)).with_priors(model.priors, study.path.name)
    spec = make_spec(study, card)
    scales = make_scales(study, list(spec.layers))
    ignored = model.autocorrelation == "ignored"
    weight = np.ones(len(study.fixes)) if ignored else autocorrelation_weights(study.fixes).weight
    data = as_arrays(make_data(study, card, spec, scales, weight))
    program = Program(spec, data, warmup, 0.9, chunk)
    return Model(study, card, spec, scales, weight, data, program)


def whiten(program, data):
    """The sampler's coordinates, as the first worker of a fit finds them."""
    guess = np.asarray(ravel_pytree(program.first_guess(data))[0])
    start = find_start(lambda z: program.value_and_gradient(jnp.asarray(z), data), guess)
    scale = whitening_scale(start.curvature, program.apart())
    return Whitening(jnp.asarray(start.mode), jnp.asarray(scale))


@pytest.fixture(scope="session")
def study_folder(tmp_path_factory):
    """The tiny study as it is; nothing may write here."""
    return write_study(tmp_path_factory.mktemp("plain") / "tern marsh").parent


@pytest.fixture(scope="session")
def study(study_folder):
    return read_study(study_folder)


@pytest.fixture(scope="session")
def coupled(tmp_path_factory):
    """Avoidance, resources and over-marking; the home of one group estimated; every tenth inner fix with an error."""
    groups = groups_table()
    groups.loc[groups["group"] == NORTH, ["x", "y"]] = np.nan
    fixes = fixes_table()
    inner = fixes["x"].between(WEST + 250, WEST + 1500) & fixes["y"].between(SOUTH + 250, SOUTH + 2150)
    fixes.loc[inner & (fixes.index % 10 == 0), "error_m"] = 30.0
    model = {"over_marking": True, "priors": {"over_marking": {"family": "half-normal", "scale": 0.1}}}
    return build(write_study(tmp_path_factory.mktemp("coupled"), fixes, groups, model=model))


@pytest.fixture(scope="session")
def hierarchical(tmp_path_factory):
    """Localising, avoidance and one layer vary between groups; one covariate."""
    model = {"pooling": "hierarchical", "covariates": ["size"]}
    return build(write_study(tmp_path_factory.mktemp("hierarchical"), model=model))


@pytest.fixture(scope="session")
def homes_km():
    return np.array([(WEST + x, SOUTH + y) for x, y in HOMES.values()]) / 1000


Memory = namedtuple("Memory", "study prepared plan tasks facts task data program")


def build_memory(file, which=0):
    """Everything that a fit of a memory card makes of a study before it samples; the program of one of its tasks."""
    prepared = prepare(read_study(file))
    tasks, facts = prepared.make_tasks()
    task = tasks[which]
    data = as_arrays(task.data)
    program = Program(task.spec, data, task.warmup, task.target_accept, 50)
    return Memory(prepared.study, prepared, prepared.plan, tasks, facts, task, data, program)


@pytest.fixture(scope="session")
def pooled(tmp_path_factory):
    """Memory and selection by day and night, steps by the hour, hierarchical with one covariate."""
    model = {"pooling": "hierarchical", "covariates": ["sex"], "vary": ["step_length", "selection"]}
    return build_memory(write_tracks(tmp_path_factory.mktemp("pooled"), model=model))


@pytest.fixture(scope="session")
def pooled_tracks(pooled):
    """The animals of `pooled` as the twin sees them."""
    return twin_tracks(pooled, ["forage"])


@pytest.fixture(scope="session")
def estimated(tmp_path_factory):
    """Memory without layers, each animal alone, the encoding range estimated, steps by the hour."""
    model = {"card": "memory", "pooling": "individual", "encoding_range_m": "estimate", "vary": ["step_length"]}
    file = write_tracks(tmp_path_factory.mktemp("estimated"), without=("layers",), model=model)
    return build_memory(file, which=3)


@pytest.fixture(scope="session")
def at_home(tmp_path_factory):
    """The null with a pull to one centre, each animal alone."""
    model = {"card": "steps-home", "pooling": "individual"}
    return build_memory(write_tracks(tmp_path_factory.mktemp("at home"), model=model), which=0)


@pytest.fixture(scope="session")
def roaming(tmp_path_factory):
    """The null without memory, each animal alone."""
    model = {"card": "steps-resources", "pooling": "individual"}
    return build_memory(write_tracks(tmp_path_factory.mktemp("roaming"), model=model), which=1)
