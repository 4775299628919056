"""When a reduced model licenses a controller for the full plant."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from realize.models import Model, StateSpace
from realize.schema import Claim, judge
from realize.verification.curves import minors_affordable, sampled_peak
from realize.verification.feedback import UNITS, chordal_distance, gap_claim, same_outer_delays
from realize.verification.views import view_of

Array = NDArray[np.float64]

#: Up to this order of the plant, and this many channels, the nu-gap itself is computed; else the error bounds it.
EXACT_ORDER, EXACT_CHANNELS = 24, 4


def gap_of_reduction(
    plant: Model, result: StateSpace, error: Claim, bound: float | None, kept: int, marginal: int
) -> Claim:
    """Return the nu-gap of a plant and its reduced model, or what it is at most.

    For a difference that is stable, with the unstable part kept, nu-gap <= L-infinity norm of the difference: kappa at
    every frequency is at most the largest singular value of the difference there [1]_, and along P + t dP no pole
    crosses the axis, so that a norm below 1 keeps the winding number.

    Parameters
    ----------
    plant : Model
    result : StateSpace
        Both with the weights applied.
    error : Claim
        L-infinity norm of their difference.
    bound : float or None
        A bound on it, rounding included.
    kept, marginal : int
        Poles kept as they are, and those of them on the boundary of stability.

    Returns
    -------
    Claim
        ``nu-gap``: proved where it is computed exactly, bounded by the error, or measured.

    References
    ----------
    .. [1] G. Vinnicombe, Uncertainty and Feedback, Imperial College Press (2001), chapter 3, from memory.
    """
    if not same_outer_delays(plant, result):
        return judge("nu-gap", None, note="not available: dead times differ between channels")
    # the same object where there is nothing to take off: what it remembers is not made again
    single = tuple(model if model.dead_time is None else model.with_(dead_time=None) for model in (plant, result))
    small = (plant.order or 0) <= EXACT_ORDER and plant.shape[0] * plant.shape[1] <= EXACT_CHANNELS
    if small and all(minors_affordable(view_of(model)) for model in single):
        exact = gap_claim(*single)
        if exact.basis == "proved" and exact.value is not None:
            return exact
    reaches: list[float] = [] if bound is None or not math.isfinite(bound) else [bound]
    if error.value is not None and error.uncertainty is not None and error.basis != "measured":
        reaches.append(error.value + error.uncertainty)
    poles = np.linalg.eigvals(result.A) if result.A.size else np.zeros(0)
    outside = int(np.count_nonzero(np.abs(poles) >= 1 if plant.time.sampled else poles.real >= 0))
    one, two = (view_of(model) for model in single)
    # kappa at a frequency is never above the nu-gap
    # the bound covers what a coarser look misses
    large = isinstance(one.model, StateSpace) and one.model.large_response() is not None
    other = single[1]

    def small_response(w: Array) -> NDArray[np.complex128]:
        # the response of a large plant has no more digits than doubles
        return other.rational_part(other.time.points(w)) if large else two.response(w)

    found = sampled_peak(one, lambda w: chordal_distance(one.response(w), small_response(w)), two, rounds=1)
    where = {"frequency": found.frequency if math.isfinite(found.frequency) else None}
    if reaches and marginal == 0 and outside == kept:
        reach = min(1.0, *reaches)
        value = min(found.value, reach)
        hidden = float(np.nextafter(reach - value, np.inf)) if reach > value else 0.0
        note = f"at most the L-infinity norm of the difference; {UNITS}"
        return judge("nu-gap", value, basis="bounded", uncertainty=hidden, where=where, note=note)
    return judge("nu-gap", found.value, where=where, note=f"if the winding numbers are equal, not checked; {UNITS}")


def widened(claim: Claim, more: float | None) -> Claim:
    """Return a claim about a model that stands for another one which may be that far away (None: not known)."""
    if more == 0.0 or claim.value is None:
        return claim
    if more is None or claim.uncertainty is None:
        return judge(claim.name, claim.value, unit=claim.unit, limit=claim.limit, where=claim.where, note=claim.note)
    value, hidden = max(claim.value - more, 0.0), claim.uncertainty + 2 * more
    basis = "bounded" if claim.basis == "proved" else claim.basis
    return judge(
        claim.name,
        value,
        unit=claim.unit,
        basis=basis,
        limit=claim.limit,
        uncertainty=hidden,
        where=claim.where,
        note=claim.note,
        relative=claim.relative,
    )


@dataclass(frozen=True)
class Licence:
    """Whether there is a licence, the margin it asks for, and the sentence."""

    given: bool
    margin: float | None
    sentence: str


def licence(gap: Claim, *, weighted: bool, dead_time: bool) -> Licence:
    """Return the licence that a nu-gap gives: only on proved or bounded values, and with the weights stated."""
    if gap.value is None:
        return Licence(False, None, "No controller is licensed: the nu-gap is not available.")
    reach = float(np.nextafter(gap.value + (gap.uncertainty or 0.0), np.inf))
    if gap.basis == "measured" and gap.uncertainty is None:
        return Licence(False, None, "No controller is licensed: the nu-gap is measured, not bounded.")
    if dead_time:
        return Licence(False, None, "No controller is licensed: the plant has dead time.")
    if not weighted:
        return Licence(
            False,
            None,
            "No controller is licensed: the nu-gap depends on the units, so state --input-weight and --output-weight.",
        )
    if reach >= 1:
        return Licence(False, None, "No controller is licensed: the nu-gap may be as large as 1.")
    return Licence(
        True,
        reach,
        f"Any controller whose stability margin b(P, K) with this reduced model exceeds {reach:.6g}, both taken with "
        "the stated input and output weights, stabilises the full plant.",
    )
