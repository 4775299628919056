"""The verb `fit` with impulse responses: samples to a model, and the misfit of the model's own samples."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from realize.conversions import Task, convert_model, plan_route
from realize.errors import InputError, Refused, UsageError
from realize.models import ImpulseResponse, Model, PoleResidue, TimeBase, mark
from realize.schema import Claim, judge
from realize.steps.conversion import Conversion
from realize.steps.fit_record import sample_details
from realize.steps.measured import agree, names_of
from realize.steps.ordinary import states_of
from realize.steps.receipts import finish
from realize.steps.second_opinion import asking
from realize.verification.stability import order_claim, stability_claim

Array = NDArray[np.float64]


def fit_impulse(
    runs: Sequence[Model],
    others: dict[str, Any],
    *,
    to: str,
    order: int | tuple[int, int] | str,
    method: str,
    sampled: bool,
    names: Sequence[str] | None,
    limits: dict[str, float],
    second_opinion: bool | None,
    started: float,
) -> Conversion:
    """Return the model of an impulse response, or of the mean of several.

    Parameters
    ----------
    runs : sequence of ImpulseResponse
    others : dict
        Options that go with frequency responses, which are refused.
    """
    from realize.fitting import fit_samples

    if others:
        raise UsageError(f"{', '.join(others)}: not with an impulse response")
    source, deviation = _mean([run for run in runs if isinstance(run, ImpulseResponse)], names)
    if source.dead_time is not None:
        raise Refused(
            "an impulse response with a dead time beside it: leave out the samples before it, and put it back"
        )
    base = TimeBase("sampled", period=source.period) if sampled and not source.time.sampled else source.time
    found = fit_samples(
        source.samples, source.period, sampled=base.sampled, deviation=deviation, order=order, method=method
    )
    fitted = PoleResidue(
        poles=found.poles, residues=found.residues, direct=found.direct, **(source.common() | {"time": base})
    )
    task = Task(fitted, to)
    route = plan_route(task)
    result = convert_model(task, route)
    claims = [*_misfits(source, result, found.weighted, found.noise.basis, limits)]
    claims += [order_claim(result, limits.get("order")), stability_claim(result)]
    span = (source.samples.shape[0] - 1) * source.period
    cautions = [
        *found.cautions,
        f"The model is fitted to samples from 0 to {span:.6g} s: what rings for longer is not seen.",
    ]
    details = sample_details(
        found, int(source.samples.shape[0]), source.period if base.sampled else None, chosen=not isinstance(order, int)
    )
    if len(runs) > 1:
        details["runs"] = [mark(run).digest for run in runs]
    with asking("fit", source, {}, second_opinion) as opinion:
        return finish(
            "fit",
            found.method,
            ["pole-residue", *(row.target for row in route)],
            source,
            result,
            claims,
            started=started,
            cautions=cautions,
            opinion=opinion,
            limits=limits,
            details=details,
        )


def _mean(runs: list[ImpulseResponse], names: Sequence[str] | None) -> tuple[ImpulseResponse, Array | None]:
    """Return the mean of runs and its deviation, one for each channel."""
    first = runs[0]
    called = names_of(runs, names)
    for name, run in zip(called[1:], runs[1:], strict=True):
        agree(first, run, called[0], name)
        if run.period != first.period or run.samples.shape != first.samples.shape:
            raise InputError(
                f"{run.samples.shape[0]} samples, {run.period:g} s apart",
                f"{first.samples.shape[0]}, {first.period:g} s apart, as in {called[0]}",
                file=name,
            )
    if len(runs) == 1:
        return first, None
    every = np.stack([run.samples for run in runs])
    deviation = np.sqrt(np.mean(np.var(every, axis=0, ddof=1), axis=0) / len(runs))
    return first.with_(samples=np.mean(every, axis=0)), deviation if np.all(deviation > 0) else None


def samples_of(model: Model, period: float, count: int) -> Array:
    """Return the samples of a model's impulse response by its matrices: [k][outputs][inputs].

    Sampled: D, CB, CAB, ...; continuous: C exp(A k period) B.
    """
    states, _ = states_of(model)
    A, x = states.A, states.B
    values = np.empty((count, *states.shape))
    if states.time.sampled:
        values[0] = states.D
        start = 1
    else:
        from scipy.linalg import expm

        A, start = expm(A * period), 0
    for k in range(start, count):
        values[k] = states.C @ x
        x = A @ x
    return values


def _misfits(
    source: ImpulseResponse, result: Model, weighted: float, basis: str, limits: dict[str, float]
) -> list[Claim]:
    """Return the claims about the misfit of the samples, found by the recursion of the result's own matrices."""
    h = source.samples
    with np.errstate(over="ignore", invalid="ignore"):
        difference = samples_of(result, source.period, h.shape[0]) - h
    peak = np.abs(h).max(axis=0)
    top = float(peak.max()) or 1.0
    size = float(np.sqrt(np.sum((h / top) ** 2)))
    rms = float(np.sqrt(np.sum((difference / top) ** 2))) / (size or 1.0)
    relative = np.abs(difference) / np.where(peak > 0, peak, top)
    at = tuple(int(k) for k in np.unravel_index(int(np.argmax(relative)), relative.shape))
    note = "of the samples"
    return [
        judge("rms-misfit", rms, limit=limits.get("rms-misfit"), note=note),
        judge(
            "worst-misfit",
            float(relative[at]),
            limit=limits.get("worst-misfit"),
            where={"output": at[1], "input": at[2], "note": f"sample {at[0]}, {at[0] * source.period:.6g} s"},
            note=note,
        ),
        judge(
            "weighted-misfit",
            weighted,
            unit="1",
            limit=limits.get("weighted-misfit"),
            note=f"of the samples; the deviation is {basis}",
        ),
    ]
