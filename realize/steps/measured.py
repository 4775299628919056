"""Measured data of any kind to the one frequency response that a fit takes."""

from __future__ import annotations

import time
from collections.abc import Sequence
from typing import Any

import numpy as np

from realize.errors import InputError, UsageError
from realize.models import FrequencyResponse, Model, TimeBase, TimeRecord, mark
from realize.schema import Claim
from realize.steps.conversion import Conversion, model_of
from realize.steps.receipts import finish

#: Options of an estimate, by the names of ``realize.estimation.Settings``.
ESTIMATION = ("averaging", "estimator", "window", "segment", "overlap", "excitation_period", "settling")


def settings_of(given: dict[str, Any]) -> dict[str, Any]:
    """Return the options of an estimate that were given."""
    return {name: given[name] for name in ESTIMATION if given.get(name) is not None}


def runs_of(data: Any) -> list[Model]:
    """Return one run or several as a list of models of one kind."""
    several = list(data) if isinstance(data, Sequence) and not isinstance(data, (str, bytes)) else [data]
    if not several:
        raise UsageError("no data: pass one run or more")
    runs = [model_of(entry) for entry in several]
    kinds = list(dict.fromkeys(run.kind for run in runs))
    if len(kinds) > 1:
        raise UsageError(f"runs of different kinds: {' and '.join(kinds)}; give runs of one kind")
    return runs


def names_of(runs: Sequence[Model], names: Sequence[str] | None) -> list[str]:
    """Return a name for each run."""
    return list(names) if names else [f"run {k + 1}" for k in range(len(runs))]


def estimated(
    runs: Sequence[TimeRecord],
    *,
    sampled: bool = False,
    limits: dict[str, float] | None = None,
    names: Sequence[str] | None = None,
    **options: Any,
) -> Conversion:
    """Return the frequency response of time records, with a receipt.

    Parameters
    ----------
    runs : sequence of TimeRecord
        Of the same signals and period.
    sampled : bool
        The inputs are held between the samples: the response is that of the sampled plant.
    options
        See ``realize.estimation.Settings``.
    """
    from realize.estimation import Settings, estimate_response

    started = time.perf_counter()
    first = runs[0]
    called = names_of(runs, names)
    for name, run in zip(called[1:], runs[1:], strict=True):
        agree(first, run, called[0], name)
        if run.period != first.period:
            raise InputError(
                f"a period of {run.period:g} s", f"{first.period:g} s, as in {called[0]}", field="period", file=name
            )
    found = estimate_response(
        [run.input for run in runs], [run.output for run in runs], first.period, Settings(**settings_of(options))
    )
    base = TimeBase("sampled", period=first.period) if sampled and not first.time.sampled else first.time
    result = FrequencyResponse(
        frequency=found.frequency,
        frequency_unit="Hz",
        response=found.response,
        deviation=found.deviation,
        coherence=found.coherence,
        **(first.common() | {"time": base}),
    )
    cautions = [f"{text[:1].upper()}{text[1:]}." for text in found.cautions]
    details = {"estimate": found.details, "lines": int(found.frequency.size)}
    if len(runs) > 1:
        details["runs"] = [mark(run).digest for run in runs]
    claims: list[Claim] = []
    return finish(
        "convert",
        found.method,
        ["frequency-response"],
        first,
        result,
        claims,
        started=started,
        cautions=cautions,
        limits=limits,
        details=details,
    )


def agree(first: Model, other: Model, name: str, called: str) -> None:
    """Raise InputError where two runs are not of the same signals; remark on units that differ."""
    if other.shape != first.shape:
        raise InputError(
            f"{other.shape[0]} outputs and {other.shape[1]} inputs",
            f"{first.shape[0]} and {first.shape[1]}, as in {name}",
            file=called,
        )
    if (other.time.sampled, other.dead_time, other.ports) != (first.time.sampled, first.dead_time, first.ports) or (
        other.time.sampled and other.time.exact_period != first.time.exact_period
    ):
        raise InputError("another time base, dead time or network parameter", f"those of {name}", file=called)
    for side in ("inputs", "outputs"):
        for k, (one, two) in enumerate(zip(getattr(first, side), getattr(other, side), strict=True)):
            if one.unit and two.unit and one.unit != two.unit:
                raise InputError(
                    f"the unit {two.unit!r}", f"{one.unit!r}, as in {name}", field=f"{side}[{k}].unit", file=called
                )
            if one.name and two.name and one.name != two.name:
                raise InputError(
                    f"the signal {two.name!r}", f"{one.name!r}, as in {name}", field=f"{side}[{k}].name", file=called
                )


def merged(runs: Sequence[FrequencyResponse], names: Sequence[str] | None = None) -> FrequencyResponse:
    """Return the mean of repeated runs as one response with the deviation of the mean.

    Raises
    ------
    InputError
        Where the lines, signals or units of the runs do not agree.
    """
    from realize.estimation.runs import merge, same_lines

    first = runs[0]
    if len(runs) == 1:
        return first
    called = names_of(runs, names)
    for name, run in zip(called[1:], runs[1:], strict=True):
        agree(first, run, called[0], name)
    same_lines([run.radians for run in runs], called)
    stated = [run.deviation for run in runs if run.deviation is not None]
    known = len(stated) == len(runs) and all(np.all(values > 0) for values in stated)
    mean, deviation = merge(np.stack([run.response for run in runs]), np.stack(stated) if known else None)
    remarks = [text for run in runs for text in run.remarks]
    if stated and not known:
        remarks.append("not every run has deviations above zero: those that are given are not used")
    if not np.all(deviation > 0):
        remarks.append("the runs agree to the last digit at some lines: they look like copies of one run")
    return first.with_(response=mean, deviation=deviation, coherence=None, remarks=tuple(dict.fromkeys(remarks)))


def response_of(
    data: Any, names: Sequence[str] | None, sampled: bool, estimation: dict[str, Any]
) -> tuple[FrequencyResponse, list[str], dict[str, Any]]:
    """Return the frequency response that a fit takes, cautions about how it came about, and details for the receipt."""
    runs = runs_of(data)
    records = [run for run in runs if isinstance(run, TimeRecord)]
    if records:
        made = estimated(records, sampled=sampled, names=names, **estimation)
        assert isinstance(made.model, FrequencyResponse)
        told = [*records[0].remarks, *made.receipt.cautions[:-1]]
        return made.model, list(dict.fromkeys(told)), made.receipt.details
    if sampled or settings_of(estimation):
        raise UsageError(f"options of time data go with a time record, and this is a {runs[0].kind}")
    responses = [run for run in runs if isinstance(run, FrequencyResponse)]
    if not responses:
        raise UsageError(
            f"fit takes a frequency response or a time record, and this is a {runs[0].kind}; use convert or reduce"
        )
    details = {} if len(runs) == 1 else {"runs": [mark(run).digest for run in runs]}
    return merged(responses, names), [], details
