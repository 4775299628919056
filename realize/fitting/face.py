"""The friendly face of fitting: checks, scaling by powers of two, and the record that comes back."""

from __future__ import annotations

from dataclasses import replace
from typing import Any, Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray

from realize.errors import InputError, UsageError
from realize.fitting.evidence import judged_candidates
from realize.fitting.order import HIGHEST_ORDER, LARGE_ORDER
from realize.fitting.outliers import trusted, without_outliers
from realize.fitting.prepare import Prepared, prepared
from realize.fitting.problem import Problem
from realize.fitting.records import Candidate, Fit
from realize.fitting.registry import Outcome, choose_method
from realize.fitting.result import finish
from realize.fitting.structure import Structure, check

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

#: Methods that add poles to smaller orders, and so may go on to ``HIGHEST_ORDER``; the others stop at ``LARGE_ORDER``.
CLIMBING = ("auto", "vector-fitting")
#: ``auto`` leaves at least this many numbers of data to every unknown.
NUMBERS_PER_UNKNOWN = 2.0


def fit_response(
    frequency: ArrayLike,
    response: ArrayLike,
    *,
    deviation: ArrayLike | None = None,
    coherence: ArrayLike | None = None,
    order: int | tuple[int, int] | str = "auto",
    method: str = "auto",
    period: float | None = None,
    direct: bool | Literal["auto"] = True,
    structure: Structure | None = None,
    robust: bool = True,
) -> Fit:
    """Fit a rational model with common stable poles to a measured frequency response.

    Minimises sum |misfit/deviation|^2 over all lines and channels of sum_j residues_j / (s - poles_j) + direct.

    Weights. ``deviation``: 1/deviation. ``coherence`` c: deviation proportional to |H| sqrt((1 - c)/c). Neither:
    deviation^2 = a^2 + b^2 |H|^2 with a and b estimated for each channel from what neighbouring lines do not predict,
    then again from the misfit of the first fit. Floors: see ``realize.fitting.noise``.

    Order. ``auto``: increasing orders until the Bayesian information criterion has not improved for four orders in a
    row; up to 160, and at least two numbers of data for each unknown. A range (lowest, highest) is searched alike.

    Poles on the imaginary axis or at the origin are not represented: an integrator comes out as stable poles far below
    the lowest line. With a period the points are z = exp(jwT); a line at z = -1 is left out of the fit.

    Parameters
    ----------
    frequency : [k] float
        Increasing, not negative, rad/s.
    response : [k][outputs][inputs] complex
    deviation : [k][outputs][inputs] float, optional
        One standard deviation of the complex response: the mean of |error|^2 is deviation^2.
    coherence : [k][outputs][inputs] float, optional
        0 to 1; used where no deviation is given.
    order : int, (int, int) or "auto"
    method : str
        A name of ``realize.fitting.METHODS``, or "auto".
    period : float, optional
        Sampling period of a sampled response, s.
    direct : bool or "auto"
        Constant real direct term: True, False, or as the criterion says; a structure's relative degree comes first.
    structure : Structure, optional
        What the model must keep. Orders count fixed poles and integrators as well.
    robust : bool
        Whether lines that misfit beyond chance get less weight (``realize.fitting.outliers``); they are listed then.

    Returns
    -------
    Fit

    Raises
    ------
    InputError
        Data of wrong shape, not finite, not increasing; more unknowns than data.
    Refused
        A result beyond the range of double precision.

    Sources
    -------
    See ``realize.kernels.vector_fitting`` and ``realize.kernels.variable_projection``; G. Schwarz, "Estimating the
    dimension of a model", Annals of Statistics 6, 1978.
    """
    w, H = _checked(frequency, response, period)
    lines = w.size
    sigma = _like(deviation, "deviation", H)
    gamma = _like(coherence, "coherence", H)
    if not (direct is True or direct is False or direct == "auto"):
        raise InputError(f"direct = {direct!r}", 'True, False or "auto"', field="direct")
    wanted = order_range(order)
    kept = structure if structure is not None else Structure()
    check(kept, period)
    if kept.relative_degree:
        direct = False
    if not kept.plain and not np.any(H):
        raise InputError(
            "a response that is zero at every line", "something to keep poles, zeros or a gain in", field="response"
        )
    if kept.symmetric:
        from realize.fitting.symmetric import fit_symmetric

        options = {"order": order, "method": method, "period": period, "direct": direct, "robust": robust}
        return fit_symmetric(w, H, sigma, gamma, kept, options)

    def prepare(values: ComplexArray) -> Prepared:
        return prepared(w, values, sigma, gamma, direct is not False, kept, period)

    def search(data: Prepared, problem: Problem) -> tuple[str, Outcome]:
        return _searched(problem, method, wanted, direct, lines, order == "auto", robust)

    if kept.dead_time:
        from realize.fitting.dead_time import fit_with_dead_time

        return fit_with_dead_time(w, H, kept.dead_time, period, prepare, search, wanted)
    data = prepare(H)
    name, outcome = search(data, data.problem)
    return finish(w, H, data, outcome, name, period)


def _searched(
    problem: Problem,
    method: str,
    wanted: tuple[int, int | None],
    direct: bool | str,
    lines: int,
    automatic: bool,
    robust: bool,
) -> tuple[str, Outcome]:
    """Return the method's name and what it found; a real constant at all lines needs no method."""
    chosen = choose_method(method, problem)
    values = problem.values
    constant = bool(np.all(values == values[:1]) and not np.any(values.imag))
    if constant and problem.structure is None and (direct is not False or not np.any(values)):
        remark = "the response is one real constant at all lines: order 0, whatever order was asked"
        trivial = (Candidate(0, 0.0, 0.0, 0.0, True),)
        none = np.zeros(0, complex)
        return chosen.name, Outcome(problem, none, trivial, (remark,) if wanted[0] > 0 else ())
    ceiling = HIGHEST_ORDER if chosen.name in CLIMBING else LARGE_ORDER
    lowest, highest = _within_reach(problem, wanted, lines, ceiling)
    assert chosen.fit is not None
    outcome = chosen.fit(trusted(problem) if robust else problem, lowest, highest, direct == "auto")
    if robust:
        outcome = without_outliers(outcome, lowest, highest)
    candidates, doubts = judged_candidates(outcome, chosen_by_data=lowest < highest)
    outcome = replace(outcome, candidates=candidates, cautions=(*outcome.cautions, *doubts))
    if automatic and outcome.poles.size >= highest > 0 and outcome.candidates[-1].rms > 1e-9:
        tried = highest + problem.given
        remark = f"the order stopped at the highest one tried ({tried}), not because more brought nothing"
        outcome = replace(outcome, cautions=(*outcome.cautions, remark))
    return outcome.method or chosen.name, outcome


def _checked(frequency: ArrayLike, response: ArrayLike, period: float | None) -> tuple[Array, ComplexArray]:
    w = _numbers(frequency, "frequency", float)
    H = _numbers(response, "response", complex)
    if w.ndim != 1 or w.size == 0:
        raise InputError(f"shape {list(w.shape)}", "a list of frequencies in rad/s", field="frequency")
    if H.ndim == 1:
        H = H[:, None, None]
    if H.ndim != 3 or 0 in H.shape[1:]:
        raise InputError(f"shape {list(H.shape)}", "lines x outputs x inputs", field="response")
    if H.shape[0] != w.size:
        raise InputError(f"{H.shape[0]} lines", f"{w.size}, one for each frequency", field="response")
    for name, array in (("frequency", w), ("response", H)):
        bad = np.argwhere(~np.isfinite(array))
        if bad.size:
            place = "".join(f"[{i}]" for i in bad[0])
            raise InputError(f"{array[tuple(bad[0])]}", "a finite number", field=f"{name}{place}")
    if w[0] < 0:
        raise InputError(f"{w[0]}", "a frequency that is not negative", field="frequency[0]")
    wrong = np.flatnonzero(np.diff(w) <= 0)
    if wrong.size:
        k = int(wrong[0]) + 1
        raise InputError(f"{w[k]} after {w[k - 1]}", "increasing frequencies", field=f"frequency[{k}]")
    if w[-1] == 0:
        raise InputError("frequency 0 alone", "at least one line above 0", field="frequency")
    if period is not None:
        if not (np.isfinite(period) and period > 0):
            raise InputError(f"{period}", "a positive number of seconds", field="period")
        if w[-1] * period > np.pi * (1 + 1e-9):
            raise InputError(
                f"{w[-1]} rad/s", "frequencies up to half the sampling rate", field=f"frequency[{w.size - 1}]"
            )
    return w, H


def _numbers(value: ArrayLike, name: str, kind: type) -> NDArray[Any]:
    try:
        return np.array(value, dtype=kind)
    except (TypeError, ValueError):
        raise InputError("something that is no array of numbers", "numbers", field=name) from None


def _like(value: ArrayLike | None, name: str, H: ComplexArray) -> Array | None:
    if value is None:
        return None
    array = _numbers(value, name, float)
    if array.ndim == 1 and H.shape[1:] == (1, 1):
        array = array[:, None, None]
    if array.shape != H.shape:
        raise InputError(f"shape {list(array.shape)}", f"shape {list(H.shape)}", field=name)
    top = 1.0 if name == "coherence" else np.finfo(float).max
    bad = np.argwhere(~((array >= 0) & (array <= top)))
    if bad.size:
        place = "".join(f"[{i}]" for i in bad[0])
        expected = "a number between 0 and 1" if name == "coherence" else "a finite number that is not negative"
        raise InputError(f"{array[tuple(bad[0])]}", expected, field=f"{name}{place}")
    return array.reshape(H.shape[0], -1)


def order_range(order: Any) -> tuple[int, int | None]:
    """Return lowest and highest order asked; highest None for ``auto``."""
    if isinstance(order, str):
        if order == "auto":
            return 0, None
        raise InputError(f"{order!r}", 'a number of poles, a pair (lowest, highest) or "auto"', field="order")
    pair = order if isinstance(order, (tuple, list)) else (order, order)
    if len(pair) != 2 or any(isinstance(n, bool) or not isinstance(n, (int, np.integer)) for n in pair):
        raise InputError(f"{order!r}", 'a number of poles, a pair (lowest, highest) or "auto"', field="order")
    low, high = int(pair[0]), int(pair[1])
    if low < 0 or high < low:
        raise InputError(f"{order!r}", "0 <= lowest <= highest", field="order")
    return low, high


def _within_reach(problem: Problem, wanted: tuple[int, int | None], lines: int, ceiling: int) -> tuple[int, int]:
    """Return the lowest and highest number of free poles for a range of orders."""
    largest = problem.largest_order
    low, high = wanted[0] - problem.given, None if wanted[1] is None else wanted[1] - problem.given
    if high is not None and high < problem.fewest:
        kept = problem.structure
        raise UsageError(
            f"order {wanted[1]} has no room for {problem.given} fixed pole(s) and a relative degree plus fixed zeros "
            f"of {0 if kept is None else kept.known.excess + kept.known.zeros.size}; an order of at least "
            f"{problem.fewest + problem.given} has"
        )
    low = max(low, problem.fewest)
    if low > largest or problem.unknowns(low) > problem.numbers:
        raise InputError(
            f"{problem.unknowns(low)} unknowns for order {low + problem.given} and {problem.numbers} numbers in "
            f"{lines} line(s)",
            f"an order of at most {largest + problem.given}, or more lines",
            field="order",
        )
    if high is None:
        # order 0 with one line: nothing that could be called a fit
        if problem.points.size < 2:
            raise InputError(
                "1 line", "at least 2 lines to fit a response that is not a real constant", field="frequency"
            )
        high = ceiling
        while high > 0 and problem.unknowns(high) * NUMBERS_PER_UNKNOWN > problem.numbers:
            high -= 1
    return low, min(high, largest)
