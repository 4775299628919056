"""The method ``auto``: quick starts from the subspace method where they reach the noise, else every start there is."""

from __future__ import annotations

from dataclasses import replace

from realize.fitting.order import LARGE_ORDER, Search, Trial
from realize.fitting.problem import Problem
from realize.fitting.proposed import Known, Propose, ProposedSearch, at_noise, on_all_lines, search_by
from realize.fitting.registry import Method, Outcome
from realize.fitting.subspace import proposer
from realize.fitting.thinning import thinned
from realize.fitting.vector_fitting import LONGEST_LADDER, fit_by, poles_by_relocation


class EverySearch(ProposedSearch):
    """Best fits of increasing order from all starts: proposed poles, smaller orders and what they miss, fresh poles."""

    #: highest order that the method proposes poles for
    proposable = LARGE_ORDER

    def fit(self, order: int) -> Trial:
        """Fit one order from every start."""
        found = Search.fit(self, order)
        if 0 < order <= self.proposable and found.cost > self.problem.floor:
            found = min(found, self.proposed(order), key=lambda t: t.cost)
            self.best[order] = found
        return found


def fit(problem: Problem, lowest: int, highest: int, direct_auto: bool) -> Outcome:
    """Return the best fit with an order between ``lowest`` and ``highest``.

    1. Poles of the subspace method are polished: of the order that is asked for, or of every fourth order until one
       misses the data by no more than their noise (what neighbouring misfits do not predict of each other), and then
       of the orders around it.
    2. Where none reaches the noise (structures that are not rational of this order, or a start that was not good
       enough), orders are fitted one after the other from every start there is: poles of the subspace method, the
       smaller orders with the poles that lower their misfit most, vector fitting from poles over the band. The
       cheapest of each order is kept.
    """
    thorough = problem.structure is not None

    def searched(problem: Problem, lowest: int, highest: int, known: Known | None) -> Search:
        nonlocal thorough
        if known is None and not thorough:
            quick = search_by(proposer, problem, lowest, proposed_to(lowest, highest), None, grow=False)
            if quick is not None and any(at_noise(problem, quick.best[n]) for n in sorted(quick.best, reverse=True)):
                return quick
            thorough = True
            return climbed(problem, lowest, highest, None, quick)
        if thorough or known is None:
            return climbed(problem, lowest, highest, known, None)
        return on_all_lines(known, problem, 8)

    outcome = fit_by(searched, problem, lowest, highest, direct_auto)
    return replace(outcome, method="vector-fitting" if thorough else "subspace")


def proposed_to(lowest: int, highest: int) -> int:
    """Return the highest order that the subspace method is asked for: its cost grows with the cube of that."""
    return max(lowest, min(highest, LARGE_ORDER))


def climbed(problem: Problem, lowest: int, highest: int, known: Known | None, quick: Search | None) -> Search:
    """Return fits of all orders from every start; of one order beyond the longest ladder from fresh poles alone."""
    few = thinned(problem)
    propose: Propose = proposer(few, proposed_to(lowest, highest)) if known is None else lambda order: []
    search = EverySearch(few, known, propose)
    search.proposable = proposed_to(lowest, highest)
    if lowest == highest and highest > LONGEST_LADDER:
        search.best[highest] = min(poles_by_relocation(few, highest), search.proposed(highest), key=lambda t: t.cost)
    else:
        search.grow(lowest, highest)
    full = search if few is problem else on_all_lines({n: t.poles for n, t in search.best.items()}, problem, 4)
    for order, trial in (quick.best if quick is not None else {}).items():
        if order in full.best and trial.cost < full.best[order].cost:
            full.best[order] = trial
    return full


AUTOMATIC = Method(
    name="auto",
    says="poles of the subspace method where they reach the noise, else the best of all starts, order by order",
    source="McKelvey, Akcay & Ljung 1996; Gustavsen & Semlyen 1999",
    fit=fit,
)
