"""The way from the measurement to a model: the chain of receipts, and whether it is whole."""

from __future__ import annotations

from typing import Any

from realize.models import Model, digest
from realize.schema import Receipt
from realize.steps.conversion import Conversion, model_of

#: Steps after which errors are counted anew: what came before is not the same response.
RESTARTS = ("fit", "sample")
#: The claim that says how far a step moved the response, relative to its source.
MEASURES = {"convert": "response-error", "reduce": "reduction-error"}


def history(model: Model | Conversion) -> dict[str, Any]:
    """Return the steps that led to a model, with the error that has accumulated and where the chain is broken.

    Relative errors compose as the product of (1 + e) minus 1, each with its uncertainty; a fit or a sampling restarts
    the count. A result whose digest is not that of the next step's source, or of the model itself, was changed by
    other means in between.

    Returns
    -------
    dict
        ``kind``, ``digest``, ``history`` (one entry a step: ``step``, ``method``, ``source``, ``result``, ``measure``,
        ``error``, ``accumulated_error``, ``failed``), ``accumulated_error`` (None where a step has no bound),
        ``edited`` (words for each break in the chain).
    """
    model = model_of(model)
    receipts = list(model.receipts)
    rows, edited = [], []
    total: float | None = 0.0
    for k, receipt in enumerate(receipts):
        if receipt.step in RESTARTS:
            total = 0.0
        name, error = _error(receipt)
        if name:
            total = None if error is None or total is None else (1 + total) * (1 + error) - 1
        rows.append(
            {
                "step": receipt.step,
                "method": receipt.method,
                "source": {"kind": receipt.source.kind, "order": receipt.source.order},
                "result": {"kind": receipt.result.kind, "order": receipt.result.order},
                "measure": name or None,
                "error": error,
                "accumulated_error": total,
                "failed": [claim.name for claim in receipt.failed],
            }
        )
        if k and receipts[k - 1].result.digest != receipt.source.digest:
            edited.append(f"between step {k} ({receipts[k - 1].step}) and step {k + 1} ({receipt.step})")
    own = digest(model)
    if receipts and receipts[-1].result.digest != own:
        edited.append(f"after the last step ({receipts[-1].step})")
    return {"kind": model.kind, "digest": own, "history": rows, "accumulated_error": total, "edited": edited}


def _error(receipt: Receipt) -> tuple[str, float | None]:
    """Return the name of the claim that counts and what its relative value may be at most; None without a bound."""
    name = MEASURES.get(receipt.step, "")
    claim = next((claim for claim in receipt.claims if claim.name == name), None)
    if claim is None:
        return "", None
    value = claim.value if claim.unit == "relative" else claim.relative
    if value is None or claim.infinite or claim.uncertainty is None:
        return name, None
    if not claim.value:
        return name, 0.0 if claim.unit == "relative" or not claim.uncertainty else None
    return name, value * (1 + claim.uncertainty / claim.value)
