"""The verb `compare`."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import msgspec
import numpy as np

from realize.errors import InputError, Refused
from realize.models import FrequencyResponse, Model, mark
from realize.schema import Claim, judge
from realize.steps.conversion import Conversion, model_of
from realize.steps.receipts import refusing_singular
from realize.steps.reduce import states_of
from realize.verification import Pair, view_of
from realize.verification.conversion import channel_error, dead_time_difference, peak_error, response_error
from realize.verification.difference import h2_error, linf_error
from realize.verification.feedback import gap_claim
from realize.verification.misfit import data_claims
from realize.verification.views import whatever_it_costs


@refusing_singular()
def compare(
    reference: Model | Conversion,
    *others: Model | Conversion,
    band: tuple[float, float] | None = None,
    certify: bool = False,
    names: Sequence[str] = (),
) -> dict[str, Any]:
    """Measure the discrepancy of models from the first one.

    Parameters
    ----------
    reference, others : Model or Conversion
        Parametric models or data; the claims take the first as the source. Against data, they hold at its lines.
    band : (low, high), optional
        Frequencies that count, rad/s: of data, the lines inside; of two parametric models, the claims are then measured
        over this band instead of those of their definitions.
    certify : bool
        Prove the claims whatever it costs.
    names : sequence of str, optional
        What to call them.

    Returns
    -------
    dict
        The claims of the first comparison by name (``response-error``, ``peak-error``, ``linf-error``, ``h2-error``,
        ``nu-gap``, or misfits for data), ``reference`` and ``other``; all of them in ``comparisons``.
    """
    if not others:
        raise InputError("one model", "at least two models or data sets to compare")
    models = [model_of(reference), *(model_of(other) for other in others)]
    labels = list(names) or [f"model {k}" for k in range(len(models))]
    with whatever_it_costs(certify):
        rows = [
            _one(models[0], other, band, labels[0], label) for other, label in zip(models[1:], labels[1:], strict=True)
        ]
    return rows[0] | {"comparisons": rows}


def _one(first: Model, second: Model, band: tuple[float, float] | None, a: str, b: str) -> dict[str, Any]:
    if first.shape != second.shape:
        raise InputError(
            f"{second.shape[0]} outputs and {second.shape[1]} inputs",
            f"{first.shape[0]} and {first.shape[1]}, as in {a}",
            file=b,
        )
    if first.time.domain != second.time.domain or (
        first.time.sampled and first.time.exact_period != second.time.exact_period
    ):
        raise Refused(f"{a} and {b} have different time bases; sample one of them like the other first")
    record: dict[str, Any] = {
        "a": a,
        "b": b,
        "reference": msgspec.to_builtins(mark(first)),
        "other": msgspec.to_builtins(mark(second)),
    }
    return record | {claim.name: msgspec.to_builtins(claim) for claim in _claims(first, second, band, a, b)}


def _claims(first: Model, second: Model, band: tuple[float, float] | None, a: str, b: str) -> list[Claim]:
    if isinstance(first, FrequencyResponse) and isinstance(second, FrequencyResponse):
        return _both_data(first, second, band, a, b)
    if isinstance(first, FrequencyResponse):
        return _against_data(first, second, band, first)
    if isinstance(second, FrequencyResponse):
        return _against_data(second, first, band, first)
    if band is not None or dead_time_difference(first, second) > 0:
        return _at_many_frequencies(first, second, band)
    pair = Pair(view_of(first), view_of(second))
    claims = [response_error(pair)]
    if first.shape != (1, 1):
        claims.append(channel_error(pair))
    claims += [peak_error(pair), linf_error(first, second), _h2(first, second), gap_claim(first, second)]
    return claims


def _h2(first: Model, second: Model) -> Claim:
    found = h2_error(first, second)
    if found is None:
        try:
            found = h2_error(states_of(first)[0], states_of(second)[0])
        except Refused as error:
            return judge("h2-error", None, unit="absolute", note=str(error))
    assert found is not None
    return found


def _at_many_frequencies(first: Model, second: Model, chosen: tuple[float, float] | None) -> list[Claim]:
    """Compare as evaluated, dead times included: over a band that was asked for, or where different dead times let the
    difference turn for ever."""
    from realize.verification.bands import whole_band
    from realize.verification.pair import frobenius
    from realize.verification.search import Band, largest, seeds

    view, other = view_of(first), view_of(second)
    left_out = whole_band(view).left_out
    if chosen is None:
        inside, band = whole_band(view, margin=1.0), whole_band(view)
        note = "dead times differ: the difference keeps turning above the band"
    else:
        inside = band = Band(max(chosen[0], 1e-300), chosen[1], chosen[0] == 0, left_out)
        note = f"from {chosen[0]:.6g} to {chosen[1]:.6g} rad/s, as asked"
    w = np.unique(np.concatenate([seeds(band, view.poles, other.poles), inside.edges]))
    if not inside.zero:
        w = w[w > 0]

    def difference(x: np.ndarray) -> np.ndarray:
        points = first.time.points(x)
        with np.errstate(invalid="ignore", over="ignore"):
            return frobenius(np.abs(first.evaluate(points) - second.evaluate(points)))

    def size(x: np.ndarray) -> np.ndarray:
        return frobenius(np.abs(first.evaluate(first.time.points(x))))

    def relative(x: np.ndarray) -> np.ndarray:
        above, below = difference(x), size(x)
        with np.errstate(divide="ignore", invalid="ignore"):
            return np.where(above == 0, 0.0, above / below)

    worst, at = largest(relative, inside.keep(w), inside)
    top, where = largest(difference, w, band)
    gain, _ = largest(size, w, band)
    return [
        judge("response-error", worst, where={"frequency": at}, note=note),
        judge("peak-error", _over(top, gain), where={"frequency": where}, note=note),
    ]


def _selected(data: FrequencyResponse, band: tuple[float, float] | None) -> np.ndarray:
    from realize.steps.fit import _lines

    return _lines(data, band)


def _against_data(
    data: FrequencyResponse, model: Model, band: tuple[float, float] | None, source: Model
) -> list[Claim]:
    keep = _selected(data, band)
    w = data.radians[keep]
    with np.errstate(all="ignore"):
        theirs = model.evaluate(model.time.points(w))
    return _line_claims(data.response[keep], theirs, w, source is data) + data_claims(data, model, {}, keep)


def _both_data(
    first: FrequencyResponse, second: FrequencyResponse, band: tuple[float, float] | None, a: str, b: str
) -> list[Claim]:
    one, two = first.radians, second.radians
    if one.size != two.size or np.any(np.abs(one - two) > 1e-9 * np.abs(one)):
        from realize.estimation.runs import ratio_of_units

        hint = ratio_of_units(one, two)
        if hint:
            raise InputError(f"frequencies {hint}", f"the frequencies of {a}, in the same unit", file=b)
        raise Refused(f"{a} and {b} have different frequencies; fit a model to one of them and compare with that")
    keep = _selected(first, band)
    return _line_claims(first.response[keep], second.response[keep], one[keep], True)


def _over(value: float, size: float) -> float:
    """Return value / size; infinite where only the size is zero."""
    return value / size if size > 0 else (np.inf if value > 0 else 0.0)


def _line_claims(data: np.ndarray, other: np.ndarray, w: np.ndarray, data_is_source: bool) -> list[Claim]:
    source = data if data_is_source else other
    difference = np.linalg.norm(other - data, axis=(1, 2))
    size = np.linalg.norm(source, axis=(1, 2))
    gain = np.linalg.svd(other - data, compute_uv=False)[:, 0]
    note = "at the data's lines"
    with np.errstate(divide="ignore", invalid="ignore"):
        relative = np.where(difference == 0, 0.0, difference / size)
    worst, top, high = int(np.argmax(relative)), int(np.argmax(difference)), int(np.argmax(gain))
    peak = size.max()
    rounding = 1e-12

    def claim(name: str, value: float, k: int, unit: str = "relative") -> Claim:
        return judge(
            name, value, unit=unit, where={"frequency": float(w[k])}, note=note, uncertainty=rounding * (1 + abs(value))
        )

    return [
        claim("response-error", float(relative[worst]), worst),
        claim("peak-error", _over(float(difference[top]), float(peak)), top),
        claim("linf-error", float(gain[high]), high, "absolute"),
    ]
