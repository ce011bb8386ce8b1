"""Mechanistic range models of wild animals, fitted by Bayesian sampling.

Every command of the command line has a call of the same name and meaning here. The names below are looked up only
when first used, so that importing the package loads no numerics.
"""

from importlib import import_module
from typing import Any

__version__ = "0.1.0"

# Public name: the module that defines it, or that it is.
_HOMES = {
    "Run": "bayesrange.inference",
    "Study": "bayesrange.study",
    "StudyError": "bayesrange._errors",
    "cards": "bayesrange.inference",
    "differences": "bayesrange.inference",
    "fit": "bayesrange.inference",
    "fit_periods": "bayesrange.inference",
    "open_run": "bayesrange.inference",
    "read_study": "bayesrange.study",
    "report": "bayesrange.report",
    "screen": "bayesrange.report",
}

__all__ = ["__version__", *sorted(_HOMES)]


def __getattr__(name: str) -> Any:
    """Import a public name from its subpackage on first use (PEP 562)."""
    if name not in _HOMES:
        raise AttributeError(f"module `bayesrange` has no attribute `{name}`; it has {', '.join(__all__)}.")
    module = import_module(_HOMES[name])
    value = module if module.__name__ == f"bayesrange.{name}" else getattr(module, name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    """The public names, whether they were used yet or not."""
    return sorted(__all__)
