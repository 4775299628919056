"""The claim `passivity`: whether a network's model can give out more energy than it took in."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

from realize.errors import InputError, Refused
from realize.models import Model
from realize.schema import PASSIVE_KINDS, Claim, judge
from realize.verification.curves import model_in, sampled_peak
from realize.verification.views import View, view_of

ComplexArray = NDArray[np.complex128]

#: Ports times degree, to the number of ports: up to here the minors are formed exactly.
MOST_DEGREE, MOST_PORTS = 240, 6
#: Factors by which a violation found is raised until the inequality is proved.
STEPS = (1 + 2**-9, 1.008, 1.1, 3.0, 100.0)


def kind_of(model: Model) -> str:
    """Return "bounded-real" for scattering parameters, "positive-real" for other ports, '' without ports."""
    if model.ports is None:
        return ""
    return "bounded-real" if model.ports.parameter == "scattering" else "positive-real"


def passivity(model: Any, kind: str = "auto") -> Claim:
    """Return how far a model is from passive: 0 for a passive one.

    Scattering parameters are passive if they are bounded real: stable, and no singular value above 1 at any frequency.
    Impedance, admittance and hybrid parameters are passive if they are positive real: no pole on the right, those on
    the axis simple with positive semidefinite residues, and G + G^* without negative eigenvalue at any frequency.

    Parameters
    ----------
    model : Model or Conversion
        Square; sampled models on the unit circle.
    kind : str
        "bounded-real", "positive-real", or "auto": as the model's ports say.

    Returns
    -------
    Claim
        ``passivity``, relative: largest singular value less 1; or the most negative eigenvalue of (G + G^*)/2, with the
        sign turned, over the largest gain. Proved in exact arithmetic [1]_ where affordable.

    Raises
    ------
    InputError, Refused

    References
    ----------
    .. [1] B. D. O. Anderson, S. Vongpanitlerd, Network Analysis and Synthesis, Prentice-Hall 1973, chapter 2.
    """
    found = model_in(model)
    if kind == "auto":
        kind = kind_of(found)
        if not kind:
            raise InputError("a model without ports", "kind positive-real or bounded-real, or ports", field="ports")
    if kind not in PASSIVE_KINDS:
        raise InputError(f"{kind!r}", f"one of {', '.join(PASSIVE_KINDS)}, auto", field="kind")
    if found.shape[0] != found.shape[1]:
        raise Refused("passivity is a property of square responses: a port has a voltage and a current")
    return passivity_claim(found, kind, None)


def passivity_claim(model: Model, kind: str, limit: float | None) -> Claim:
    """Return the claim for a square model and a kind that is known."""
    view = view_of(model)
    if _delays_count(model, kind):
        return judge("passivity", None, limit=limit, note="dead times inside the channels: not decided")
    if view.fractions is not None and _affordable(view):
        return _exact(view, kind, limit)
    return _in_doubles(view, kind, limit)


def _delays_count(model: Model, kind: str) -> bool:
    """Return whether dead times change the answer: delays at inputs and outputs turn waves, and no more."""
    if model.dead_time is None:
        return False
    total = model.dead_time.total
    if kind == "positive-real":
        return True
    mixed = total - total[:, :1] - total[:1] + total[:1, :1]
    return bool(np.any(np.abs(mixed) > 8 * np.finfo(float).eps * np.max(total)))


def _affordable(view: View) -> bool:
    assert view.fractions is not None
    p = view.model.shape[0]
    degree = max((d.degree() for row in view.fractions for n, d in row if n), default=0)
    return p <= MOST_PORTS and degree * p * p <= MOST_DEGREE * 4


def _exact(view: View, kind: str, limit: float | None) -> Claim:
    from realize.kernels.exact import passive
    from realize.kernels.exact.graphs import continuous, in_units, middle
    from realize.kernels.exact.numbers import fraction, power_of_two

    assert view.fractions is not None
    grid: Any = view.fractions if view.period is None else continuous(view.fractions)
    matrix = passive.over_common(grid)
    if view.period is None and matrix.denominator.degree() > 0:
        matrix = passive.over_common(in_units(grid, power_of_two(middle(matrix.denominator))))
    words = ""
    if kind == "positive-real":
        matrix, words = passive.split_lossless(matrix)
    elif any(n.degree() > matrix.denominator.degree() for row in matrix.numerators for n in row):
        words = "improper"
    if not words and not passive.is_stable(matrix.denominator):
        words = "a pole that is not inside the stability region"
    if words:
        return judge("passivity", math.inf, basis="proved", limit=limit, note=f"{kind}: {words}")

    def holds(level: float) -> bool:
        at = fraction(level.as_integer_ratio())
        if kind == "bounded-real":
            at = at + 1
        return all(passive.never_negative(e) for e in passive.minor_sums(matrix, kind, at))

    if holds(0.0):
        return judge("passivity", 0.0, basis="proved", uncertainty=0.0, limit=limit, note=kind)
    worst, frequency, gain = _worst(view, kind)
    # below what doubles see: a few roundings of the gain
    start = max(worst, 4 * float(np.finfo(float).eps) * (gain if kind == "positive-real" else 1.0))
    bound = next((start * factor for factor in STEPS if holds(start * factor)), None)
    scale = gain if kind == "positive-real" else 1.0
    value = max(worst, 0.0) / scale
    return judge(
        "passivity",
        value if worst > 0 else math.nextafter(0.0, 1.0),
        basis="measured" if bound is None else "proved",
        uncertainty=None if bound is None else math.nextafter(max(bound / scale - value, 0.0), math.inf) * (1 + 1e-12),
        limit=limit,
        where={"frequency": frequency if math.isfinite(frequency) else None},
        note=kind,
    )


def _worst(view: View, kind: str) -> tuple[float, float, float]:
    """Return the largest violation found in doubles, its frequency, and the largest gain found."""
    from realize.kernels.norms import gains
    from realize.kernels.passive_frequencies import violation

    gain = max(sampled_peak(view, lambda w: gains(_finite(view.response(w)))).value, np.finfo(float).tiny)

    def size(w: np.ndarray) -> np.ndarray:
        found = violation(_finite(view.response(w)), kind)
        # raised by the gain: the search takes values that are not negative
        return np.maximum(found + 2 * gain + 2, 0.0)

    found = sampled_peak(view, size)
    exact = violation(_finite(view.response(np.array([found.frequency]))), kind)[0]
    return float(exact), found.frequency, float(gain)


def _finite(values: ComplexArray) -> ComplexArray:
    """Return the values with those at poles left out: the Hermitian part of a pole on the axis is looked at apart."""
    bad = ~np.isfinite(values).all(axis=(1, 2))
    if bad.any():
        values = values.copy()
        values[bad] = 0.0
    return values


def _in_doubles(view: View, kind: str, limit: float | None) -> Claim:
    """Return the claim from the largest singular value over all frequencies, or from samples of the Hermitian part."""
    from realize.verification.norms import largest_gain
    from realize.verification.stability import stability_claim

    if stability_claim(view.model).value != 1.0:
        return judge("passivity", None, limit=limit, note=f"{kind}: not shown to be stable in double arithmetic")
    if kind == "bounded-real":
        peak = largest_gain(view.model)
        if peak.value is None:
            return judge("passivity", math.inf, basis=peak.basis, limit=limit, note="bounded-real: an infinite gain")
        value = max(peak.value - 1.0, 0.0)
        uncertainty = None if peak.uncertainty is None else max(peak.value + peak.uncertainty - 1.0, 0.0) - value
        note = "; ".join(part for part in ("bounded-real", peak.note) if part)
        return judge(
            "passivity",
            value,
            basis=peak.basis,
            uncertainty=uncertainty,
            limit=limit,
            where=peak.where,
            note=note,
        )
    worst, frequency, gain = _worst(view, kind)
    return judge(
        "passivity",
        max(worst, 0.0) / gain,
        limit=limit,
        where={"frequency": frequency if math.isfinite(frequency) else None},
        note=f"{kind}: samples in double arithmetic",
    )
