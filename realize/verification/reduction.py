"""Claims about a reduction."""

from __future__ import annotations

import numpy as np

from realize.models import StateSpace
from realize.schema import Claim, judge
from realize.verification.difference import linf_error


def reduction_claims(
    source: StateSpace,
    result: StateSpace,
    *,
    bound: float | None,
    limit: float | None,
    limits: dict[str, float],
    note: str = "",
) -> list[Claim]:
    """Return reduction error, bound and steady-state error.

    Parameters
    ----------
    bound : float or None
        The method's bound, rounding term included; None for methods without one.
    limit : float or None
        What was asked of the error (absolute).
    limits : dict
        Limits by claim name; they come before `limit`.
    """
    error = linf_error(source, result, name="reduction-error", limit=limits.get("reduction-error", limit))
    if error.uncertainty is None and bound is not None and error.value is not None and not error.infinite:
        # the theorem's bound covers what hides between the samples
        error = judge(
            error.name,
            error.value,
            limit=error.limit,
            unit=error.unit,
            basis=error.basis,
            where=error.where,
            uncertainty=max(bound - error.value, 0.0),
            relative=error.relative,
            note=error.note,
        )
    claims = [error]
    relative = None
    if bound is not None and error.relative and error.value:
        relative = bound * error.relative / error.value
    claims.append(
        judge(
            "reduction-bound",
            bound,
            unit="absolute",
            basis="bounded",
            limit=limits.get("reduction-bound", limit),
            uncertainty=0.0,
            relative=relative,
            note=note,
        )
    )
    claims.append(_steady_state(source, result, limits.get("steady-state-error")))
    return claims


def _steady_state(source: StateSpace, result: StateSpace, limit: float | None) -> Claim:
    point = np.ones(1, dtype=complex) if source.time.sampled else np.zeros(1, dtype=complex)
    first, second = source.rational_part(point)[0], result.rational_part(point)[0]
    if not np.all(np.isfinite(first)):
        return judge("steady-state-error", None, limit=limit, note="the plant has a pole at zero frequency")
    size = float(np.linalg.norm(first))
    difference = float(np.linalg.norm(second - first))
    value = difference / size if size > 0 else (0.0 if difference == 0 else np.inf)
    from realize.verification.fragility import fragility

    zero = np.zeros(1)
    rounding = 16 * sum(fragility(model, zero) or 0.0 for model in (source, result))
    return judge("steady-state-error", value, limit=limit, uncertainty=rounding, where={"frequency": 0.0})
