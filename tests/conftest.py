"""Settings that hold for every test."""

import os
from pathlib import Path

os.environ.setdefault("MPLBACKEND", "Agg")  # no test may open a window

import hypothesis
import jax
import pytest

# Tests make arrays before the package is imported. That the package itself asks for double precision is a test of its
# own, in a process of its own (tests/test_package.py).
jax.config.update("jax_enable_x64", True)

# The same examples in every run, and no judgement by the clock: CI machines differ in speed.
hypothesis.settings.register_profile("bayesrange", derandomize=True, deadline=None)
hypothesis.settings.load_profile("bayesrange")

# Numerics of our own. Elsewhere NumPyro's distributions promote ranks themselves.
NO_RANK_PROMOTION = {"spaceuse", "memory"}


@pytest.fixture(autouse=True)
def rank_promotion(request):
    """An accidental broadcast between arrays of different rank is an error in the numerical subpackages."""
    folder = Path(request.path).relative_to(Path(__file__).parent).parts[0]
    with jax.numpy_rank_promotion("raise" if folder in NO_RANK_PROMOTION else "allow"):
        yield
