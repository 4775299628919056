"""Which order a reduction takes: asked for, or the smallest whose bound keeps an error."""

from __future__ import annotations

from realize.errors import Refused, UsageError
from realize.reduction.prepare import Prepared
from realize.reduction.result import Candidate

#: Length of the table of candidates.
CANDIDATES = 20


def states(count: int) -> str:
    """Return "1 state", "2 states", ..."""
    return f"{count} state{'' if count == 1 else 's'}"


def by_order(prepared: Prepared, order: int, notes: list[str]) -> int:
    """Return how many stable states a result of `order` states keeps; moved to the end of a group of equal values."""
    kept, n = prepared.kept_order, prepared.stable_order
    if order < 0:
        raise UsageError(f"an order of {order}: it is a number of states, 0 or more")
    if order < kept:
        raise Refused(
            f"an order of {order} is too small: poles that are unstable or on the boundary of stability are kept as "
            f"they are and need {states(kept)}; ask for {kept} or more"
        )
    wanted = order - kept
    if wanted >= prepared.available:
        if prepared.available < n:
            notes.append(
                f"left out, because rounding hides what they contribute: {states(n - prepared.available)}; the result "
                f"is the balanced minimal part with {states(prepared.available + kept)}"
            )
        elif order >= kept + n:
            notes.append(f"nothing was cut: the result is the whole model with {states(n + kept)}, balanced")
        return prepared.available
    moved = wanted
    while not prepared.cut_allowed(moved):
        moved += 1
    if moved != wanted:
        notes.append(
            f"order {order} would cut inside a group of equal Hankel singular values; the cut was moved to the end of "
            f"the group, order {moved + kept}"
        )
    return min(moved, prepared.available)


def by_error(prepared: Prepared, error: float, notes: list[str]) -> int:
    """Return the smallest number of stable states whose bound is at most `error` (absolute, in the model's unit)."""
    if not error >= 0:
        raise UsageError(f"an error of {error}: it must not be negative")
    for order in range(prepared.available + 1):
        if prepared.cut_allowed(order) and prepared.in_gain(float(prepared.tails[order])) <= error:
            return order
    least = prepared.in_gain(float(prepared.tails[prepared.available]))
    notes.append(
        f"no order keeps the error of {error:.3g}: the states that drown in rounding count for {least:.3g}; the "
        f"balanced minimal part is the best there is"
    )
    return prepared.available


def candidates(prepared: Prepared, chosen: int) -> tuple[Candidate, ...]:
    """Return up to twenty orders with their bounds: all of them, or the steepest ones beside the chosen order."""
    allowed = [order for order in range(prepared.available + 1) if prepared.cut_allowed(order)]
    if len(allowed) > CANDIDATES:
        values = prepared.factors.values
        # the gap after an order is what speaks for it; the ends of the table and the choice are always there
        gap = {
            order: values[order] / values[order - 1] if 0 < order < values.size and values[order - 1] > 0 else 1.0
            for order in allowed
        }
        fixed = {allowed[0], allowed[-1], chosen}
        ranked = sorted((order for order in allowed if order not in fixed), key=lambda order: (gap[order], order))
        allowed = sorted(fixed | set(ranked[: CANDIDATES - len(fixed)]))
    kept = prepared.kept_order
    return tuple(Candidate(order + kept, prepared.in_gain(float(prepared.tails[order]))) for order in allowed)
