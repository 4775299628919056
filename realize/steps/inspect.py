"""The verb `inspect`."""

from __future__ import annotations

from typing import Any

import numpy as np

from realize.errors import Refused
from realize.models import FrequencyResponse, ImpulseResponse, Model, TimeRecord, mark
from realize.steps.conversion import Conversion, model_of
from realize.steps.findings import Finding, data_findings, findings_of, record_findings, remarks_of
from realize.steps.hankel import hankel_singular_values
from realize.steps.inspect_poles import minimal_order_of, roots_of, stability_of
from realize.steps.inspect_structure import damping_and_frequency, indices_of, relative_degrees, scaling_of
from realize.steps.inspect_zeros import listed, zeros_of
from realize.steps.receipts import fragility_of, probe_frequencies, refusing_singular
from realize.steps.structure import descriptor_of, modes_of
from realize.verification import view_of


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
        ``hankel_singular_values`` (stable models) with ``hankel_errors`` and ``hankel_basis``, ``damping`` and
        ``frequency`` (rad/s) of each of the ``poles``, ``controllability_indices``, ``observability_indices``,
        ``relative_degree`` [output][input], ``scaling``, ``fragility``, ``digest``; ``findings``, each with
        ``subject``, ``what`` and ``advice``, and the same as ``cautions``. What is not known is None.
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
    if model.ports is not None:
        record["ports"] = {"parameter": model.ports.parameter} | (
            {} if model.ports.reference is None else {"reference": list(model.ports.reference)}
        )
    if isinstance(model, FrequencyResponse):
        return record | _data(model)
    if isinstance(model, ImpulseResponse):
        return record | _samples(model)
    if isinstance(model, TimeRecord):
        return record | _record(model)
    cautions: list[str] = []
    view = view_of(model)
    poles, zeros = roots_of(view, cautions)
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
    record["minimal_order"] = minimal_order_of(view, cautions)
    record["stable"] = stability_of(view, poles)
    record |= {"hankel_singular_values": None, "hankel_errors": None, "hankel_basis": None}
    record |= _hankel(model, bool(record["stable"]), cautions)
    record["damping"], record["frequency"] = damping_and_frequency(view, poles)
    record["controllability_indices"], record["observability_indices"] = indices_of(view)
    record["relative_degree"] = relative_degrees(view)
    record["scaling"] = scaling_of(model)
    record["fragility"] = fragility_of(model, probe_frequencies(model))
    return record | _told([*findings_of(model, record, view), *(Finding("method", text) for text in cautions)])


def _told(findings: list[Finding]) -> dict[str, Any]:
    return {
        "findings": [finding._asdict() for finding in findings],
        "cautions": [finding.sentence for finding in findings],
    }


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


def _samples(model: ImpulseResponse) -> dict[str, Any]:
    return {
        "step_of_time": model.period,
        "samples": int(model.samples.shape[0]),
        "largest_value": float(np.abs(model.samples).max()),
    } | _told(remarks_of(model))


def _record(model: TimeRecord) -> dict[str, Any]:
    return {
        "step_of_time": model.period,
        "samples": int(model.input.shape[0]),
        "largest_input": np.abs(model.input).max(axis=0).tolist(),
        "largest_output": np.abs(model.output).max(axis=0).tolist(),
    } | _told([*remarks_of(model), *record_findings(model)])


def _data(model: FrequencyResponse) -> dict[str, Any]:
    w = model.radians
    return {
        "lines": int(w.size),
        "lowest_frequency": float(w[0]),
        "highest_frequency": float(w[-1]),
        "has_deviation": model.deviation is not None,
        "has_coherence": model.coherence is not None,
        "largest_gain": float(np.abs(model.response).max()),
    } | _told([*remarks_of(model), *data_findings(model)])
