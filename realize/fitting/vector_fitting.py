"""Vector fitting with a maximum-likelihood polish and a search over orders."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from realize.fitting.noise import noise_shape, smoothed_size
from realize.fitting.order import Search, Trial, finished, polish, relocate, single_line_poles, start, unstable_image
from realize.fitting.problem import Problem
from realize.fitting.records import Candidate
from realize.fitting.registry import Method, Outcome, register
from realize.fitting.thinning import thinned

ComplexArray = NDArray[np.complex128]

#: Estimated deviations are estimated again from the misfit when one line's share moved by more than this factor.
MOVED = 1.5
#: A fixed order up to this is reached through all smaller orders as well.
LONGEST_LADDER = 40


Searched = Callable[[Problem, int, int, dict[int, ComplexArray] | None], Search]


def fit(problem: Problem, lowest: int, highest: int, direct_auto: bool) -> Outcome:
    """Return the best fit that vector fitting and additions of poles lead to, see ``fit_by``."""
    return fit_by(_searched, problem, lowest, highest, direct_auto)


def fit_by(searched: Searched, problem: Problem, lowest: int, highest: int, direct_auto: bool) -> Outcome:
    """Return the best fit with an order between ``lowest`` and ``highest``.

    Estimated noise: the search runs with deviations estimated from the data (local interpolation), then, where the
    misfit of that fit gives another picture, with those estimated from the misfit, from the poles already found.

    Parameters
    ----------
    searched : callable
        (problem, lowest, highest, poles known by order or None) -> fits of the orders.
    problem : Problem
    lowest, highest : int
        Range of orders; equal for a fixed order.
    direct_auto : bool
        Try without direct term as well, and keep it only where the criterion is better with it.
    """
    search = searched(problem, lowest, highest, None)
    if problem.estimated and min(t.cost for t in search.best.values()) > problem.floor:
        again = _weights_from_misfit(problem, search.best[max(search.best)])
        if again is not None:
            known = {n: t.poles for n, t in search.best.items()}
            search = searched(problem.with_weights(again), lowest, highest, known)
    solved = search.problem
    noise = search.noise_power()
    chosen = search.choose(lowest, noise)
    trial = finished(solved, search.prune(chosen, lowest, noise))
    search.best[trial.order] = trial
    if direct_auto:
        plain = solved.with_direct(False)
        without = finished(plain, polish(plain, trial.poles, 30, 1e-5))
        if plain.criterion(without.order, without.cost) <= solved.criterion(trial.order, trial.cost):
            trial, solved = without, plain
    tried = {n: t.poles for n, t in search.best.items()}
    return Outcome(solved, trial.poles, _candidates(search, trial), _remarks(search, trial, noise), tried=tried)


def _remarks(search: Search, trial: Trial, noise: float) -> tuple[str, ...]:
    solved = search.problem
    remarks = []
    enough = search.choose(solved.fewest, noise)
    if enough < trial.order:
        remarks.append(
            f"order {enough + solved.given} would do: "
            f"the other {trial.order - enough} pole(s) bring nothing significant"
        )
    spikes = single_line_poles(solved, trial.poles) if 0 < trial.order <= LONGEST_LADDER else []
    if spikes:
        remarks.append(f"{len(spikes)} pair(s) of poles fit one or two lines only, not a resonance")
    stable = solved.structure is None or solved.structure.stable
    if stable and trial.cost > 1e-12 * solved.total and solved.numbers > 2 * solved.unknowns(trial.order):
        count = unstable_image(solved, trial)
        if count:
            remarks.append(
                f"the data ask for {count} unstable pole(s), which this method does not give: the misfit would be less "
                "than a tenth with them (or the sign of the phase is the other one)"
            )
    return tuple(remarks)


def _searched(problem: Problem, lowest: int, highest: int, known: dict[int, ComplexArray] | None) -> Search:
    few = thinned(problem)
    search = Search(few, known)
    if lowest == highest and highest > LONGEST_LADDER:
        search.best[highest] = poles_by_relocation(few, highest)
    else:
        search.grow(lowest, highest)
    if few is problem:
        return search
    full = Search(problem)
    for order, trial in search.best.items():
        full.best[order] = polish(problem, trial.poles, 4, 1e-3)
    return full


def poles_by_relocation(problem: Problem, order: int) -> Trial:
    """Return the best of vector fitting from three spreads of starting poles."""
    fresh = [relocate(problem, start(problem, order, s), 20) for s in ("logarithmic", "linear", "real")]
    return min(fresh, key=lambda t: t.cost)


def _weights_from_misfit(problem: Problem, trial: Trial) -> NDArray[np.float64] | None:
    misfit = problem.misfit(trial.poles)
    weights = 1 / noise_shape(problem.x, misfit, smoothed_size(problem.values + misfit, 0))
    if problem.trust is not None:
        weights = weights * problem.trust
    change = weights / problem.weights
    change = change / np.median(change)
    return weights if np.max(change) > MOVED or np.min(change) < 1 / MOVED else None


def _candidates(search: Search, kept: Trial) -> tuple[Candidate, ...]:
    problem = search.problem
    size = float(np.sqrt(np.sum(np.abs(problem.values) ** 2)))
    rows = []
    for n in sorted(search.best):
        trial = kept if n == kept.order else search.best[n]
        rows.append(
            Candidate(
                order=n + problem.given,
                rms=float(np.sqrt(np.sum(np.abs(problem.misfit(trial.poles)) ** 2))) / size,
                weighted=float(np.sqrt(2 * trial.cost / problem.numbers)),
                criterion=problem.criterion(n, trial.cost),
                kept=n == kept.order,
            )
        )
    return tuple(rows)


VECTOR_FITTING = register(
    Method(
        name="vector-fitting",
        says="common stable poles by relaxed vector fitting, polished to maximum likelihood by variable projection",
        source="Gustavsen & Semlyen 1999; Gustavsen 2006; Deschrijver et al. 2008; Golub & Pereyra 1973; Kaufman 1975",
        fit=fit,
    )
)
