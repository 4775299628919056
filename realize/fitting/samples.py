"""The friendly face of fitting impulse responses: checks, scaling by powers of two, and the record that comes back."""

from __future__ import annotations

from typing import Any, Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray

from realize.errors import InputError, Refused
from realize.fitting.face import order_range
from realize.fitting.order import LARGE_ORDER as HIGHEST_ORDER
from realize.fitting.records import Candidate, Fit, Noise, PoleRow, Worst
from realize.fitting.registry import choose_sample_method
from realize.fitting.sample_problem import SampleProblem
from realize.kernels.exponentials import coefficients_of, powers

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

#: ``auto`` leaves at least this many numbers of data to every unknown.
NUMBERS_PER_UNKNOWN = 2.0
#: Misfit of this many times the noise is worth a caution.
POOR = 1.5
#: A misfit of this share of the samples leaves nothing explained.
NOTHING = 0.5


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
    around it, and takes the lowest Bayesian information criterion; up to 40. A range (lowest, highest) alike.

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
        ``misfit`` is real; ``worst.frequency`` is the time of the sample, s.

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
    return _record(h, scaled, lift, period, sampled, problem, poles, candidates, cautions, chosen.name, direct)


def _record(
    h: Array,
    scaled: Array,
    lift: NDArray[Any],
    period: float,
    sampled: bool,
    problem: SampleProblem,
    poles: ComplexArray,
    candidates: tuple[Candidate, ...],
    cautions: list[str],
    method: str,
    direct: bool | str,
) -> Fit:
    p, m = h.shape[1:]
    first = 1 if sampled else 0
    rate = np.zeros(0, complex)
    if not sampled:
        alternating = np.flatnonzero((poles.imag == 0) & (poles.real <= 0))
        if alternating.size:
            raise Refused(
                "the samples alternate in sign from one to the next, which no continuous model does; use more samples "
                "a second, or say that the system is sampled"
            )
        with np.errstate(over="ignore"):
            rate = np.log(poles) / period
            poles = np.exp(np.log(poles))
    coefficient, missed = coefficients_of(poles, problem.flat, problem.weights)
    constant = np.zeros(p * m)
    if sampled:
        keep = direct is True or (direct == "auto" and _stands_out(scaled[0], problem, missed))
        constant = scaled[0].copy() if keep else constant
        missed = np.concatenate([(constant - scaled[0])[None], missed])
    with np.errstate(over="ignore", under="ignore"):
        misfit = np.ldexp(missed, lift).reshape(h.shape)
        residues = (np.ldexp(coefficient.real, lift) + 1j * np.ldexp(coefficient.imag, lift)).reshape(-1, p, m)
        constant = np.ldexp(constant, lift).reshape(p, m)
    out = poles if sampled else rate
    if not all(np.all(np.isfinite(a)) for a in (residues, constant, out)):
        raise Refused("a pole or residue lies beyond the range of double precision; use other units")
    common = np.ldexp(1.0, np.maximum(lift - np.max(lift), -500))
    size = float(np.sqrt(np.sum((scaled * common) ** 2)))
    rms = float(np.sqrt(np.sum((missed * common) ** 2))) / size if size > 0 else 0.0
    peak = np.max(np.abs(scaled), axis=0)
    relative = np.abs(missed) / np.where(peak > 0, peak, 1.0)
    line, channel = np.unravel_index(int(np.argmax(relative)), relative.shape)
    worst = Worst(float(relative[line, channel]), int(line), int(channel) // m, int(channel) % m, float(line * period))
    weighted, noise = _noise(problem, missed[first:], poles.size, common, size)
    table = _pole_table(poles, coefficient, problem.samples.shape[0], peak, period)
    if weighted > POOR and noise.level > 0 and worst.value > 1e-9:
        source = "given" if noise.basis == "given" else "estimated"
        cautions.append(
            f"the misfit is {weighted:.3g} times the {source} noise: the data contain more than a model of this order, "
            "or their errors are not independent from sample to sample"
        )
    if poles.size == 0 and rms > NOTHING:
        cautions.append("nothing stands out of the noise of the samples: the model has no poles, and says nothing")
    if size == 0:
        cautions.append("all samples are zero: the model is zero")
    powers_of_poles = np.ones(poles.size, dtype=np.int64)
    for array in (out, residues, constant, misfit, powers_of_poles):
        array.setflags(write=False)
    return Fit(
        poles=out,
        residues=residues,
        direct=constant,
        order=int(poles.size),
        method=method,
        misfit=misfit,
        rms=rms,
        worst=worst,
        weighted=weighted,
        noise=noise,
        candidates=candidates,
        pole_table=table,
        cautions=tuple(cautions),
        powers=powers_of_poles,
    )


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


def _stands_out(start: Array, problem: SampleProblem, missed: Array) -> bool:
    """Return whether h[0] is better explained by a direct term: the criterion's penalty is ln N a channel."""
    alive = start != 0
    if not np.any(alive):
        return False
    deviation = problem.scatter(missed)
    if problem.known:
        deviation = 1 / problem.weights[0]
    deviation = np.maximum(deviation, 2.0**-50)
    gain = float(np.sum((start[alive] / deviation[alive]) ** 2))
    return bool(gain > np.sum(alive) * np.log(max(problem.numbers, 2)))


def _noise(problem: SampleProblem, missed: Array, order: int, common: Array, size: float) -> tuple[float, Noise]:
    """Return RMS of misfit over deviation, and the deviations' size."""
    basis = "given" if problem.known else "estimated"
    alive = np.any(problem.flat != 0, axis=0)
    if not np.any(alive):
        return 0.0, Noise(basis, 0.0)
    scaled = missed[:, alive] * problem.weights[:, alive]
    rms = float(np.sqrt(np.mean(scaled**2)))
    factor = 1.0
    if not problem.known:
        free = problem.numbers - problem.unknowns(order)
        factor = float(np.median(problem.scatter(scaled)))
        factor *= np.sqrt(problem.numbers / max(free, 1))
        # rounding is the least that any deviation can be
        factor = max(factor, 4 * np.sqrt(problem.floor / problem.numbers))
    deviation = (factor * common / problem.weights)[:, alive]
    level = float(np.sqrt(np.sum(deviation**2))) / size if size > 0 else 0.0
    return (rms / factor if factor > 0 else 0.0), Noise(basis, level)


def _pole_table(
    poles: ComplexArray, coefficient: ComplexArray, count: int, peak: Array, period: float
) -> tuple[PoleRow, ...]:
    rows = []
    for j in np.flatnonzero(poles.imag >= 0):
        pair = bool(poles[j].imag > 0)
        part = np.abs(np.real(powers(poles[j : j + 1], 0, count) * coefficient[j])) * (2 if pair else 1)
        share = float(np.max(np.max(part, axis=0) / np.where(peak > 0, peak, 1.0)))
        s = complex(np.log(poles[j] if poles[j] != 0 else np.finfo(float).tiny))
        rows.append(PoleRow(abs(s) / period, -s.real / abs(s) if s != 0 else 1.0, share, int(j), pair))
    return tuple(sorted(rows, key=lambda row: row.frequency))
