"""The methods of reduction: name, source, what each one claims, and the function that does it."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass, field

from realize.errors import UsageError
from realize.reduction.plan import Plan, Request
from realize.reduction.prepare import Prepared


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
    plan : callable
        Prepared model and request to the orders there are.
    """

    name: str
    says: str
    source: tuple[str, ...]
    claim: str
    keeps_steady_state: bool
    plan: Callable[[Prepared, Request], Plan] = field(repr=False)


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


def automatic(request: Request) -> tuple[str, str]:
    """Return the method that "auto" stands for, and why, in words.

    The rules look at what was asked only, the first that fits decides:

    1. states to keep: singular perturbation, which sets the others to their steady state;
    2. a steady state to keep: singular perturbation, whose bound is that of balanced truncation;
    3. a loop around the model and no error that only a bound can promise: frequency-weighted;
    4. everything else: balanced truncation.
    """
    if request.keep_states:
        return "singular-perturbation", "states are kept, and the others are set to their steady state"
    if request.keep_steady_state:
        return "singular-perturbation", "the steady state is kept, under the bound of balanced truncation"
    if request.loop is not None and not request.by_bound:
        return "frequency-weighted", "a loop is given, and its frequencies are the ones that count"
    return "balanced-truncation", "its error is guaranteed beforehand"
