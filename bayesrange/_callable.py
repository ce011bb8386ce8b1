"""A subpackage that is a command too: `bayesrange.report(run)` beside `from bayesrange.report import write`."""

import sys
from collections.abc import Callable
from types import ModuleType
from typing import Any


def make_callable(module: str, function: Callable[..., Any]) -> None:
    """Let the module of this name be called like the function; its own names stay as they are.

    A function cannot simply take the subpackage's name in the parent: whoever imports the subpackage puts the module
    back there.
    """

    class CallableModule(ModuleType):
        __call__ = staticmethod(function)

    sys.modules[module].__class__ = CallableModule
