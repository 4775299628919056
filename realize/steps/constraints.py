"""Constraints of a fit: from options to one structure."""

from __future__ import annotations

from typing import Any

import numpy as np

from realize.errors import InputError, UsageError
from realize.fitting import Fit, Structure
from realize.models import FrequencyResponse, Model
from realize.schema import ESTIMATED_DEAD_TIMES, PASSIVE_KINDS, Claim
from realize.verification import constraints as verified
from realize.verification.passivity import kind_of, passivity_claim


def structure_of(
    source: FrequencyResponse,
    *,
    relative_degree: Any,
    integrators: Any,
    fixed_poles: Any,
    fixed_zeros: Any,
    steady_state_gain: Any,
    symmetric: bool,
    allow_unstable: bool,
    dead_time: Any,
) -> Structure:
    """Return the structure that options ask for, for data of this shape.

    Raises
    ------
    UsageError, InputError
    """
    p, m = source.shape
    if symmetric and p != m:
        raise InputError(f"{p} outputs and {m} inputs", "a square response for a symmetric model", field="response")
    return Structure(
        relative_degree=_count(relative_degree, "relative-degree"),
        integrators=_count(integrators, "integrators"),
        fixed_poles=_roots(fixed_poles, "fixed-poles"),
        fixed_zeros=_roots(fixed_zeros, "fixed-zeros"),
        steady_state_gain=_gain(steady_state_gain, (p, m)),
        stable=not allow_unstable,
        symmetric=bool(symmetric),
        dead_time=dead_time if dead_time in ESTIMATED_DEAD_TIMES else "",
    )


def _count(value: Any, name: str) -> int:
    if value is None:
        return 0
    if isinstance(value, bool) or not isinstance(value, (int, np.integer)) or value < 0:
        raise UsageError(f"--{name} {value!r} is not a whole number of zero or more")
    return int(value)


def _roots(value: Any, name: str) -> tuple[complex, ...]:
    """Return complex numbers from numbers or [re, im]."""
    if value is None:
        return ()
    found = []
    for entry in [value] if np.ndim(value) == 0 else list(value):
        try:
            found.append(complex(entry) if np.ndim(entry) == 0 else complex(*(float(part) for part in entry)))
        except (TypeError, ValueError):
            raise UsageError(f"--{name}: {entry!r} is neither a number nor [real, imaginary]") from None
    return tuple(found)


def _gain(value: Any, shape: tuple[int, int]) -> np.ndarray | None:
    if value is None:
        return None
    try:
        gain = np.array(value, dtype=float)
    except (TypeError, ValueError):
        raise UsageError(f"--steady-state-gain {value!r} is no number and no matrix") from None
    if gain.size == shape[0] * shape[1] and 1 in shape:
        # one row or one column: nothing can be confused
        gain = gain.reshape(shape)
    if gain.shape != shape:
        rows = f"{gain.shape[0]} x {gain.shape[1]}" if gain.ndim == 2 else f"{gain.size} number(s)"
        raise UsageError(f"--steady-state-gain has {rows}, and the response {shape[0]} output(s) x {shape[1]} input(s)")
    if not np.all(np.isfinite(gain)):
        raise UsageError("--steady-state-gain is not finite; an infinite gain is --integrators")
    return gain


def passive_kind(source: FrequencyResponse, asked: str | None, dead_time: Any) -> str:
    """Return what passive means for these data, '' where it is not asked.

    Raises
    ------
    UsageError
    """
    if asked is None:
        return ""
    if asked not in (*PASSIVE_KINDS, "auto"):
        raise UsageError(f"--passive {asked!r}; there are: {', '.join(PASSIVE_KINDS)}, auto")
    own = kind_of(source) if source.ports is not None else ""
    if asked == "auto" and not own:
        raise UsageError(
            "the data do not say what their ports are: --passive positive-real for impedance or admittance, "
            "--passive bounded-real for scattering"
        )
    if asked != "auto" and own and asked != own:
        parameter = "" if source.ports is None else source.ports.parameter
        raise UsageError(f"--passive {asked} of {parameter} parameters; passive is {own} there")
    kind = own if asked == "auto" else asked
    if source.shape[0] != source.shape[1]:
        raise UsageError("--passive needs as many outputs as inputs: a port has a voltage and a current")
    if kind == "positive-real" and (dead_time is not None or source.dead_time is not None):
        raise UsageError("a positive real response has no dead time; leave one of --passive and --dead-time out")
    return kind


def enforced(
    found: Fit, structure: Structure, w: Any, kind: str, period: float | None, fixed_order: bool
) -> tuple[Fit, dict[str, Any]]:
    """Return the fit made passive, and what that took.

    An order that is not fixed leaves room for poles outside of the band where they spare the response.
    """
    from dataclasses import asdict

    from realize.fitting.passive import made_passive, passive_with_room

    options: dict[str, Any] = {
        "period": period,
        "symmetric": structure.symmetric,
        "pinned": structure.steady_state_gain is not None,
    }
    if fixed_order:
        better, change = made_passive(found, w, kind, **options)
        added = 0
    else:
        better, change, added = passive_with_room(found, w, kind, **options)
    return better, asdict(change) | {"poles_added": added}


def constraint_claims(structure: Structure, result: Model, limits: dict[str, float], passive: str = "") -> list[Claim]:
    """Return one claim for each constraint, checked on the returned model; passivity for all that has ports too."""
    claims = []

    def limit(name: str) -> float | None:
        return verified.limit_of(name, limits)

    if structure.relative_degree:
        claims.append(verified.relative_degree_claim(result, structure.relative_degree, limit("relative-degree")))
    origin = 1.0 if result.time.sampled else 0.0
    poles = [*structure.fixed_poles, *[complex(origin)] * structure.integrators]
    if poles:
        claims.append(verified.fixed_poles_claim(result, poles, limit("fixed-poles")))
    if structure.fixed_zeros:
        claims.append(verified.fixed_zeros_claim(result, structure.fixed_zeros, limit("fixed-zeros")))
    if structure.steady_state_gain is not None:
        claims.append(verified.steady_state_claim(result, structure.steady_state_gain, limit("steady-state-gain")))
    if structure.symmetric:
        claims.append(verified.symmetry_claim(result, limit("symmetry")))
    if passive:
        claims.append(passivity_claim(result, passive, limit("passivity")))
    elif result.ports is not None and result.shape[0] == result.shape[1]:
        claims.append(passivity_claim(result, kind_of(result), limits.get("passivity")))
    return claims
