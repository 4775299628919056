"""The friendly face of fitting impulse responses: checks, and scaling by powers of two."""

from __future__ import annotations

from typing import Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray

from realize.errors import InputError
from realize.fitting.face import order_range
from realize.fitting.order import LARGE_ORDER as HIGHEST_ORDER
from realize.fitting.records import Candidate, Fit
from realize.fitting.registry import choose_sample_method
from realize.fitting.sample_problem import SampleProblem
from realize.fitting.sample_result import Given, record_of

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

#: ``auto`` leaves at least this many numbers of data to every unknown.
NUMBERS_PER_UNKNOWN = 2.0


def fit_samples(
    samples: ArrayLike,
    period: float,
    *,
    sampled: bool = True,
    deviation: ArrayLike | None = None,
    order: int | tuple[int, int] | str = "auto",
    method: str = "auto",
    direct: bool | Literal["auto"] = True,
) -> Fit:
    """Fit a rational model with common stable poles to samples of an impulse response.

    Minimises sum (misfit/deviation)^2 over all samples and channels. Sampled: h[0] = direct and
    h[k] = sum_j residues_j poles_j^(k - 1). Continuous: h(k period) = sum_j residues_j exp(poles_j k period), no direct
    term, whose impulse no sample can hold.

    Weights. 1/deviation; where none is given, one deviation for each channel from what neighbouring misfits do not
    predict of each other.

    Order. ``auto`` looks for the gap in the singular values of the Hankel matrix above the noise, polishes the orders
    around it, and takes the lowest Bayesian information criterion; up to 40. A range (lowest, highest) alike. Each
    residue then gets the lowest rank that the samples do not contradict (``realize.fitting.solution.solved``).

    Error bars. As those of a frequency response, for normal errors that are independent from sample to sample.

    Parameters
    ----------
    samples : [k][outputs][inputs] float
        Values at 0, period, 2 period, ...
    period : float
        Step of time, s.
    sampled : bool
        Whether the system itself is sampled; else a continuous one is sought.
    deviation : [k][outputs][inputs] or [outputs][inputs] or one float, optional
        One standard deviation, positive.
    order : int, (int, int) or "auto"
    method : str
        "ho-kalman", "subspace" or "auto".
    direct : bool or "auto"
        Direct term of a sampled system: h[0] itself, none, or where h[0] stands out of the noise.

    Returns
    -------
    Fit
        ``misfit`` is real; ``worst.frequency`` and ``channels[..].frequency`` are times of samples, s, and
        ``response_deviation`` is that of the fitted samples.

    Raises
    ------
    InputError
        Samples of wrong shape, not finite; more unknowns than data.
    Refused
        A result beyond the range of double precision; a continuous model of samples that alternate in sign.

    Sources
    -------
    See ``realize.kernels.markov`` and ``realize.kernels.exponentials``.
    """
    h = _checked(samples, period)
    count, p, m = h.shape
    sigma = _deviation(deviation, h.shape)
    if not (direct is True or direct is False or direct == "auto"):
        raise InputError(f"direct = {direct!r}", 'True, False or "auto"', field="direct")
    wanted = order_range(order)
    chosen = choose_sample_method(method)
    flat = h.reshape(count, -1)
    top = np.max(np.abs(flat), axis=0)
    lift = np.where(top > 0, np.frexp(top)[1], 0)
    scaled = np.ldexp(flat, -lift)
    weights = np.ones_like(scaled)
    if sigma is not None:
        with np.errstate(over="ignore"):
            weights = 1 / np.maximum(np.ldexp(sigma, -lift), 2.0**-1000)
    first = 1 if sampled else 0
    problem = SampleProblem(scaled[first:].reshape(-1, p, m), weights[first:], sigma is not None)
    poles = np.zeros(0, complex)
    candidates: tuple[Candidate, ...] = (Candidate(0, 0.0, 0.0, 0.0, True),)
    cautions: list[str] = []
    lowest, highest = _within_reach(problem, wanted)
    if problem.active == 0:
        if wanted[0] > 0:
            cautions.append("no sample after the first is different from zero: order 0, whatever order was asked")
    else:
        assert chosen.fit_samples is not None
        outcome = chosen.fit_samples(problem, lowest, highest)
        poles, problem, candidates = outcome.poles, outcome.problem, outcome.candidates
        cautions.extend(outcome.cautions)
        if poles.size < wanted[0]:
            cautions.append(f"the samples have {poles.size} pole(s) and no more, whatever order was asked")
        if wanted == (0, None) and poles.size >= highest > 0 and candidates[-1].rms > 1e-9:
            cautions.append(f"the order stopped at the highest one tried ({highest}), not because more brought nothing")
    given = Given(h, scaled, lift, weights[0], period, sampled)
    return record_of(given, problem, poles, candidates, cautions, chosen.name, direct)


def _checked(samples: ArrayLike, period: float) -> Array:
    try:
        h = np.array(samples, dtype=float)
    except (TypeError, ValueError):
        raise InputError("something that is no array of numbers", "numbers", field="samples") from None
    if h.ndim == 1:
        h = h[:, None, None]
    if h.ndim != 3 or 0 in h.shape:
        raise InputError(f"shape {list(h.shape)}", "samples x outputs x inputs", field="samples")
    bad = np.argwhere(~np.isfinite(h))
    if bad.size:
        place = "".join(f"[{i}]" for i in bad[0])
        raise InputError(f"{h[tuple(bad[0])]}", "a finite number", field=f"samples{place}")
    if not (np.isfinite(period) and period > 0):
        raise InputError(f"{period}", "a positive number of seconds", field="period")
    return h


def _deviation(value: ArrayLike | None, shape: tuple[int, ...]) -> Array | None:
    if value is None:
        return None
    try:
        array = np.broadcast_to(np.array(value, dtype=float), shape)
    except (TypeError, ValueError):
        raise InputError(
            "a deviation of another shape", f"one number, or shape {list(shape)}", field="deviation"
        ) from None
    if not np.all((array > 0) & np.isfinite(array)):
        raise InputError("a deviation that is not positive", "finite numbers greater than zero", field="deviation")
    return array.reshape(shape[0], -1)


def _within_reach(problem: SampleProblem, wanted: tuple[int, int | None]) -> tuple[int, int]:
    largest = problem.largest_order
    low, high = wanted
    if problem.active and low > largest:
        raise InputError(
            f"order {low} from {problem.samples.shape[0]} sample(s)",
            f"an order of at most {largest}, or more samples",
            field="order",
        )
    if high is None:
        high = HIGHEST_ORDER
        while high > 0 and problem.unknowns(high) * NUMBERS_PER_UNKNOWN > problem.numbers:
            high -= 1
        high = max(high, min(1, largest))
    return low, min(high, largest)
