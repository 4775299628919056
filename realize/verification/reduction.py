"""Claims about a reduction."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from realize.kernels.norms import gains
from realize.models import Model, StateSpace
from realize.schema import Claim, judge
from realize.schema.records import Basis
from realize.verification.bands import whole_band
from realize.verification.difference import linf_error
from realize.verification.fragility import fragility_at
from realize.verification.pair import frobenius
from realize.verification.proof import square_root
from realize.verification.search import Band, largest, seeds
from realize.verification.views import view_of

Array = NDArray[np.float64]


def reduction_claims(
    source: Model,
    plain: StateSpace,
    result: StateSpace,
    *,
    bound: float | None,
    limit: float | None,
    limits: dict[str, float],
    bound_limit: float | None = None,
) -> list[Claim]:
    """Return reduction error, bound and steady-state error, all against the source as it was given.

    Parameters
    ----------
    source : Model
        What the user gave.
    plain : StateSpace
        The ordinary state model that was reduced; the source itself, unless it had to be converted first.
    bound : float or None
        The method's bound on the difference of plain and result; None for methods without one.
    limit : float or None
        What was asked of the error (absolute).
    bound_limit : float or None
        What was asked of the bound.
    limits : dict
        Limits by claim name; they come before `limit`.
    """
    asked = limits.get("reduction-error", limit)
    # the theorem's bound says already what hides between samples, unless more is asked than it grants
    confirm = bound is None or not math.isfinite(bound) or (asked is not None and bound > asked)
    error = linf_error(source, result, name="reduction-error", limit=asked, confirm=confirm)
    basis: Basis = "bounded"
    notes: list[str] = []
    if bound is not None:
        bound += _rounding(result)
        if plain is not source:
            lost = linf_error(source, plain)
            if lost.infinite or lost.value is None:
                bound = math.inf
            else:
                bound += lost.value + (lost.uncertainty or 0.0)
                if lost.uncertainty is None:
                    basis = "measured"
                    notes.append("what the conversion to states cost is measured, not bounded")
    reach = math.inf if error.infinite or error.value is None else error.value
    if bound is not None and error.uncertainty is not None and reach + error.uncertainty > bound:
        # the error is known better than the bound: rounding went beyond its estimate
        if reach > bound:
            bound = reach + error.uncertainty
            notes.append("raised to the error that was found: rounding went beyond its estimate")
    elif bound is not None and error.uncertainty is None and basis == "bounded" and reach <= bound:
        # the theorem's bound covers what hides between the samples
        error = judge(
            error.name,
            error.value,
            limit=error.limit,
            unit=error.unit,
            basis=error.basis,
            where=error.where,
            uncertainty=bound - reach,
            relative=error.relative,
            note=error.note,
        )
    elif bound is not None and reach > bound:
        bound, basis = reach, "measured"
        notes.append("raised to the error that was found")
    relative = None
    if bound is not None and error.relative and error.value:
        relative = bound * error.relative / error.value
    claim = judge(
        "reduction-bound",
        bound,
        unit="absolute",
        basis=basis,
        limit=limits.get("reduction-bound", None if bound is None else bound_limit),
        uncertainty=0.0 if basis == "bounded" else None,
        relative=relative,
        note="; ".join(notes),
    )
    return [error, claim, _steady_state(source, result, limits.get("steady-state-error"))]


def band_claim(source: Model, result: Model, band: tuple[float, float], limit: float | None) -> Claim:
    """Return the largest gain of the difference found over a band (rad/s), relative to the source's largest there."""
    one, two = view_of(source), view_of(result)
    left_out = whole_band(one).left_out
    inside = Band(max(band[0], 1e-300), band[1], band[0] == 0, left_out)
    w = np.unique(np.concatenate([seeds(inside, one.poles, two.rough_poles), inside.keep(np.array(inside.edges))]))

    def difference(x: Array) -> Array:
        return gains(two.response(x) - one.response(x))

    value, where = largest(difference, w, inside, rounds=5)
    gain, _ = largest(lambda x: gains(one.response(x)), w, inside, rounds=5)
    return judge(
        "band-error",
        value,
        unit="absolute",
        limit=limit,
        where={"frequency": where},
        relative=value / gain if 0 < gain < math.inf else None,
        note=f"from {band[0]:.6g} to {band[1]:.6g} rad/s, the largest value found",
    )


def _rounding(result: StateSpace) -> float:
    """Return the largest product of the result's fragility and gain: what one rounding of its numbers can do."""
    view = view_of(result)
    band = whole_band(view, margin=1.0)
    w = seeds(Band(band.low, band.high, False, band.left_out), view.poles)
    if w.size > 60:
        w = w[np.unique(np.linspace(0, w.size - 1, 60).astype(int))]
    with np.errstate(all="ignore"):
        gain = np.linalg.norm(result.rational_part(result.time.points(w)), axis=(1, 2))
        change = fragility_at(result, w) * gain
    return float(change[np.isfinite(change)].max(initial=0.0))


def _steady_state(source: Model, result: StateSpace, limit: float | None) -> Claim:
    first, second = view_of(source), view_of(result)
    name, place = "steady-state-error", {"frequency": 0.0}
    if first.fractions is not None and second.fractions is not None:
        point = 0 if first.period is None else 1
        pairs = [
            (a, b)
            for one, two in zip(first.fractions, second.fractions, strict=True)
            for a, b in zip(one, two, strict=True)
        ]
        if any(d(point) == 0 for (_, d), _ in pairs):
            return judge(name, None, limit=limit, note="the plant has a pole at zero frequency")
        if any(d(point) == 0 for _, (_, d) in pairs):
            return judge(name, math.inf, limit=limit, basis="proved", note="the result has a pole at zero frequency")
        values = [(n1(point) / d1(point), n2(point) / d2(point)) for (n1, d1), (n2, d2) in pairs]
        size = sum(a * a for a, _ in values)
        difference = sum((b - a) * (b - a) for a, b in values)
        value = 0.0 if not difference else square_root(difference / size) if size else math.inf
        return judge(name, value, limit=limit, basis="proved", uncertainty=value * 2.0**-50, where=place)
    at = np.ones(1, dtype=complex) if source.time.sampled else np.zeros(1, dtype=complex)
    with np.errstate(all="ignore"):
        here, there = source.rational_part(at)[0], result.rational_part(at)[0]
    if not np.all(np.isfinite(here)):
        return judge(name, None, limit=limit, note="the plant has a pole at zero frequency")
    size, difference = (float(frobenius(np.abs(part)[None])[0]) for part in (here, there - here))
    value = difference / size if size > 0 else (0.0 if difference == 0 else math.inf)
    return judge(name, value, limit=limit, where=place, note="evaluated in double arithmetic")
