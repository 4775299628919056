"""The fitting methods by name: source and function of each; a method registers itself when its module is imported."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from realize.errors import UsageError
from realize.fitting.problem import Problem
from realize.fitting.records import Candidate


@dataclass(frozen=True, eq=False)
class Outcome:
    """What a method hands back: the problem as it was solved (weights, direct term), stable poles, the orders tried."""

    problem: Problem
    poles: NDArray[np.complex128]
    candidates: tuple[Candidate, ...]
    cautions: tuple[str, ...] = ()


@dataclass(frozen=True)
class Method:
    """One fitting method.

    Parameters
    ----------
    name : str
    says : str
        One sentence for people.
    source : str
        Where it is published.
    fit : callable
        (problem, lowest order, highest order, direct "auto"?) -> Outcome.
    """

    name: str
    says: str
    source: str
    fit: Callable[[Problem, int, int, bool], Outcome]


METHODS: dict[str, Method] = {}


def register(method: Method) -> Method:
    """Add a method to the table; a name that is there already is refused."""
    if method.name in METHODS:
        raise ValueError(f"fitting method {method.name!r} is registered already")
    METHODS[method.name] = method
    return method


def choose_method(name: str, problem: Problem) -> Method:
    """Return the method of that name; ``auto`` is vector fitting, the one method for every kind of response so far."""
    if name == "auto":
        return METHODS["vector-fitting"]
    if name not in METHODS:
        raise UsageError(f"method {name!r} does not exist; choose one of {', '.join([*sorted(METHODS), 'auto'])}")
    return METHODS[name]
