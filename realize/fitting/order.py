"""Search over orders: every order is fitted from several starts, the information criterion chooses.

Starts of order n: the best fit of order n - 1 with the one real pole, and of order n - 2 with the one pair, that lower
the cost most; and vector fitting from poles spread over the band. Each is polished by variable projection; the
cheapest is kept. So every order is at least as good as the smaller ones it contains.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from realize.fitting.problem import Problem
from realize.kernels.variable_projection import best_additions, polished
from realize.kernels.vector_fitting import ordered_poles, separated_poles, starting_poles, vector_fit

ComplexArray = NDArray[np.complex128]

#: Highest order tried by ``auto``.
HIGHEST_ORDER = 40
#: ``auto`` stops after this many orders in a row without a better criterion (two pairs).
PATIENCE = 4
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
    p = problem
    better, cost = polished(p.points, poles, p.values, p.weights, p.direct, p.vanish, iterations, tolerance)
    return Trial(better, cost)


def relocate(problem: Problem, poles: ComplexArray, iterations: int) -> Trial:
    """Return the best poles of vector fitting from a start."""
    p = problem
    return Trial(*vector_fit(p.points, poles, p.values, p.weights, p.direct, p.vanish, iterations))


def start(problem: Problem, order: int, spacing: str) -> ComplexArray:
    low, high = problem.band()
    return starting_poles(low, high if high > low else 2 * low, order, spacing)


class Search:
    """Best fits of increasing order, each warm started from the smaller ones."""

    def __init__(self, problem: Problem, known: dict[int, ComplexArray] | None = None) -> None:
        self.problem = problem
        self.known = known or {}
        self.best: dict[int, Trial] = {}
        self._additions: dict[int, tuple[ComplexArray, ComplexArray]] = {}

    def additions(self, order: int) -> tuple[ComplexArray, ComplexArray]:
        if order not in self._additions:
            p = self.problem
            self._additions[order] = best_additions(
                p.points, self.best[order].poles, p.values, p.weights, p.direct, p.vanish
            )
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
            starts.append(ordered_poles(np.concatenate([self.best[order - 1].poles, self.additions(order - 1)[1]])))
        if order - 2 in self.best:
            starts.append(ordered_poles(np.concatenate([self.best[order - 2].poles, self.additions(order - 2)[0]])))
        trials = [polish(problem, s, 20, 1e-4) for s in starts]
        spacings = [spacing_of(problem)] if starts else ["logarithmic", "linear", "real"]
        fresh = [relocate(problem, start(problem, order, s), 8 if starts else 20) for s in spacings]
        lowest = min((t.cost for t in trials), default=np.inf)
        # a relocated start that is far behind is not worth a polish
        trials += [polish(problem, t.poles, 20, 1e-4) for t in fresh if not starts or t.cost < 2 * lowest]
        best = min(trials + fresh, key=lambda t: t.cost)
        if best.cost > problem.floor:
            best = polish(problem, best.poles, 20, 1e-6)
        self.best[order] = best
        return best

    def criterion(self, order: int) -> float:
        return self.problem.criterion(order, self.best[order].cost)

    def grow(self, lowest: int, highest: int, patience: int = PATIENCE) -> int:
        """Fit orders 0 to ``highest`` until ``patience`` of them brought nothing; return the order chosen."""
        chosen = lowest
        for order in range(highest + 1):
            self.fit(order)
            if order < lowest:
                continue
            if order == lowest or self.criterion(order) < self.criterion(chosen):
                chosen = order
            if order - chosen >= patience or self.best[order].cost <= self.problem.floor:
                break
        return chosen

    def prune(self, order: int, lowest: int) -> Trial:
        """Return the fit after leaving out, one by one, poles whose absence improves the criterion."""
        trial = self.best[order]
        while trial.order > lowest:
            p = self.problem
            upper = np.flatnonzero(trial.poles.imag >= 0)
            shorter = []
            for k in upper:
                gone = [k, k + 1] if trial.poles[k].imag > 0 else [k]
                poles = np.delete(trial.poles, gone)
                if poles.size >= lowest:
                    shorter.append(polish(p, poles, 0, 1.0))
            if not shorter:
                break
            candidate = polish(p, min(shorter, key=lambda t: p.criterion(t.order, t.cost)).poles, 30, 1e-5)
            if p.criterion(candidate.order, candidate.cost) >= p.criterion(trial.order, trial.cost):
                break
            trial = candidate
            known = self.best.get(trial.order)
            if known is None or trial.cost < known.cost:
                self.best[trial.order] = trial
        return trial


def finished(problem: Problem, trial: Trial) -> Trial:
    """Return the fit polished to convergence, its poles set apart."""
    best = trial if trial.cost <= problem.floor else polish(problem, trial.poles, 100, 1e-9)
    return Trial(separated_poles(best.poles), best.cost)
