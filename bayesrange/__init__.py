"""Mechanistic range models of wild animals, fitted by Bayesian sampling.

Every command of the command line has a call of the same name and meaning here. The names below are looked up only
when first used, so that importing the package loads no numerics.
"""

from importlib import import_module
from typing import Any

__version__ = "0.1.0"

# Public name: the subpackage that defines it.
_HOMES = {
    "StudyError": "bayesrange._errors",
    "Study": "bayesrange.study",
    "read_study": "bayesrange.study",
    "cards": "bayesrange.inference",
    "fit": "bayesrange.inference",
    "report": "bayesrange.report",
}

__all__ = ["__version__", *sorted(_HOMES)]


def __getattr__(name: str) -> Any:
    """Import a public name from its subpackage on first use (PEP 562)."""
    if name not in _HOMES:
        raise AttributeError(f"module `bayesrange` has no attribute `{name}`; it has {', '.join(__all__)}.")
    value = getattr(import_module(_HOMES[name]), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    """The public names, whether they were used yet or not."""
    return sorted({*globals(), *__all__})
