"""One verb a file: plan, do, verify, second opinion.

Each verb is imported when it is first used: a conversion does not pay for the libraries of fitting and reduction.
"""

from __future__ import annotations

import sys
from importlib import import_module
from types import ModuleType
from typing import TYPE_CHECKING, Any

from realize.steps.conversion import Conversion, model_of

if TYPE_CHECKING:
    from realize.steps.compare import compare
    from realize.steps.convert import convert, explain
    from realize.steps.fit import fit
    from realize.steps.history import history
    from realize.steps.inspect import inspect
    from realize.steps.minimal import minimal
    from realize.steps.reduce import reduce

__all__ = ["Conversion", "compare", "convert", "explain", "fit", "history", "inspect", "minimal", "model_of", "reduce"]

_HOME_OF = {
    "compare": "compare",
    "convert": "convert",
    "explain": "convert",
    "fit": "fit",
    "history": "history",
    "inspect": "inspect",
    "minimal": "minimal",
    "reduce": "reduce",
}


def __getattr__(name: str) -> Any:
    if name not in _HOME_OF:
        raise AttributeError(f"module 'realize.steps' has no attribute {name!r}")
    verb = getattr(import_module(f"realize.steps.{_HOME_OF[name]}"), name)
    globals()[name] = verb
    return verb


class _Verbs(ModuleType):
    """A verb's name stands for the function, also after the file of the same name was imported by itself."""

    def __setattr__(self, name: str, value: Any) -> None:
        if not (name in _HOME_OF and isinstance(value, ModuleType)):
            super().__setattr__(name, value)


sys.modules[__name__].__class__ = _Verbs
