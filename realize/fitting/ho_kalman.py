"""Poles from the Hankel matrix of an impulse response, polished to maximum likelihood."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from realize.fitting.records import Candidate
from realize.fitting.registry import Method, SampleOutcome, register
from realize.fitting.sample_problem import SampleProblem
from realize.kernels.exponentials import to_circle, to_plane
from realize.kernels.markov import Hankel, decomposed, shift_invariant_poles, shifted_poles

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

#: Most block rows and columns of the Hankel matrix: noise averages over as many samples, the work grows linearly.
MOST_ROWS, MOST_COLUMNS = 4096, 16384
#: ``auto`` polishes orders this far below and above the one that the singular values show.
BELOW, ABOVE = 6, 6
#: The range is widened while the criterion has fallen within this many orders of its end.
PATIENCE = 4
#: Beyond this order only every second one is tried.
EVERY_ORDER = 24
#: Noise of deviation 1 gives a Hankel matrix of n entries a side singular values up to about sqrt(2 n ln n)
#: (M. W. Meckes, "On the spectral norm of a random Toeplitz matrix", Electronic Communications in Probability 12,
#: 2007: the growth); this many times that is above the noise.
ABOVE_NOISE = 1.5

Poles = Callable[[Hankel, int], ComplexArray]


def fit(problem: SampleProblem, lowest: int, highest: int) -> SampleOutcome:
    """Return the fit that starts from the eigensystem realization."""
    return searched(problem, lowest, highest, (shifted_poles,))


def fit_by_shift_invariance(problem: SampleProblem, lowest: int, highest: int) -> SampleOutcome:
    """Return the fit that starts from the shift invariance of the observability matrix."""
    return searched(problem, lowest, highest, (shift_invariant_poles,))


def fit_by_both(problem: SampleProblem, lowest: int, highest: int) -> SampleOutcome:
    """Return the better fit of the two starts, order by order."""
    return searched(problem, lowest, highest, (shifted_poles, shift_invariant_poles))


def searched(problem: SampleProblem, lowest: int, highest: int, methods: tuple[Poles, ...]) -> SampleOutcome:
    """Return the fit with the lowest criterion among the orders around the gap of the singular values.

    Noise that is not given is first estimated, channel by channel, from the misfit of the largest order, and the
    weights follow it; then again from the misfit of the order chosen.
    """
    count = problem.samples.shape[0]
    rows = min(count // 2, MOST_ROWS)
    columns = min(count - rows, MOST_COLUMNS)
    hankel = decomposed(_stacked(problem), rows, columns, highest)
    if not problem.known:
        highest = min(highest, int(np.sum(hankel.values > 0)))
        problem = problem.with_weights(_weights(problem, to_circle(to_plane(shifted_poles(hankel, highest)))))
        hankel = decomposed(_stacked(problem), rows, columns, highest)
    highest = min(highest, int(np.sum(hankel.values > 0)))
    lowest = min(lowest, highest)
    gap, ratio = _gap(problem, hankel, highest)
    best: dict[int, tuple[ComplexArray, float]] = {}
    waiting = _orders(lowest, highest, gap)
    while waiting:
        order = waiting.pop(0)
        starts = [method(hankel, order) for method in methods]
        trials = [problem.polish(start, 12, 1e-4) for start in starts]
        best[order] = min(trials, key=lambda trial: trial[1])
        if best[order][1] <= problem.floor:
            break
        chosen = min(best, key=lambda n: problem.criterion(n, best[n][1]))
        if not waiting and chosen > order - PATIENCE:
            waiting = [n for n in _orders(lowest, highest, order + ABOVE) if n > order]
    chosen = min(best, key=lambda n: problem.criterion(n, best[n][1]))
    poles = _finished(problem, *best[chosen])
    if not problem.known and best[chosen][1] > problem.floor:
        problem = problem.with_weights(_weights(problem, poles))
        poles = _finished(problem, poles, np.inf)
    rows_of_table = tuple(_candidate(problem, n, best[n] if n != chosen else None, poles) for n in sorted(best))
    outside = int(np.sum(np.abs(methods[0](hankel, chosen)) > 1 + 1e-6))
    cautions: tuple[str, ...] = ()
    if outside and problem.cost(poles) > 1e-6 * problem.total:
        cautions = (
            f"the samples ask for {outside} pole(s) outside of the unit circle (a response that grows); the model is "
            "stable, and its misfit shows what that costs",
        )
    return SampleOutcome(problem, poles, rows_of_table, (gap, ratio), cautions)


def _stacked(problem: SampleProblem) -> Array:
    """Return the samples with all channels as outputs of one input, each in units of its noise: [k][channels][1].

    So the rank of the Hankel matrix is the number of poles, whatever the ranks of their residues, and channels of
    unlike noise count alike.
    """
    return (problem.weights * problem.flat)[:, :, None]


def _weights(problem: SampleProblem, poles: ComplexArray) -> Array:
    """Return 1/deviation of each channel from what neighbours do not predict in a misfit; rounding is the least."""
    misfit = problem.misfit(poles)
    least = 2.0**-50 * np.max(np.abs(problem.flat), axis=0)
    deviation = np.maximum(problem.scatter(misfit), least)
    return np.broadcast_to(1 / np.where(deviation > 0, deviation, 1.0), misfit.shape).copy()


def _gap(problem: SampleProblem, hankel: Hankel, highest: int) -> tuple[int, float]:
    """Return how many singular values stand above the noise, and the ratio of the last of them to the next."""
    side = max(hankel.rows, hankel.columns)
    # channels that are all zero have no noise
    noise = np.sqrt(problem.active * 2 * side * np.log(max(side, 2)))
    values = hankel.values
    rounding = values[0] * 2.0**-52 * np.sqrt(side) if values.size else 0.0
    count = int(np.sum(values > max(ABOVE_NOISE * noise, 4 * rounding)))
    count = min(count, highest)
    ratio = float(values[count - 1] / values[count]) if 0 < count < values.size and values[count] > 0 else np.inf
    return count, ratio


def _orders(lowest: int, highest: int, gap: int) -> list[int]:
    """Return the orders worth a polish: around the gap, the ends of a range that was asked for."""
    gap = min(max(gap, lowest), highest)
    orders = range(max(lowest, gap - BELOW), min(highest, gap + ABOVE) + 1)
    return [n for n in orders if n <= EVERY_ORDER or (n - gap) % 2 == 0 or n in (lowest, highest)]


def _finished(problem: SampleProblem, poles: ComplexArray, cost: float) -> ComplexArray:
    return poles if cost <= problem.floor else problem.polish(poles, 60, 1e-9)[0]


def _candidate(
    problem: SampleProblem, order: int, trial: tuple[ComplexArray, float] | None, kept: ComplexArray
) -> Candidate:
    poles = kept if trial is None else trial[0]
    misfit = problem.misfit(poles)
    cost = float(np.sum((problem.weights * misfit) ** 2))
    size = float(np.sqrt(np.sum(problem.samples**2)))
    return Candidate(
        order=order,
        rms=float(np.sqrt(np.sum(misfit**2))) / size if size > 0 else 0.0,
        weighted=float(np.sqrt(cost / max(problem.numbers, 1))),
        criterion=problem.criterion(order, cost),
        kept=trial is None,
    )


HO_KALMAN = register(
    Method(
        name="ho-kalman",
        says="poles of an impulse response by the eigensystem realization, polished to maximum likelihood",
        source="Ho & Kalman 1966; Juang & Pappa 1985; Kung 1978; Golub & Pereyra 1973",
        fit_samples=fit,
    )
)
