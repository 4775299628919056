"""The fitting methods by name: source and function of each; a method registers itself when its module is imported."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from realize.errors import UsageError
from realize.fitting.problem import Problem
from realize.fitting.records import Candidate
from realize.fitting.sample_problem import SampleProblem


@dataclass(frozen=True, eq=False)
class Outcome:
    """What a method hands back: the problem as it was solved (weights, direct term), stable poles, the orders tried.

    ``tried`` holds free poles by their number, for the candidates whose poles are worth judging; ``sizes`` the misfit
    of outliers in deviations, 0 elsewhere: [k][channels].
    """

    problem: Problem
    poles: NDArray[np.complex128]
    candidates: tuple[Candidate, ...]
    cautions: tuple[str, ...] = ()
    #: Name of the method whose start was the best one, where several were tried.
    method: str = ""
    tried: dict[int, NDArray[np.complex128]] = field(default_factory=dict)
    sizes: NDArray[np.float64] | None = None


@dataclass(frozen=True, eq=False)
class SampleOutcome:
    """The same for samples of an impulse response: poles inside of the circle.

    ``gap`` holds the number of singular values above the noise and the ratio of the last of them to the next.
    """

    problem: SampleProblem
    poles: NDArray[np.complex128]
    candidates: tuple[Candidate, ...]
    gap: tuple[int, float]
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
    fit : callable, optional
        (problem, lowest order, highest order, direct "auto"?) -> Outcome; None: not for frequency responses.
    fit_samples : callable, optional
        (sample problem, lowest order, highest order) -> SampleOutcome; None: not for impulse responses.
    """

    name: str
    says: str
    source: str
    fit: Callable[[Problem, int, int, bool], Outcome] | None = None
    fit_samples: Callable[[SampleProblem, int, int], SampleOutcome] | None = None


METHODS: dict[str, Method] = {}


def register(method: Method) -> Method:
    """Add a method to the table; a name that is there already is refused."""
    if method.name in METHODS:
        raise ValueError(f"fitting method {method.name!r} is registered already")
    METHODS[method.name] = method
    return method


def choose_method(name: str, problem: Problem) -> Method:
    """Return the method of that name; ``auto`` is ``realize.fitting.automatic``."""
    if name == "auto":
        from realize.fitting.automatic import AUTOMATIC

        return AUTOMATIC
    method = _known(name)
    if method.fit is None:
        raise UsageError(
            f"method {name!r} takes an impulse response, and these data are a frequency response; "
            f"choose one of {_listed(lambda m: m.fit)}"
        )
    return method


def choose_sample_method(name: str) -> Method:
    """Return the method of that name for samples of an impulse response; ``auto`` is Ho and Kalman's."""
    if name == "auto":
        return METHODS["ho-kalman"]
    method = _known(name)
    if method.fit_samples is None:
        raise UsageError(
            f"method {name!r} takes a frequency response, and these data are an impulse response; "
            f"choose one of {_listed(lambda m: m.fit_samples)}"
        )
    return method


def _known(name: str) -> Method:
    if name not in METHODS:
        raise UsageError(f"method {name!r} does not exist; choose one of {', '.join([*sorted(METHODS), 'auto'])}")
    return METHODS[name]


def _listed(function: Callable[[Method], object]) -> str:
    return ", ".join([*sorted(name for name, method in METHODS.items() if function(method) is not None), "auto"])
