"""Which order a reduction takes: asked for, or the smallest whose bound or whose error keeps a limit."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from realize.errors import Refused, UsageError
from realize.reduction.measure import FULL, Meter
from realize.reduction.plan import Plan
from realize.reduction.prepare import Prepared
from realize.reduction.result import Candidate, Projected

Array = NDArray[np.float64]

#: Length of the table of candidates.
CANDIDATES = 20
#: Up to this order of the source the table has errors that choose nothing: beyond they cost more than the reduction.
LISTED = 100


def states(count: int) -> str:
    """Return "1 state", "2 states", ..."""
    return f"{count} state{'' if count == 1 else 's'}"


@dataclass
class Offer:
    """A plan with what goes beyond the method: the meter, and the steady state put into the feed-through.

    Attributes
    ----------
    prepared : Prepared
    plan : Plan
    meter : Meter
    steady : bool
        The steady-state gain of what is cut goes into D.
    """

    prepared: Prepared
    plan: Plan
    meter: Meter
    steady: bool

    @property
    def kept_order(self) -> int:
        """States beside those that the plan counts."""
        return 0 if self.plan.whole_model else self.prepared.kept_order

    def hankel_index(self, count: int) -> int:
        """Return how many stable states a count stands for."""
        return max(count - (self.prepared.kept_order if self.plan.whole_model else 0), 0)

    def with_steady_state(self, part: Projected) -> tuple[Projected, float]:
        """Return the part with its steady state corrected through D, if that was asked, and the gain of the change."""
        if not self.steady:
            return part, 0.0
        change = self.meter.steady_state(part)
        if not np.all(np.isfinite(change)):
            raise Refused("the steady state cannot be kept: the result has a pole at zero frequency")
        size = float(np.linalg.norm(change, 2)) if change.size else 0.0
        return Projected(part.A, part.B, part.C, part.D_change + change, part.W, part.V), size

    def bound(self, count: int) -> float | None:
        """Return the theorem's bound of a number of states (scaled unit), None without one."""
        if self.plan.tails is None:
            return None
        tail = float(self.plan.tails[count])
        # the part itself is needed for its steady state alone
        return tail + self.with_steady_state(self.plan.outline(count))[1] if self.steady else tail

    def error(self, count: int) -> float:
        """Return the largest difference found for a number of states (scaled unit)."""
        return self.meter.error(self.with_steady_state(self.plan.outline(count))[0])


def by_order(offer: Offer, order: int, notes: list[str]) -> int:
    """Return how many stable states a result of `order` states keeps; moved to the next cut that divides nothing."""
    prepared, plan = offer.prepared, offer.plan
    kept, n = offer.kept_order, prepared.stable_order
    if order < 0:
        raise UsageError(f"an order of {order}: it is a number of states, 0 or more")
    if order < kept:
        raise Refused(
            f"an order of {order} is too small: poles that are unstable or on the boundary of stability are kept as "
            f"they are and need {states(kept)}; ask for {kept} or more"
        )
    if order < plan.least:
        raise Refused(
            f"an order of {order} is too small: the states to keep, and unstable poles or poles on the boundary of "
            f"stability that they do not fix, are {states(plan.least)}; ask for {plan.least} or more"
        )
    if plan.whole_model:
        n = prepared.scaled.A.shape[0]
    wanted = order - kept
    if wanted >= plan.available:
        if plan.available < n:
            notes.append(
                f"left out, because rounding hides what they contribute: {states(n - plan.available)}; the result "
                f"is the balanced minimal part with {states(plan.available + kept)}"
            )
        elif order >= kept + n:
            notes.append(f"nothing was cut: the result is the whole model with {states(n + kept)}, balanced")
        return plan.available
    moved = plan.next_cut(wanted)
    if moved != wanted:
        notes.append(
            f"order {order} would cut inside {plan.whole}; the cut was moved to the end of it, order {moved + kept}"
        )
    return moved


def by_bound(offer: Offer, error: float, notes: list[str]) -> int:
    """Return the smallest number of stable states whose bound is at most `error` (absolute, in the model's unit)."""
    prepared, plan = offer.prepared, offer.plan
    if plan.tails is None:
        raise UsageError("this method has no bound to choose an order by; add --measured, or give an order")
    for order in plan.cuts():
        if prepared.in_gain(float(plan.tails[order])) <= error:
            bound = offer.bound(order)
            if bound is not None and prepared.in_gain(bound) <= error:
                return order
    least = prepared.in_gain(float(plan.tails[plan.available]))
    notes.append(
        f"no order keeps the error of {error:.3g}: the states that drown in rounding count for {least:.3g}; the "
        f"balanced minimal part is the best there is"
    )
    return plan.available


def by_measured(offer: Offer, error: float, notes: list[str], *, first: int = 0, banded: bool = False) -> int:
    """Return the smallest number of stable states from `first` on whose error found is at most `error` (absolute)."""
    prepared, plan = offer.prepared, offer.plan
    values, doubt = prepared.factors.values, prepared.factors.errors
    for order in plan.cuts():
        if order < first:
            continue
        # over all frequencies no model of this order has a smaller error than the first value that is cut
        place = offer.hankel_index(order)
        least = float(values[place] - doubt[place]) if place < values.size and not banded else 0.0
        if prepared.in_gain(max(least, 0.0)) <= error and prepared.in_gain(offer.error(order)) <= error:
            return order
    notes.append(f"no order was found to keep the error of {error:.3g}; the largest there is was taken")
    return plan.available


def candidates(offer: Offer, chosen: int, *, looked: bool) -> tuple[Candidate, ...]:
    """Return up to twenty orders with bound and error: all of them, or the steepest ones beside the chosen order.

    Errors are looked for where the source has at most 100 states, or at most 300 if the order was chosen by errors
    (`looked`); beyond, the chosen order's alone, if it was chosen by them.
    """
    prepared, plan = offer.prepared, offer.plan
    allowed = sorted({*plan.cuts(), chosen})
    if len(allowed) > CANDIDATES:
        values = prepared.factors.values if plan.tails is None else -np.diff(plan.tails)
        if plan.values is not None:
            values = np.concatenate([np.full(plan.least, np.inf), plan.values])
        # the gap after an order is what speaks for it; the ends of the table and the choice are always there
        gap = {
            order: values[order] / values[order - 1]
            if plan.least < order < values.size and values[order - 1] > 0
            else 1.0
            for order in allowed
        }
        fixed = {allowed[0], allowed[-1], chosen}
        ranked = sorted((order for order in allowed if order not in fixed), key=lambda order: (gap[order], order))
        allowed = sorted(fixed | set(ranked[: CANDIDATES - len(fixed)]))
    cheap = offer.meter.order <= FULL
    all_errors = cheap and (looked or prepared.scaled.A.shape[0] <= LISTED)
    rows = []
    for order in allowed:
        found = bound = None
        if plan.tails is not None and (cheap or not offer.steady or order == chosen):
            bound = prepared.in_gain(offer.bound(order) or 0.0)
        if all_errors or (looked and order == chosen):
            found = prepared.in_gain(offer.error(order))
        rows.append(Candidate(order + offer.kept_order, bound, found))
    return tuple(rows)
