"""The methods of reduction: name, source, what each one claims, and the function that does it."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass, field

from realize.errors import UsageError
from realize.reduction.prepare import Prepared
from realize.reduction.result import Projected


@dataclass(frozen=True)
class Method:
    """One method of reduction.

    Attributes
    ----------
    name : str
        Spelling on the command line.
    says : str
        One sentence.
    source : tuple of str
    claim : str
        The formula of its bound on the largest gain of the difference; empty if it has none.
    keeps_steady_state : bool
    project : callable
        Prepared model and number of stable states to the reduced stable part.
    """

    name: str
    says: str
    source: tuple[str, ...]
    claim: str
    keeps_steady_state: bool
    project: Callable[[Prepared, int], Projected] = field(repr=False)


_METHODS: dict[str, Method] = {}


def register(method: Method) -> Method:
    """Add a method to the table; a name that is taken is refused."""
    if method.name in _METHODS:
        raise ValueError(f"method {method.name} is registered already")
    _METHODS[method.name] = method
    return method


def methods() -> Iterator[Method]:
    """Return every registered method in the order of registration."""
    return iter(tuple(_METHODS.values()))


def method_named(name: str) -> Method:
    """Return the method of that name; raises `UsageError` with the names there are."""
    if name not in _METHODS:
        raise UsageError(f"no method of reduction is called {name!r}; there are: auto, {', '.join(_METHODS)}")
    return _METHODS[name]


def automatic(prepared: Prepared) -> str:
    """Return the method that "auto" stands for: balanced truncation, for every dense model."""
    return "balanced-truncation"
