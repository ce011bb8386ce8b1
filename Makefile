# make demo   a bundled study from raw files to a report        make test   all tests
# Both set up .venv first, once; PYTHON=/path/to/python chooses the interpreter. DEVELOPERS.md has the rest.

PYTEST_ARGS =
export PYTHON

.PHONY: demo test setup lint types benchmarks clean
.DEFAULT_GOAL := setup

demo: setup
	.venv/bin/bayesrange demo

test: setup
	.venv/bin/python -m pytest -n 2 --dist loadfile $(PYTEST_ARGS)

lint: setup
	.venv/bin/ruff check .

types: setup
	.venv/bin/mypy

benchmarks: setup
	@for script in benchmarks/[!_]*.py; do echo "$$script"; .venv/bin/python "$$script" || exit 1; done

setup: .venv/ready

# Made anew if the interpreter behind it is gone.
.venv/bin/python:
	@python=$$(sh tools/find_python.sh) && echo "Making .venv with $$python" && "$$python" -m venv --clear .venv

.venv/ready: .venv/bin/python requirements.lock pyproject.toml
	@echo "Installing the packages of requirements.lock into .venv (once; a minute or a few)"
	@.venv/bin/python -m pip install -qq --disable-pip-version-check -r requirements.lock
	@.venv/bin/python -m pip install -qq --disable-pip-version-check --no-deps --no-build-isolation -e .
	@touch .venv/ready

clean:
	rm -rf .venv build dist .pytest_cache .ruff_cache .mypy_cache .hypothesis
	find . -name __pycache__ -type d -prune -exec rm -rf {} +
