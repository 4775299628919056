"""Assemble the receipt of a step."""

from __future__ import annotations

import time
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from functools import cache
from typing import Any

import msgspec
import numpy as np

from realize._version import __version__
from realize.errors import Refused
from realize.models import FrequencyResponse, Model, is_data, mark
from realize.schema import CLAIMS, Claim, Receipt, SecondOpinion, judge
from realize.steps.conversion import Conversion
from realize.steps.second_opinion import Later, Opinion
from realize.verification import fragility, view_of
from realize.verification.bands import thin_grid, whole_band

CLOSED_LOOP = (
    "Check the closed loop on the full plant model, and on the hardware with limits in place, "
    "before relying on this model."
)
SINGULAR = (
    "the pencil sE - A is singular: det(sE - A) is zero for every s, so the model has no transfer function; "
    "check the rows of E and A that belong together"
)
#: Fragility above which the receipt points to another kind.
FRAGILE = 1e-6


@contextmanager
def refusing_singular() -> Iterator[None]:
    """Turn the discovery that det(sE - A) is zero for every s into a refusal, wherever it is made."""
    try:
        yield
    except ValueError as error:
        from realize.kernels.exact.pencils import SingularPencil

        if isinstance(error, SingularPencil):
            raise Refused(SINGULAR) from None
        raise


@cache
def versions() -> dict[str, str]:
    """Return the versions of this package and of what it computes with."""
    import platform
    from importlib.metadata import version

    return {"realize": __version__, "python": platform.python_version()} | {
        name: version(name) for name in ("numpy", "scipy", "python-flint")
    }


def fragility_of(model: Model, frequency: np.ndarray) -> float | None:
    """Return the fragility over the frequencies, None for data."""
    return None if is_data(model) else fragility(model, frequency)


def probe_frequencies(model: Model, count: int = 40) -> np.ndarray:
    """Return up to `count` frequencies (rad/s) over the dynamics of a model, none at a pole on the axis."""
    if isinstance(model, FrequencyResponse):
        w = model.radians[model.radians > 0]
    else:
        view = view_of(model)
        w = whole_band(view, margin=1.0).keep(thin_grid(view))
        w = w[w > 0]
    if w.size > count:
        w = w[np.arange(count) * (w.size - 1) // (count - 1)]
    return w


def fragility_cautions(values: dict[str, float | None], result: Model) -> list[str]:
    """Return words where the doubles of source or result cannot carry the response."""
    cautions = []
    source, after = values.get("source"), values.get("result")
    if source is not None and source > FRAGILE:
        cautions.append(
            "The source itself is fragile: one rounding of its numbers moves its response "
            f"by up to {source:.1e} of its size."
        )
    if after is not None and after > FRAGILE and after > 10 * (source or 0.0):
        cautions.append(
            f"Doubles hold this plant badly as {result.kind}: one rounding moves its response "
            f"by up to {after:.1e} of its size. "
            "Keep it as state-space (cascade), sections, zero-pole-gain or pole-residue."
        )
    return cautions


def with_limits(claims: list[Claim], limits: dict[str, float]) -> list[Claim]:
    """Return the claims with every limit asked for: judged where a step did not, open where there is no such claim."""
    judged = [
        judge(
            claim.name,
            float("inf") if claim.infinite else claim.value,
            limit=limits[claim.name],
            unit=claim.unit,
            basis=claim.basis,
            where=claim.where,
            uncertainty=claim.uncertainty,
            relative=claim.relative,
            note=claim.note,
        )
        if claim.limit is None and claim.name in limits
        else claim
        for claim in claims
    ]
    have = {claim.name for claim in claims}
    return judged + [
        judge(name, None, limit=limit, unit=CLAIMS[name].unit, note="this step could not make the claim for this model")
        for name, limit in limits.items()
        if name not in have
    ]


def plain(value: Any) -> Any:
    """Return nested data with Python's own numbers in place of numpy's."""
    if isinstance(value, np.generic):
        return value.item()
    if isinstance(value, dict):
        return {name: plain(entry) for name, entry in value.items()}
    return [plain(entry) for entry in value] if isinstance(value, (list, tuple)) else value


def _plain_claim(claim: Claim) -> Claim:
    """Return the claim with Python's own numbers in place of numpy's."""
    changed = {
        field: plain(value)
        for field in ("value", "limit", "uncertainty", "holds", "relative")
        if isinstance(value := getattr(claim, field), np.generic)
    }
    if any(isinstance(value, (np.generic, dict, list, tuple)) for value in claim.where.values()):
        changed["where"] = plain(claim.where)
    return msgspec.structs.replace(claim, **changed) if changed else claim


def _arbiter(claims: list[Claim], by: str) -> str:
    """Return who is right where the second opinion disagrees: exact arithmetic decides when it can."""
    judged = [claim for claim in claims if claim.name in ("response-error", "peak-error") and claim.basis == "proved"]
    if not judged:
        return "Nothing here is proved: find out which of the two is right before relying on either."
    if all(claim.holds for claim in judged if claim.limit is not None):
        return f"Exact arithmetic proves this result right, so {by or 'the library'} is wrong here."
    return "Exact arithmetic proves that this result is off by what the claims say."


def finish(
    step: str,
    method: str,
    route: Sequence[str],
    source: Model,
    result: Model,
    claims: list[Claim],
    *,
    started: float,
    cautions: Sequence[str] = (),
    opinion: Opinion | Later | None = None,
    limits: dict[str, float] | None = None,
    details: dict[str, Any] | None = None,
    digits: int | None = None,
) -> Conversion:
    """Return the conversion with its receipt, the model carrying the chain.

    Parameters
    ----------
    started : float
        ``time.perf_counter()`` at the start of the step.
    opinion : optional
        Waits for the second opinion about the result, or asks for it where the claims leave something open.
    limits : dict, optional
        Limits by claim name that were asked for; none of them is passed over in silence.
    digits : int, optional
        Decimal digits of the result's numbers, where they are no doubles: its fragility is that of one rounding there.
    """
    claims = [_plain_claim(claim) for claim in with_limits(claims, limits or {})]
    frequency = probe_frequencies(source if not is_data(source) else result)
    values = {"source": fragility_of(source, frequency)}
    values["result"] = values["source"] if result is source else fragility_of(result, frequency)
    if digits is not None and values["result"] is not None:
        # half a unit of the last digit in place of half a unit of the last bit; numbers that are doubles stay doubles
        values["result"] *= 0.5 * 10.0 ** max(1 - digits, -300) / (np.finfo(float).eps / 2)
    notes = (
        [f"{text[:1].upper()}{text[1:]}." for text in source.remarks]
        + list(cautions)
        + fragility_cautions(values, result)
    )
    undecided = [
        claim.name for claim in claims if claim.holds is None and claim.limit is not None and claim.value is not None
    ]
    if undecided:
        notes.append(f"Measured at many frequencies, with no bound on what hides between them: {', '.join(undecided)}.")
    missing = [claim.name for claim in claims if claim.value is None and not claim.infinite and claim.limit is not None]
    if missing:
        notes.append(f"A limit was asked for, and there is no value to hold against it: {', '.join(missing)}.")
    if opinion is None:
        second = SecondOpinion()
    else:
        second = opinion.about(result, claims) if isinstance(opinion, Later) else opinion(result)
    if second.status == "disagrees":
        notes.append(f"The second opinion disagrees: {second.note}. {_arbiter(claims, second.by)}")
    notes.append(CLOSED_LOOP)
    receipt = Receipt(
        step=step,
        method=method,
        route=list(route),
        source=mark(source),
        result=mark(result),
        claims=claims,
        fragility=plain(values),
        second_opinion=second,
        cautions=notes,
        details=plain(details or {}),
        versions=versions(),
        seconds=round(time.perf_counter() - started, 6),
    )
    return Conversion(result.with_receipts((*source.receipts, receipt)), receipt)
