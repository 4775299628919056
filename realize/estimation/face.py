"""The friendly face of estimation: checks, scaling by powers of two, and the way of averaging that fits the record."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import ArrayLike

from realize.errors import InputError, UsageError
from realize.estimation import periodic, stepped_sine, welch
from realize.estimation.records import Array, Estimate, Record, Settings
from realize.schema import AVERAGINGS, ESTIMATORS, WINDOWS

#: A record with fewer samples tells nothing.
FEWEST = 16


def estimate_response(
    inputs: Sequence[ArrayLike], outputs: Sequence[ArrayLike], period: float, settings: Settings | None = None
) -> Estimate:
    """Estimate the frequency response behind records of inputs and outputs.

    ``auto`` averages over periods where the inputs repeat within the record, else over windowed segments.

    Parameters
    ----------
    inputs, outputs : sequence of [samples][m], of [samples][p]
        One entry a run or experiment. The mean of each signal is taken off.
    period : float
        Sampling period, s.
    settings : Settings, optional

    Returns
    -------
    Estimate

    Raises
    ------
    InputError
        Naming what the records lack: samples, movement, independence.
    UsageError
        For a setting that does not exist.
    """
    chosen = settings or Settings()
    _check(chosen)
    runs, lift_in, lift_out = _scaled(inputs, outputs, period, chosen)
    m, p = runs[0].inputs.shape[1], runs[0].outputs.shape[1]
    if chosen.estimator == "h2" and m != p:
        raise UsageError(f"h2 needs as many outputs as inputs, and there are {p} and {m}; take h1 or hv")
    found = _averaged(runs, period, chosen)
    lift = lift_out[:, None] - lift_in[None, :]
    with np.errstate(over="ignore", under="ignore"):
        response = np.empty_like(found.response)
        response.real, response.imag = np.ldexp(found.response.real, lift), np.ldexp(found.response.imag, lift)
        deviation = None if found.deviation is None else np.ldexp(found.deviation, lift)
    if not np.all(np.isfinite(response)) or (deviation is not None and not np.all(np.isfinite(deviation))):
        raise InputError("a response beyond the largest double", "other units of the inputs or outputs")
    return Estimate(found.frequency, response, deviation, found.coherence, found.method, found.cautions, found.details)


def _check(settings: Settings) -> None:
    for name, value, known in (
        ("averaging", settings.averaging, AVERAGINGS),
        ("estimator", settings.estimator, ESTIMATORS),
        ("window", settings.window, WINDOWS),
    ):
        if value not in known:
            raise UsageError(f"no {name} {value!r}; there are: {', '.join(known)}")
    if not 0 <= settings.overlap <= 0.95:
        raise UsageError(f"an overlap of {settings.overlap:g}: it is a share of the segment from 0 to 0.95")
    if settings.averaging != "welch" and settings.averaging != "auto" and settings.estimator != "h1":
        raise UsageError(f"the estimator {settings.estimator} goes with welch averaging")
    if settings.averaging in ("welch", "stepped-sine") and settings.excitation_period is not None:
        raise UsageError("an excitation period goes with periodic averaging")
    if settings.averaging == "periodic" and settings.segment is not None:
        raise UsageError("a segment goes with welch or stepped-sine averaging; pass the excitation period")


def _scaled(
    inputs: Sequence[ArrayLike], outputs: Sequence[ArrayLike], period: float, settings: Settings
) -> tuple[list[Record], Any, Any]:
    """Return the records with the mean taken off and each signal near one, and the powers of two that were taken."""
    if len(inputs) == 0 or len(inputs) != len(outputs):
        raise InputError(f"{len(inputs)} inputs and {len(outputs)} outputs", "one record or more of both")
    skip = round(settings.settling / period)
    pairs: list[list[Array]] = []
    for k, sides in enumerate(zip(inputs, outputs, strict=True)):
        pair = []
        for name, side in zip(("input", "output"), sides, strict=True):
            values = np.array(side, dtype=float)
            if values.ndim == 1:
                values = values[:, None]
            if values.ndim != 2 or 0 in values.shape:
                raise InputError(f"shape {list(values.shape)}", "samples x signals", field=name)
            bad = np.argwhere(~np.isfinite(values))
            if bad.size:
                raise InputError(
                    f"{values[tuple(bad[0])]}", "a finite number", field=f"{name}[{bad[0][0]}][{bad[0][1]}]"
                )
            pair.append(values)
        if pair[0].shape[0] != pair[1].shape[0]:
            raise InputError(f"{pair[1].shape[0]} samples", f"{pair[0].shape[0]}, as of the input", field="output")
        if pairs and [side.shape[1] for side in pair] != [side.shape[1] for side in pairs[0]]:
            raise InputError(f"run {k + 1} has other signals", "the same signals in every run")
        if pair[0].shape[0] - skip < FEWEST:
            raise InputError(
                f"{pair[0].shape[0]} samples" + (f", {skip} of them left out" if skip else ""),
                f"at least {FEWEST}, and hundreds for a useful estimate",
                field="input",
            )
        pairs.append([side[skip:] for side in pair])
    lifts: list[Any] = []
    for side, name in enumerate(("input", "output")):
        top = np.max([np.max(np.abs(pair[side]), axis=0) for pair in pairs], axis=0)
        lift = np.where(top > 0, np.frexp(top)[1], 0)
        moved = np.zeros(top.size)
        for pair in pairs:
            values = np.ldexp(pair[side], -lift)
            values = values - np.mean(values, axis=0)
            pair[side] = values
            moved = np.maximum(moved, np.max(np.abs(values), axis=0))
        # what is left of a constant after its mean is taken off is rounding
        still = moved <= 64 * np.finfo(float).eps
        if side == 0 and np.any(still):
            j = int(np.flatnonzero(still)[0])
            raise InputError("a constant", "an input that moves: it excites nothing as it is", field=f"{name} {j}")
        for pair in pairs:
            pair[side][:, still] = 0.0
        lifts.append(lift)
    return [Record(*pair) for pair in pairs], lifts[0], lifts[1]


def _averaged(runs: list[Record], period: float, settings: Settings) -> Estimate:
    if settings.averaging == "stepped-sine":
        return stepped_sine.average(runs, period, settings)
    if settings.averaging == "periodic" or (settings.averaging == "auto" and settings.excitation_period is not None):
        length = settings.excitation_period
        if length is None:
            length = _common_period(runs)
            if length is None:
                raise InputError(
                    "inputs that do not repeat within the record",
                    "two periods or more; one period alone with --excitation-period SAMPLES",
                    field="input",
                )
        return periodic.average(runs, period, length)
    if settings.averaging == "auto" and settings.segment is None and settings.estimator == "h1":
        length = _common_period(runs)
        if length is not None and len(runs) >= runs[0].inputs.shape[1]:
            return periodic.average(runs, period, length)
    _refuse_single_steps(runs)
    return welch.average(runs, period, settings)


def _refuse_single_steps(runs: list[Record]) -> None:
    """Raise InputError where an input moves once or twice in the whole record: no average is in that."""
    for record in runs:
        change = np.abs(np.diff(record.inputs, axis=0))
        moves = np.sum(change > 1e-6 * np.max(change, axis=0), axis=0)
        if len(runs) == 1 and np.any(moves <= 2):
            j = int(np.argmin(moves))
            raise InputError(
                f"an input that moves {int(moves[j])} time(s) in the whole record, a step or a pulse",
                "an excitation that goes on; or the output from the step on, divided by its size, as a column `step` "
                "(a pulse of one sample: `impulse`)",
                field=f"input {j}",
            )


def _common_period(runs: list[Record]) -> int | None:
    """Return the period of the inputs that all runs share, None where there is none."""
    found = {periodic.period_of(record.inputs) for record in runs}
    return found.pop() if len(found) == 1 else None
