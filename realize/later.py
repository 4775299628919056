"""What is imported when it is first used: a command loads only what it needs."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from importlib import import_module
from typing import Any


class Later:
    """A function of a module that is imported at the first call."""

    __slots__ = ("module", "name")

    def __init__(self, module: str, name: str) -> None:
        self.module = module
        self.name = name

    def __repr__(self) -> str:
        return f"{self.module}.{self.name}"

    def __call__(self, *arguments: Any, **named: Any) -> Any:
        return getattr(import_module(self.module), self.name)(*arguments, **named)


class FunctionsOf:
    """The functions of a module, by name, each imported when it is first called."""

    def __init__(self, module: str) -> None:
        self._module = module

    def __getattr__(self, name: str) -> Any:
        return Later(self._module, name)


def names_at_home(package: str, homes: Mapping[str, Sequence[str]]) -> Callable[[str], Any]:
    """Return a module's ``__getattr__`` that imports each name from where it lives, at its first use.

    Parameters
    ----------
    package : str
        Name of the package, for the message about a name that it does not have.
    homes : mapping of module to names
    """
    home_of = {name: home for home, names in homes.items() for name in names}

    def find(name: str) -> Any:
        if name not in home_of:
            raise AttributeError(f"module {package!r} has no attribute {name!r}")
        return getattr(import_module(home_of[name]), name)

    return find
