"""Poles, minimal order and stability for `inspect`: exact where that is affordable, eigenvalues in doubles beyond."""

from __future__ import annotations

from typing import Any

import numpy as np

from realize.models import MatrixFraction, SecondOrder, StateSpace
from realize.steps.inspect_zeros import listed, poles_of, smith_of
from realize.verification import View


def roots_of(view: View, cautions: list[str]) -> tuple[list[Any], list[Any] | None]:
    """Return poles of the whole model and zeros of a single channel; all that the model's own order has."""
    from realize.verification.views import double_poles, exact_fractions

    model = view.model
    p, m = model.shape
    if view.fractions is None:
        values = double_poles(model)
        cautions.append("Too large for exact arithmetic: poles are eigenvalues in double arithmetic.")
        values = values[np.lexsort((-values.imag, values.real, np.abs(values)))]
        return [[value.real, value.imag, 1] for value in values.tolist()], None
    if isinstance(model, (StateSpace, SecondOrder, MatrixFraction)):
        full = exact_fractions(model, cancel=False)[0][0][1]
        return listed(full), listed(view.fractions[0][0][0]) if p * m == 1 else None
    if p * m == 1:
        n, d = exact_fractions(model, cancel=False)[0][0]
        return listed(d), listed(n)
    counted = poles_of(view)
    if counted is not None:
        return counted, None
    merged: dict[tuple[float, float], int] = {}
    for row in view.fractions:
        for _, d in row:
            for re, im, count in listed(d):
                merged[re, im] = max(merged.get((re, im), 0), int(count))
    ordered = sorted(merged.items(), key=lambda item: (np.hypot(*item[0]), item[0][0], abs(item[0][1]), -item[0][1]))
    return [[re, im, count] for (re, im), count in ordered], None


def minimal_order_of(view: View, cautions: list[str]) -> int | None:
    """Return the exact McMillan degree, poles at infinity included; None beyond exact arithmetic."""
    if view.fractions is None:
        return None
    if view.model.shape == (1, 1):
        n, d = view.fractions[0][0]
        return max(n.degree(), d.degree(), 0)
    form = smith_of(view)
    if form is not None and form.proved:
        return int(form.degree)
    from realize.kernels.exact.order import mcmillan_degree

    found = mcmillan_degree(
        [[n for n, _ in row] for row in view.fractions], [[d for _, d in row] for row in view.fractions]
    )
    if not found.proved:
        cautions.append(
            f"The minimal order {found.order} is a rank modulo two large primes: "
            "too low only if both divide every minor."
        )
    return found.order


def stability_of(view: View, poles: list[Any]) -> bool | None:
    edge = view.period is not None
    if view.fractions is not None:
        from realize.kernels.exact.roots import inside_left_half_plane, inside_unit_circle
        from realize.verification.views import exact_fractions

        inside = inside_unit_circle if edge else inside_left_half_plane
        if isinstance(view.model, (StateSpace, SecondOrder, MatrixFraction)):
            polynomials = [exact_fractions(view.model, cancel=False)[0][0][1]]
        else:
            polynomials = [d for row in view.fractions for _, d in row]
        return all(d.degree() < 1 or inside(d) == d.degree() for d in polynomials)
    values = np.array([complex(re, im) for re, im, _ in poles])
    return bool(np.all(np.abs(values) < 1) if edge else np.all(values.real < 0))
