"""The verb `inspect`."""

from __future__ import annotations

from typing import Any

import numpy as np

from realize.errors import Refused
from realize.models import FrequencyResponse, ImpulseResponse, MatrixFraction, Model, SecondOrder, StateSpace, mark
from realize.steps.conversion import Conversion, model_of
from realize.steps.hankel import hankel_singular_values
from realize.steps.inspect_zeros import listed, poles_of, smith_of, zeros_of
from realize.steps.receipts import FRAGILE, fragility_of, probe_frequencies, refusing_singular
from realize.steps.structure import descriptor_of, modes_of
from realize.verification import View, view_of

#: Poles this far apart in size, fastest over slowest, are worth a word.
STIFF = 1e9
#: A pole and a zero closer than this, relative to their size, are worth a word.
NEAR = 1e-6


@refusing_singular()
def inspect(model: Model | Conversion) -> dict[str, Any]:
    """Say what a model is: order, minimal order, poles and zeros with multiplicities, stability, and what is wrong.

    Returns
    -------
    dict
        ``kind``, ``order``, ``minimal_order``, ``inputs``, ``outputs``, ``time``, ``poles`` and ``zeros`` as
        [re, im, multiplicity] (several channels: transmission zeros; those of each channel are ``channel_zeros``), what
        `inspect_zeros.zeros_of` says (``transmission_zeros``, ``zeros_at_infinity``, ``normal_rank`` ...),
        ``modes`` of a second-order model, index and counts of a ``descriptor``, ``stable``,
        ``hankel_singular_values`` (stable models) with ``hankel_errors`` and ``hankel_basis``, ``fragility``,
        ``digest``, ``cautions``. What is not known is None.
    """
    model = model_of(model)
    p, m = model.shape
    record: dict[str, Any] = {
        "kind": model.kind,
        "order": model.order,
        "minimal_order": None,
        "inputs": [{"name": s.name, "unit": s.unit} for s in model.inputs],
        "outputs": [{"name": s.name, "unit": s.unit} for s in model.outputs],
        "time": {"domain": model.time.domain} | ({"period": model.time.seconds} if model.time.sampled else {}),
        "digest": mark(model).digest,
        "steps": [receipt.step for receipt in model.receipts],
    }
    if model.dead_time is not None:
        record["dead_time"] = model.dead_time.total.tolist()
    if isinstance(model, FrequencyResponse):
        return record | _data(model)
    if isinstance(model, ImpulseResponse):
        return record | _samples(model)
    cautions: list[str] = []
    view = view_of(model)
    poles, zeros = _roots(view, cautions)
    record["poles"] = poles
    matrix_zeros = zeros_of(view, cautions)
    record["zeros"] = zeros if p * m == 1 else matrix_zeros["transmission_zeros"]
    record |= matrix_zeros
    modes = modes_of(model, poles)
    if modes is not None:
        record["modes"] = modes
    descriptor = descriptor_of(model)
    if descriptor is not None:
        record["descriptor"] = descriptor
    if p * m > 1 and view.fractions is not None:
        record["channel_zeros"] = [[listed(view.fractions[i][j][0]) for j in range(m)] for i in range(p)]
    record["minimal_order"] = _minimal_order(view, cautions)
    record["stable"] = _stable(view, poles)
    record |= {"hankel_singular_values": None, "hankel_errors": None, "hankel_basis": None}
    record |= _hankel(model, bool(record["stable"]), cautions)
    value = fragility_of(model, probe_frequencies(model))
    record["fragility"] = value
    _remarks(model, record, view, cautions)
    if value is not None and value > FRAGILE:
        cautions.append(f"One rounding of the model's own numbers moves its response by up to {value:.1e} of its size.")
    return record | {"cautions": cautions}


def _roots(view: View, cautions: list[str]) -> tuple[list[Any], list[Any] | None]:
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


def _minimal_order(view: View, cautions: list[str]) -> int | None:
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


def _stable(view: View, poles: list[Any]) -> bool | None:
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


def _hankel(model: Model, stable: bool, cautions: list[str]) -> dict[str, Any]:
    if not stable:
        return {}
    try:
        found = hankel_singular_values(model)
    except Refused as error:
        cautions.append(f"No Hankel singular values: {error}")
        return {}
    if found.note:
        cautions.append(f"Hankel singular values: {found.note}.")
    return {
        "hankel_singular_values": found.values.tolist(),
        "hankel_errors": found.errors.tolist(),
        "hankel_basis": found.basis,
    }


def _remarks(model: Model, record: dict[str, Any], view: View, cautions: list[str]) -> None:
    order, minimal = record["order"], record["minimal_order"]
    if minimal is not None and order is not None and minimal < order:
        cautions.append(
            f"{order - minimal} of {order} poles are not seen at the output: the minimal order is {minimal}."
        )
    if record["stable"] is False:
        cautions.append("Not stable: at least one pole is on or beyond the edge of stability.")
    dynamics = view.poles
    sizes = dynamics.frequency[dynamics.frequency > 0]
    if sizes.size and sizes.max() / sizes.min() > STIFF:
        cautions.append(f"Time scales are {sizes.max() / sizes.min():.1e} apart, fastest over slowest pole.")
    light = dynamics.damping[(dynamics.damping < 1e-3) & (dynamics.frequency > 0)]
    if light.size:
        cautions.append(f"{light.size} poles have a damping ratio below 0.001.")
    if model.shape == (1, 1) and view.fractions is not None:
        zeros, poles = view.channel_roots[0][0]
        if zeros.s.size and poles.s.size:
            gap, size = np.abs(zeros.s[:, None] - poles.s[None, :]), np.abs(poles.s)[None, :]
            close = int(np.sum(np.any(gap < NEAR * size, axis=1)))
            if close:
                cautions.append(
                    f"{close} zeros lie within {NEAR:g} of a pole, relative to its size: nearly cancelling."
                )
    if isinstance(model, StateSpace) and model.order:
        from realize.kernels.response import balanced_states

        before = np.abs(model.A[model.A != 0])
        A, _, _, _ = balanced_states(model.A, model.B, model.C, model.E)
        after = np.abs(A)
        if before.size and np.linalg.norm(model.A) > 1e4 * np.linalg.norm(after):
            cautions.append("Badly scaled states: a change of units would make the entries of A far more alike.")
    if model.beyond_doubles:
        cautions.append(
            f"{len(model.beyond_doubles)} numbers are beyond the range of doubles; they are kept as decimals."
        )


def _samples(model: ImpulseResponse) -> dict[str, Any]:
    return {
        "step_of_time": model.period,
        "samples": int(model.samples.shape[0]),
        "largest_value": float(np.abs(model.samples).max()),
        "cautions": [],
    }


def _data(model: FrequencyResponse) -> dict[str, Any]:
    w = model.radians
    cautions = []
    if model.deviation is None and model.coherence is None:
        cautions.append("No deviation or coherence: a fit has to estimate the noise itself.")
    return {
        "lines": int(w.size),
        "lowest_frequency": float(w[0]),
        "highest_frequency": float(w[-1]),
        "has_deviation": model.deviation is not None,
        "has_coherence": model.coherence is not None,
        "largest_gain": float(np.abs(model.response).max()),
        "cautions": cautions,
    }
