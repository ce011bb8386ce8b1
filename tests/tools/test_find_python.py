"""tools/find_python.sh against made-up PATHs: only a Python that really runs counts."""

import os
import shutil
import subprocess
import sys
from pathlib import Path

import pytest

SCRIPT = Path(__file__).parents[2] / "tools" / "find_python.sh"
FAILING_STUB = "echo 'command not found' >&2; exit 127"
REAL = f'exec "{sys.executable}" "$@"'
# The running interpreter made to believe that it is 3.11.
OLD = f"""exec "{sys.executable}" -c 'import sys; sys.version_info = (3, 11, 7, "final", 0); exec(sys.argv[1])' "$2" """


def says(version):
    return f"echo {version}"


def put(folder, name, body):
    folder.mkdir(parents=True, exist_ok=True)
    path = folder / name
    path.write_text(f"#!/bin/sh\n{body}\n")
    path.chmod(0o755)
    return path


@pytest.fixture
def find(tmp_path):
    """Runs the script where nothing but two ordinary tools and the given folders is on the PATH."""
    tools = tmp_path / "tools"
    tools.mkdir()
    for tool in ("sort", "grep"):
        (tools / tool).symlink_to(shutil.which(tool))

    def run(*folders, pyenv=tmp_path / "no pyenv", **environment):
        path = os.pathsep.join(map(str, (*folders, tools)))
        return subprocess.run(
            [shutil.which("sh"), SCRIPT],
            env={"PATH": path, "PYENV_ROOT": str(pyenv), **environment},
            capture_output=True,
            text=True,
        )

    return run


def test_failing_stub_is_passed_over_for_one_that_runs(tmp_path, find):
    put(tmp_path / "shims", "python3.13", FAILING_STUB)
    put(tmp_path / "shims", "python3", FAILING_STUB)
    real = put(tmp_path / "with space", "python3", REAL)
    assert find(tmp_path / "shims", tmp_path / "with space").stdout == f"{real}\n"


@pytest.mark.parametrize(
    "body", [FAILING_STUB, OLD, says(""), says("3.13.1; exit 1")], ids=["stub", "old", "silent", "lies"]
)
def test_none_found_is_one_sentence_and_status_2(tmp_path, find, body):
    put(tmp_path / "bin", "python3.13", body)
    put(tmp_path / "bin", "python3", body)
    done = find(tmp_path / "bin")
    assert done.returncode == 2
    assert done.stdout == ""
    assert done.stderr.startswith("bayesrange needs Python 3.12 or newer")
    assert "pyenv install" in done.stderr
    assert done.stderr.count("\n") == 1


def test_version_that_the_lock_file_was_tried_with_comes_before_a_newer_one(tmp_path, find):
    put(tmp_path / "bin", "python3.14", says("3.14.0"))
    older = put(tmp_path / "bin", "python3.12", says("3.12.10"))
    assert find(tmp_path / "bin").stdout == f"{older}\n"


def test_newer_version_is_taken_where_there_is_no_other(tmp_path, find):
    newer = put(tmp_path / "bin", "python3.14", says("3.14.0"))
    assert find(tmp_path / "bin").stdout == f"{newer}\n"


def test_pyenv_versions_are_searched_after_the_path_newest_first(tmp_path, find):
    versions = tmp_path / "my pyenv" / "versions"
    put(versions / "3.13.9" / "bin", "python", says("3.13.9"))
    newest = put(versions / "3.13.10" / "bin", "python", says("3.13.10"))
    put(versions / "3.11.7" / "bin", "python", OLD)
    put(tmp_path / "shims", "python3.13", FAILING_STUB)
    assert find(tmp_path / "shims", pyenv=versions.parent).stdout == f"{newest}\n"
    on_path = put(tmp_path / "bin", "python3.12", says("3.12.1"))
    assert find(tmp_path / "bin", pyenv=versions.parent).stdout == f"{on_path}\n"


def test_chosen_interpreter_is_taken_or_refused_never_replaced(tmp_path, find):
    put(tmp_path / "bin", "python3.13", says("3.13.1"))
    chosen = put(tmp_path / "elsewhere", "python", says("3.12.1"))
    assert find(tmp_path / "bin", PYTHON=str(chosen)).stdout == f"{chosen}\n"
    old = put(tmp_path / "elsewhere", "old", OLD)
    done = find(tmp_path / "bin", PYTHON=str(old))
    assert (done.returncode, done.stdout) == (2, "")
    assert f"PYTHON={old} is no Python 3.12 or newer" in done.stderr
