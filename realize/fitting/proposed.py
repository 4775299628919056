"""Search over orders where a method proposes poles for each order: polish, compare, and mend what is missing."""

from __future__ import annotations

from collections.abc import Callable
from typing import Literal, overload

import numpy as np
from numpy.typing import NDArray

from realize.fitting.noise import unpredicted
from realize.fitting.order import FAR, Search, Trial, joined, polish
from realize.fitting.problem import Problem
from realize.fitting.registry import Outcome
from realize.fitting.thinning import thinned_to
from realize.fitting.vector_fitting import LONGEST_LADDER, fit_by
from realize.kernels.vector_fitting import ordered_poles, residues_of

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

#: What a method gives for a problem: from an order to the starts for it, with poles in excess where it has them.
Propose = Callable[[int], list[ComplexArray]]
Proposer = Callable[[Problem, int], Propose]
Known = dict[int, ComplexArray]
#: An order that lowers the cost of the smaller ones by less than this share is started from their poles as well.
LITTLE = 0.02
#: A misfit power within this factor of the noise is at the noise: the information criterion decides on the rest.
AT_NOISE = 1.15
UNEVEN = 2.0
#: Fewer lines than this tell nothing about noise by their neighbours.
FEWEST_NEIGHBOURS = 24
#: Most exchanges of the least useful pole for the one that brings most.
EXCHANGES = 6
#: Smaller orders that would do are looked for up to this many poles times channels.
REMARKED = 160
#: First look: every so many orders. Around the order where the misfit reaches the noise every one is tried.
STRIDE, BELOW, ABOVE = 4, 4, 4
#: Lines that the search works on, for each pole of the largest order and at least.
LINES_PER_POLE, FEWEST_LINES = 24, 600


class ProposedSearch(Search):
    """Best fits of orders, each polished from what a method proposes for it."""

    def __init__(self, problem: Problem, known: Known | None, propose: Propose) -> None:
        super().__init__(problem, known)
        self.propose = propose

    def proposed(self, order: int) -> Trial:
        """Return the best polish of what the method proposes for an order, or of the poles known for it."""
        problem = self.problem
        starts = [self.known[order]] if order in self.known else []
        if order == 0:
            starts = [np.zeros(0, complex)]
        elif not starts:
            starts = [shortened(problem, poles, order) for poles in self.propose(order)]
        trials = [polish(problem, s, 12, 1e-3) for s in starts if s.size == order]
        if not trials:
            return super().fit(order)
        best = min(trials, key=lambda t: t.cost)
        if best.cost > problem.floor and order not in self.known:
            best = polish(problem, best.poles, 12, 1e-4)
        self.best[order] = best
        return best

    def fit(self, order: int) -> Trial:
        """Fit one order; where it brings little, also from the smaller orders with the poles that bring most."""
        best = self.proposed(order)
        smaller = min((self.best[n].cost for n in (order - 1, order - 2) if n in self.best), default=np.inf)
        if order > 0 and best.cost > max((1 - LITTLE) * smaller, self.problem.floor):
            best = min(best, super().fit(order), key=lambda t: t.cost)
            self.best[order] = best
        return best

    def look(self, lowest: int, highest: int) -> bool:
        """Fit every few orders, then those around the first at the noise; return whether there is one."""
        coarse = sorted({lowest, highest, *range(lowest, highest, STRIDE)})
        first = next((n for n in coarse if at_noise(self.problem, self.proposed(n))), None)
        if first is None:
            return False
        for order in range(max(lowest, first - STRIDE - BELOW), min(highest, first + ABOVE) + 1):
            if order not in self.best:
                self.proposed(order)
            if self.reproduced(order):
                # larger ones can only fit the rounding
                self.best = {n: trial for n, trial in self.best.items() if n <= order}
                break
        return True


def at_noise(problem: Problem, trial: Trial) -> bool:
    """Return whether a fit misses the data by no more than their noise, or than rounding.

    The noise is what neighbouring misfits do not predict: its median, or, up to ``UNEVEN`` times that, its mean. They
    differ where the weights are not in proportion to the noise; the mean alone would take a narrow resonance for noise.
    """
    if trial.cost <= problem.floor:
        return True
    alone = Search(problem)
    alone.best[trial.order] = trial
    noise = alone.noise_power()
    if trial.cost <= AT_NOISE * noise or alone.reproduced(trial.order):
        return True
    if problem.known or trial.cost > UNEVEN * noise or problem.points.size < FEWEST_NEIGHBOURS:
        return False
    missed = unpredicted(problem.x, problem.misfit(trial.poles) * problem.weights)
    share = problem.numbers / max(problem.numbers - problem.unknowns(trial.order), 1)
    return trial.cost <= AT_NOISE * problem.numbers / 2 * float(np.mean(np.abs(missed) ** 2)) * share


def mended(problem: Problem, trial: Trial) -> Trial:
    """Return a fit whose least useful poles are exchanged for those that bring most, while that lowers the cost."""
    for _ in range(EXCHANGES):
        if trial.order < problem.fewest + 2 or at_noise(problem, trial):
            break
        size = _contributions(problem, trial.poles)
        pairs = np.flatnonzero(trial.poles.imag > 0)
        real = np.flatnonzero(trial.poles.imag == 0)
        rest = []
        if pairs.size:
            k = int(pairs[np.argmin(size[pairs])])
            rest.append(np.delete(trial.poles, [k, k + 1]))
        if real.size >= 2:
            rest.append(np.delete(trial.poles, real[np.argsort(size[real])[:2]]))
        # without its pole the others settle first, so that what is missing shows
        settled = [polish(problem, q, 4, 1e-3) for q in rest]
        base = min(settled, key=lambda t: t.cost).poles
        better = polish(problem, joined(base, problem.additions(base)[0]), 16, 1e-4)
        if better.cost > (1 - LITTLE) * trial.cost:
            break
        trial = better
    return trial


def search_with(proposer: Proposer, problem: Problem, lowest: int, highest: int, direct_auto: bool) -> Outcome:
    """Return the best fit with an order between ``lowest`` and ``highest``, started from what a method proposes."""

    def searched(problem: Problem, lowest: int, highest: int, known: Known | None) -> Search:
        return search_by(proposer, problem, lowest, highest, known)

    return fit_by(searched, problem, lowest, highest, direct_auto)


@overload
def search_by(
    proposer: Proposer, problem: Problem, lowest: int, highest: int, known: Known | None, grow: Literal[True] = True
) -> Search: ...
@overload
def search_by(
    proposer: Proposer, problem: Problem, lowest: int, highest: int, known: Known | None, grow: bool
) -> Search | None: ...
def search_by(
    proposer: Proposer, problem: Problem, lowest: int, highest: int, known: Known | None, grow: bool = True
) -> Search | None:
    """Return fits of orders: of the one that is asked for, or of those around the first at the noise, or of all.

    Without ``grow``: None where no order reaches the noise.
    """
    if known is not None:
        return on_all_lines(known, problem, 8)
    lowest = max(lowest, problem.fewest)
    keep = max(LINES_PER_POLE * highest, FEWEST_LINES)
    few = thinned_to(problem, keep) if problem.points.size > 1.5 * keep else problem
    search = ProposedSearch(few, None, proposer(few, highest))
    if lowest == highest:
        search.best[highest] = mended(few, search.fit(highest))
        affordable = highest <= LONGEST_LADDER and few.channels * highest <= REMARKED
        if affordable and at_noise(few, search.best[highest]) and search.best[highest].cost > few.floor:
            # a smaller order that would do is remarked
            search.prune(highest, few.fewest, search.noise_power())
    elif not search.look(lowest, highest):
        if not grow:
            return None
        search.grow(lowest, highest)
    return search if few is problem else on_all_lines({n: t.poles for n, t in search.best.items()}, problem, 4)


def on_all_lines(known: Known, problem: Problem, iterations: int) -> Search:
    """Return fits of all lines from poles found on some of them, or with other weights.

    Orders that miss the data by many times the misfit of the best one get one step only: they are not chosen.
    """
    full = Search(problem)
    if len(known) == 1:
        full.best = {order: polish(problem, poles, iterations, 1e-3) for order, poles in known.items()}
        return full
    for order, poles in known.items():
        full.best[order] = polish(problem, poles, 1, 1e-3)
    lowest = min(t.cost for t in full.best.values())
    for order, trial in full.best.items():
        if trial.cost <= FAR * max(lowest, problem.floor):
            full.best[order] = polish(problem, trial.poles, iterations, 1e-3)
    return full


def shortened(problem: Problem, poles: ComplexArray, order: int) -> ComplexArray:
    """Return so many of the poles, stable where the problem asks for it: those that contribute most to the response.

    Known poles of the problem are left out first. Where only pairs are left and one pole is too much, the least of
    them becomes one real pole of its size.
    """
    stable = problem.structure is None or problem.structure.stable
    low, high = problem.band()
    inside = np.abs(poles) < 2.0**20 * high
    poles = ordered_poles(poles[inside & np.isfinite(poles)], stable)
    if problem.structure is not None:
        poles = _without(poles, problem.structure.known.poles)
    while poles.size > order:
        size = _contributions(problem, poles)
        upper = np.flatnonzero(poles.imag >= 0)
        ranked = upper[np.argsort(size[upper], kind="stable")]
        least = int(ranked[0])
        pair = poles[least].imag > 0
        if not pair:
            poles = np.delete(poles, least)
        elif poles.size - 2 >= order:
            poles = np.delete(poles, [least, least + 1])
        else:
            single = [int(k) for k in ranked if poles[k].imag == 0]
            if single:
                poles = np.delete(poles, single[0])
            else:
                rest = np.delete(poles, [least, least + 1])
                poles = ordered_poles(np.append(rest, -np.clip(abs(poles[least]), low, high)), stable)
    return poles


def _without(poles: ComplexArray, known: ComplexArray) -> ComplexArray:
    """Return the poles without the one nearest to each known pole."""
    left = poles
    for pole in known[known.imag >= 0]:
        same = np.flatnonzero((left.imag > 0) == (pole.imag > 0))
        same = same[left[same].imag >= 0]
        if same.size:
            k = int(same[np.argmin(np.abs(left[same] - pole))])
            left = np.delete(left, [k, k + 1] if left[k].imag > 0 else [k])
    return left


def _contributions(problem: Problem, poles: ComplexArray) -> Array:
    """Return the largest weighted part of each pole (with its conjugate) in the response over lines and channels."""
    p = problem
    residues, _, _ = residues_of(p.points, poles, p.values, p.weights, True, np.inf)
    size = np.zeros(poles.size)
    for k in np.flatnonzero(poles.imag >= 0):
        part = residues[k] / (p.points[:, None] - poles[k])
        if poles[k].imag > 0:
            part = part + residues[k + 1] / (p.points[:, None] - poles[k + 1])
        size[k] = np.max(np.abs(p.weights * part))
    return size
