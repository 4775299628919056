"""Search over orders: every order is fitted from several starts, the information criterion chooses.

Starts of order n: the best fit of order n - 1 with the one real pole, and of order n - 2 with the one pair, that lower
the cost most; and vector fitting from poles spread over the band. Each is polished by variable projection; the
cheapest is kept. So every order is at least as good as the smaller ones it contains.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from realize.fitting.noise import noise_factor
from realize.fitting.problem import Problem
from realize.fitting.thinning import thinned
from realize.kernels.vector_fitting import ordered_poles, starting_poles, weighted_cost

ComplexArray = NDArray[np.complex128]

#: Highest order tried by ``auto``.
HIGHEST_ORDER = 160
#: Above this order two pairs are added at a time, and ``auto`` stops at once where the criterion no longer falls.
LARGE_ORDER = 40
#: ``auto`` stops after this many orders in a row without a better criterion (two pairs).
PATIENCE = 4
#: Above this many times the noise power, orders that bring nothing by themselves do not end the search: a structure
#: with many modes takes many poles before the misfit falls.
FAR = 10.0
#: Near the noise ``auto`` stops after this many orders of which none was worth its poles (``worthwhile``).
LOOKAHEAD = 12
#: Up to this order every order is tried, above it every second one.
EVERY_ORDER = 12
#: Up to this order a start by vector fitting is tried beside the warm ones.
FRESH_ORDER = 20
#: Misfit power this much above that of the noise is as good as the noise: the criterion alone decides.
NEAR_NOISE = 0.25
#: Further above the noise two more poles must leave less than this share of the excess misfit power.
WORTH = 0.65
#: As long as this share of the data's power is missed beyond the noise, the criterion alone decides.
GROSS, WORTH_WHILE_GROSS = 0.05, 1.0
#: Band edges further apart than this get logarithmically spaced starting poles, others linearly spaced ones.
WIDE = 10.0


@dataclass(frozen=True)
class Trial:
    """Poles of one order and their cost."""

    poles: ComplexArray
    cost: float

    @property
    def order(self) -> int:
        return self.poles.size


def spacing_of(problem: Problem) -> str:
    """Return the spacing of starting poles for the band of the data."""
    low, high = problem.band()
    return "logarithmic" if high > WIDE * low else "linear"


def polish(problem: Problem, poles: ComplexArray, iterations: int, tolerance: float) -> Trial:
    """Return the poles after variable projection, set apart where they coincide."""
    return Trial(*problem.polished(poles, iterations, tolerance))


def relocate(problem: Problem, poles: ComplexArray, iterations: int) -> Trial:
    """Return the best poles of vector fitting from a start."""
    return Trial(*problem.relocated(poles, iterations))


def start(problem: Problem, order: int, spacing: str) -> ComplexArray:
    low, high = problem.band()
    return starting_poles(low, high if high > low else 2 * low, order, spacing)


def joined(poles: ComplexArray, more: ComplexArray) -> ComplexArray:
    """Return both lists as one, ordered; poles on the right stay there."""
    return ordered_poles(np.concatenate([poles, more]), reflect=False)


class Search:
    """Best fits of increasing order, each warm started from the smaller ones."""

    def __init__(self, problem: Problem, known: dict[int, ComplexArray] | None = None) -> None:
        self.problem = problem
        self.known = known or {}
        self.best: dict[int, Trial] = {}
        self._additions: dict[int, tuple[ComplexArray, ComplexArray]] = {}

    def additions(self, order: int) -> tuple[ComplexArray, ComplexArray]:
        if order not in self._additions:
            self._additions[order] = self.problem.additions(self.best[order].poles)
        return self._additions[order]

    def fit(self, order: int) -> Trial:
        """Fit one order; the two orders below it are used where they are known."""
        problem = self.problem
        if order == 0:
            self.best[0] = polish(problem, np.zeros(0, complex), 0, 1.0)
            return self.best[0]
        starts: list[ComplexArray] = []
        if order in self.known:
            starts.append(self.known[order])
        if order - 1 in self.best:
            starts.append(joined(self.best[order - 1].poles, self.additions(order - 1)[1]))
        if order - 2 in self.best:
            starts.append(joined(self.best[order - 2].poles, self.additions(order - 2)[0]))
        if order - 4 in self.best and order > LARGE_ORDER:
            more = joined(self.best[order - 4].poles, self.additions(order - 4)[0])
            starts.append(joined(more, problem.additions(more)[0]))
        trials = [polish(problem, s, 12, 1e-3) for s in starts]
        spacings = [spacing_of(problem)] if starts else ["logarithmic", "linear", "real"]
        odd = order % 2 == 1 and order > 6
        if order in self.known or (starts and (odd or order > FRESH_ORDER)):
            spacings = []
        fresh = [relocate(problem, start(problem, order, s), 8 if starts else 20) for s in spacings]
        lowest = min((t.cost for t in trials), default=np.inf)
        # a relocated start that is far behind is not worth a polish
        trials += [polish(problem, t.poles, 12, 1e-3) for t in fresh if not starts or t.cost < 2 * lowest]
        best = min(trials + fresh, key=lambda t: t.cost)
        if best.cost > problem.floor:
            best = polish(problem, best.poles, 12, 1e-4)
        self.best[order] = best
        return best

    def criterion(self, order: int) -> float:
        return self.problem.criterion(order, self.best[order].cost)

    def grow(self, lowest: int, highest: int) -> None:
        """Fit orders from 0 until, near the noise, the criterion has not improved for ``PATIENCE`` orders."""
        orders = list(range(min(highest, EVERY_ORDER) + 1))
        orders += [n for n in range(EVERY_ORDER + 1, min(highest, LARGE_ORDER) + 1) if (n - highest) % 2 == 0]
        orders += [n for n in range(LARGE_ORDER + 1, highest + 1) if (n - highest) % 4 == 0]
        orders = [n for n in orders if n >= self.problem.fewest]
        chosen = lowest
        for order in orders:
            self.fit(order)
            if order < lowest:
                continue
            if lowest not in self.best:
                chosen = lowest = order
            if self.criterion(order) < self.criterion(chosen):
                chosen = order
            near = order > LARGE_ORDER or self.best[chosen].cost <= FAR * self.noise_power()
            tired = order - chosen >= PATIENCE and near
            if tired or self.reproduced(order) or self.flat(order, lowest):
                break

    def flat(self, order: int, lowest: int) -> bool:
        """Return whether the misfit is near the noise and a dozen orders more were not worth it."""
        if order < lowest + LOOKAHEAD:
            return False
        noise = self.noise_power()
        return self.best[order].cost <= 3 * noise and order - self.choose(lowest, noise) >= LOOKAHEAD

    def reproduced(self, order: int) -> bool:
        """Return whether the misfit is no more than rounding, so that more poles cannot bring anything."""
        trial, problem = self.best[order], self.problem
        if trial.cost > 1e-6**2 * problem.total:
            return False
        return trial.cost <= problem.rounding(problem.apart(trial.poles))

    def noise_power(self) -> float:
        """Return the cost that noise alone would leave: given, or from what neighbouring misfits do not predict.

        The misfit of the largest order fitted is taken, with the degrees of freedom that it has left.
        """
        p = self.problem
        half = p.numbers / 2
        if p.known:
            return half
        top = self.best[max(self.best)]
        factor = noise_factor(p.x, p.misfit(top.poles), p.weights)
        return half * factor**2 * p.numbers / max(p.numbers - p.unknowns(top.order), 1)

    def choose(self, lowest: int, noise: float) -> int:
        """Return the order at which no larger one is worth its poles."""
        orders = [n for n in sorted(self.best) if n >= lowest]
        chosen = orders[0]
        for order in orders[1:]:
            if worthwhile(self.problem, self.best[chosen], self.best[order], noise):
                chosen = order
        return chosen

    def prune(self, order: int, lowest: int, noise: float) -> Trial:
        """Return the fit after leaving out, one by one, poles that are not worth their place or that fit one line."""
        trial = self.best[order]
        while trial.order > lowest:
            p = self.problem
            shorter = [polish(p, q, 0, 1.0) for q in _shorter(trial.poles) if q.size >= lowest]
            if not shorter:
                break
            candidate = polish(p, min(shorter, key=lambda t: p.criterion(t.order, t.cost)).poles, 30, 1e-5)
            if worthwhile(p, candidate, trial, noise):
                spikes = [k for k in single_line_poles(p, trial.poles) if trial.order - 2 >= lowest]
                if not spikes:
                    break
                candidate = polish(p, np.delete(trial.poles, [spikes[0], spikes[0] + 1]), 30, 1e-5)
            trial = candidate
            self.best[trial.order] = trial
        return trial


def worthwhile(problem: Problem, small: Trial, large: Trial, noise: float) -> bool:
    """Return whether the larger fit is worth its additional poles.

    The criterion must be lower. Where the misfit of the smaller fit is well above the noise (real structures are not
    exactly rational, and their errors are alike on neighbouring lines, so that the criterion alone never stops), each
    two poles must also take at least a third of the misfit power in excess of the noise (none while the
    fit is poor).
    """
    if problem.criterion(large.order, large.cost) >= problem.criterion(small.order, small.cost):
        return False
    noise = max(noise, problem.floor)
    before, after = small.cost - noise, large.cost - noise
    if before <= NEAR_NOISE * noise:
        return True
    share = WORTH_WHILE_GROSS if before > GROSS * problem.total else WORTH
    return after <= share ** ((large.order - small.order) / 2) * before


def _shorter(poles: ComplexArray) -> list[ComplexArray]:
    upper = np.flatnonzero(poles.imag >= 0)
    return [np.delete(poles, [k, k + 1] if poles[k].imag > 0 else [k]) for k in upper]


def single_line_poles(problem: Problem, poles: ComplexArray) -> list[int]:
    """Return the pairs (first member's index) that only one or two lines call for.

    A pair narrower than the distance of the lines is tried again without the two nearest lines: if the others do not
    need it by the criterion, it stands for errors of these lines, not for a resonance.
    """
    x = problem.x
    found: list[int] = []
    if poles.size - 2 < problem.fewest:
        return found
    for k in np.flatnonzero(poles.imag > 0):
        place = abs(poles[k])
        j = int(np.clip(np.searchsorted(x, place), 1, x.size - 1))
        if -poles[k].real > x[j] - x[j - 1]:
            continue
        weights = problem.weights.copy()
        weights[np.argsort(np.abs(x - place), kind="stable")[:2]] = 0
        rest = problem.with_weights(weights)
        with_it = polish(rest, poles, 0, 1.0)
        without = polish(rest, np.delete(poles, [k, k + 1]), 0, 1.0)
        if rest.criterion(without.order, without.cost) <= rest.criterion(with_it.order, with_it.cost):
            found.append(int(k))
    return found


def unstable_image(problem: Problem, trial: Trial) -> int:
    """Return how many poles on the right a fit free to have them would keep, where that makes the misfit a tenth.

    Relocation without reflection, from the poles of the fit and from a few poles spread over the band.
    """
    p = thinned(problem)
    best, count = weighted_cost(p.misfit(trial.poles), p.weights) / 100, 0
    few = start(p, min(max(trial.order, 1), 4), spacing_of(p))
    for poles in (trial.poles, few):
        for _ in range(6):
            poles = p.free_relocation(poles)
            right = int(np.sum(poles.real > 0))
            cost = weighted_cost(p.misfit(poles), p.weights)
            if right and cost < best:
                best, count = cost, right
    return count


def finished(problem: Problem, trial: Trial) -> Trial:
    """Return the fit polished to convergence, its poles set apart."""
    best = trial if trial.cost <= problem.floor else polish(problem, trial.poles, 100, 1e-9)
    return Trial(problem.apart(best.poles), best.cost)
