"""The package as a whole: what importing it loads, its version, its resources, its lock file, who imports whom."""

import ast
import importlib.metadata
import subprocess
import sys
import tomllib
import types
from pathlib import Path

import pytest
from packaging.requirements import Requirement
from packaging.utils import canonicalize_name

import bayesrange
from bayesrange import _resources
from bayesrange._callable import make_callable

ROOT = Path(__file__).parents[1]
PACKAGE = ROOT / "bayesrange"


def in_new_process(code):
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, cwd=ROOT)
    assert done.returncode == 0, done.stderr
    return done.stdout.split()


@pytest.mark.parametrize(
    ("module", "kept_out"),
    [
        ("bayesrange", {"jax", "numpy", "pandas", "matplotlib"}),
        ("bayesrange.study", {"jax", "numpyro"}),
    ],
)
def test_import_stays_light(module, kept_out):
    assert kept_out.isdisjoint(in_new_process(f"import sys, {module}; print(*sys.modules)"))


def test_help_stays_light():
    # The help itself is kept from the output, where its words could be taken for names of modules.
    modules = in_new_process("""
import contextlib, io, runpy, sys
sys.argv = ["bayesrange", "--help"]
with contextlib.redirect_stdout(io.StringIO()) as text, contextlib.suppress(SystemExit):
    runpy.run_module("bayesrange", run_name="__main__")
assert "fit" in text.getvalue()
print(*sys.modules)
""")
    assert "bayesrange.commands" in modules
    assert {"jax", "pandas"}.isdisjoint(modules)


def test_numerics_run_in_double_precision_on_their_own():
    printed = in_new_process("import bayesrange.spaceuse, jax.numpy as jnp; print(jnp.ones(1).dtype)")
    assert printed == ["float64"]


def test_version_is_the_installed_one():
    try:
        installed = importlib.metadata.version("bayesrange")
    except importlib.metadata.PackageNotFoundError:
        pytest.skip("run from a checkout that is not installed")
    assert bayesrange.__version__ == installed


def test_public_names_are_found_where_the_table_says():
    for name in bayesrange.__all__:
        assert getattr(bayesrange, name) is not None
        assert name in dir(bayesrange)


@pytest.mark.parametrize("first", ["", "import bayesrange.report;"])
def test_every_command_can_be_called_whatever_was_imported_before(first):
    printed = in_new_process(f"import bayesrange; {first} print(*map(callable, (bayesrange.fit, bayesrange.report)))")
    assert printed == ["True", "True"]


def test_callable_module_keeps_its_own_names(monkeypatch):
    module = types.ModuleType("made_up")
    module.kept = 1
    monkeypatch.setitem(sys.modules, "made_up", module)
    make_callable("made_up", lambda x, *, twice: x * 2 if twice else x)
    assert module(3, twice=True) == 6
    assert module.kept == 1


def test_unknown_name_is_an_attribute_error_that_lists_the_known_ones():
    with pytest.raises(AttributeError, match="has no attribute `fitt`; it has .*fit"):
        bayesrange.fitt  # noqa: B018


def test_models_and_demo_come_with_the_package():
    assert list(_resources.models_folder().glob("*.toml"))
    assert (_resources.demo_folder() / "study.toml").is_file()


def test_resources_inside_the_package_come_before_those_of_a_checkout(tmp_path, monkeypatch):
    monkeypatch.setattr(_resources, "_PACKAGE", tmp_path / "site" / "bayesrange")
    monkeypatch.setattr(_resources, "_CHECKOUT", tmp_path / "site")
    with pytest.raises(FileNotFoundError, match="model cards of bayesrange should be in .*install it anew"):
        _resources.models_folder()
    beside = tmp_path / "site" / "case_studies" / "marram_heath" / "study"
    beside.mkdir(parents=True)
    assert _resources.demo_folder() == beside
    inside = tmp_path / "site" / "bayesrange" / "demo"
    inside.mkdir(parents=True)
    assert _resources.demo_folder() == inside


def test_lock_file_meets_every_requirement():
    project = tomllib.loads((ROOT / "pyproject.toml").read_text())
    asked = list(project["project"]["dependencies"]) + project["build-system"]["requires"]
    for extra in project["project"]["optional-dependencies"].values():
        asked += extra
    lines = [line for line in (ROOT / "requirements.lock").read_text().splitlines() if not line.startswith("#")]
    locked = dict(line.split("==") for line in lines)  # a line of any other form fails here: exact versions only
    locked = {canonicalize_name(name): version for name, version in locked.items()}
    for requirement in map(Requirement, asked):
        assert requirement.specifier.contains(locked[canonicalize_name(requirement.name)]), requirement


# Data flow one way. Modules that start with an underscore beside the subpackages serve all.
MAY_IMPORT = {
    "study": set(),
    "spaceuse": set(),
    "memory": set(),
    "inference": {"study", "spaceuse", "memory"},
    "checks": {"study", "spaceuse", "memory", "inference"},
    "outlook": {"study", "spaceuse", "memory", "inference"},
    "screening": {"study"},
    "report": {"study", "screening", "spaceuse", "memory", "inference", "checks", "outlook"},
    "commands": {"study", "screening", "spaceuse", "memory", "inference", "checks", "outlook", "report"},
}


def imported_parts(path):
    for node in ast.walk(ast.parse(path.read_text())):
        if isinstance(node, ast.Import):
            names = [alias.name for alias in node.names]
        elif isinstance(node, ast.ImportFrom):
            names = [node.module] if node.module != "bayesrange" else [f"bayesrange.{a.name}" for a in node.names]
        else:
            continue
        for name in names:
            top, _, rest = (name or "").partition(".")
            if top == "bayesrange" and rest:
                yield rest.split(".")[0]


def test_imports_go_one_way():
    against = []
    for path in sorted(PACKAGE.rglob("*.py")):
        part = path.relative_to(PACKAGE).parts[0].removesuffix(".py")
        if part in ("__init__", "__main__") or part.startswith("_"):
            continue
        allowed = MAY_IMPORT[part] | {part}
        against += [
            f"{path.relative_to(ROOT)} imports {other}"
            for other in imported_parts(path)
            if other not in allowed and not other.startswith("_")
        ]
    assert not against
