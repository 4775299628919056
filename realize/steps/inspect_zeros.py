"""The zeros of a model for `inspect`: transmission, decoupling and invariant zeros, finite and at infinity."""

from __future__ import annotations

from typing import Any

import numpy as np

from realize.models import StateSpace
from realize.verification.views import View

#: Most states, and most inputs or outputs, for which the Smith-McMillan form is formed exactly (about a second).
LARGEST_ORDER, LARGEST_SIDE = 60, 10
#: Two zeros in doubles count as one below this difference, relative to their size.
SAME = 1e-6


def listed(polynomial: Any) -> list[list[float]]:
    """Return the roots of an exact polynomial as [re, im, multiplicity]."""
    from realize.kernels.exact.roots import roots

    if polynomial.degree() < 1:
        return []
    return [[root.value.real, root.value.imag, root.multiplicity] for root in roots(polynomial)]


def smith_of(view: View) -> Any:
    """Return the Smith-McMillan form of a model, formed once; None where it would take too long."""
    if view.fractions is None:
        return None
    p, m = view.model.shape
    degree = max((max(n.degree(), d.degree()) for row in view.fractions for n, d in row), default=0)
    if (view.model.order or 0) > LARGEST_ORDER * max(p, m) or degree > LARGEST_ORDER or max(p, m) > LARGEST_SIDE:
        return None
    from realize.kernels.exact.smith import smith_mcmillan

    return view.model.remembered("smith", lambda: smith_mcmillan(view.fractions or []))


def zeros_of(view: View, cautions: list[str]) -> dict[str, Any]:
    """Return what `inspect` says about zeros.

    Returns
    -------
    dict
        ``transmission_zeros`` [re, im, multiplicity] of the transfer matrix, ``normal_rank``, ``zeros_at_infinity`` and
        ``poles_at_infinity`` (orders), and for state models ``invariant_zeros`` of the system matrix and
        ``decoupling_zeros`` (``input``, ``output``, ``input_output``). None where unknown.
    """
    record: dict[str, Any] = dict.fromkeys(
        ("transmission_zeros", "zeros_at_infinity", "poles_at_infinity", "normal_rank")
    )
    model = view.model
    form = smith_of(view)
    if form is not None:
        record["transmission_zeros"] = listed(form.zero_polynomial)
        record["zeros_at_infinity"] = list(form.zeros_at_infinity)
        record["poles_at_infinity"] = list(form.poles_at_infinity)
        record["normal_rank"] = form.normal_rank
        if not form.proved:
            cautions.append(
                "Transmission zeros come from random combinations of rows and columns: "
                "too many only with a probability of about 1e-9."
            )
        if isinstance(model, StateSpace):
            from realize.kernels.exact.smith import decoupling_polynomials

            A, B, C, D, E = (model.exact(name) for name in "ABCDE")
            found, invariant = decoupling_polynomials(A, B, C, D, E, form)
            record["invariant_zeros"] = listed(invariant)
            record["decoupling_zeros"] = {
                "input": listed(found.input),
                "output": listed(found.output),
                "input_output": listed(found.both),
            }
        return record
    if isinstance(model, StateSpace):
        record |= _in_doubles(model, cautions)
    return record


def _in_doubles(model: StateSpace, cautions: list[str]) -> dict[str, Any]:
    """Return the same from the staircase reduction of the system pencil in doubles."""
    from realize.kernels.zeros import NormalRank, structure_at_infinity, zeros

    n, (p, m) = model.A.shape[0], model.shape
    nothing = np.zeros((0, n)), np.zeros((0, m)), np.zeros((n, 0)), np.zeros((p, 0))
    record: dict[str, Any] = {"invariant_zeros": None, "decoupling_zeros": None}
    try:
        unreached = zeros(model.A, model.B, nothing[0], nothing[1], model.E)
        unseen = zeros(model.A, nothing[2], model.C, nothing[3], model.E)
        record["decoupling_zeros"] = {"input": _pairs(unreached), "output": _pairs(unseen), "input_output": None}
        invariant = zeros(model.A, model.B, model.C, model.D, model.E)
    except NormalRank:
        cautions.append("The system matrix is singular for every s within rounding: no zeros in double arithmetic.")
        return record
    except np.linalg.LinAlgError:
        cautions.append("The zeros could not be found in double arithmetic: the iteration did not end.")
        return record
    record["invariant_zeros"] = _pairs(invariant)
    record["transmission_zeros"] = _pairs(_without(invariant, np.concatenate([unreached, unseen])))
    if model.E is None:
        record["normal_rank"], record["zeros_at_infinity"] = structure_at_infinity(model.A, model.B, model.C, model.D)
        record["poles_at_infinity"] = []
    cautions.append("Zeros are those of a staircase reduction of the system matrix in double arithmetic.")
    return record


def _pairs(values: Any) -> list[list[float]]:
    ordered = values[np.lexsort((-values.imag, np.abs(values.imag), values.real, np.abs(values)))]
    return [[value.real, value.imag, 1] for value in ordered.tolist()]


def _without(values: Any, hidden: Any) -> Any:
    """Return the zeros without those that belong to hidden modes, each taken once."""
    left = list(values.tolist())
    for mode in hidden.tolist():
        if left:
            near = min(range(len(left)), key=lambda k: abs(left[k] - mode))
            if abs(left[near] - mode) <= SAME * max(abs(mode), abs(left[near])):
                left.pop(near)
    return np.array(left, dtype=complex)


def poles_of(view: View) -> list[list[float]] | None:
    """Return the poles of a transfer matrix as often as its McMillan degree counts them; None where unknown."""
    form = smith_of(view)
    return None if form is None else listed(form.pole_polynomial)
