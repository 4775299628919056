"""Averaging over the periods of a repeated excitation: no leakage, and noise from what changes from period to period.

With the transforms U_p, Y_p of P whole periods, H = mean(Y)/mean(U) at the lines that are excited. The deviation comes
from the scatter of Y_p - H U_p, so that noise on the input counts as well (reference 1). With several inputs, records
with different patterns (experiments) make a square or larger problem of every line, H = Y U^+.

One period alone: the noise is what neighbouring lines do not predict of each other, taken as smooth over the lines.

Sources
-------
1. R. Pintelon, J. Schoukens, *System Identification: A Frequency Domain Approach*, 2nd edition, 2012, chapter 2 (from
   memory).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from realize.errors import InputError
from realize.estimation.noise import deviation_factor, pooled_noise, running_median
from realize.estimation.records import Array, ComplexArray, Estimate, Record

#: Lines whose input has less than this share of the largest amplitude are not excited.
UNEXCITED = 0.01
#: A first period counts as not settled where it differs from the others by this many times their own scatter in power.
UNSETTLED = 2.0
#: Two neighbouring periods differ by less than this share in power, where inputs are periodic.
ALIKE = 0.02
TOGETHER = 1e-6


def period_of(inputs: Array) -> int | None:
    """Return the number of samples after which the inputs repeat, None where they do not repeat in the record.

    d(M) = mean |u[n + M] - u[n]|^2 / (2 mean |u|^2). The period is the smallest M behind the first decorrelation
    (d > 1/2) where d is within a factor of four of its smallest value, and that is below ``ALIKE``: M must be a whole
    number of samples, else a multiple of it fits far better.
    """
    n = inputs.shape[0]
    largest = n // 2
    if largest < 4:
        return None
    size = 1 << (2 * n - 1).bit_length()
    spectrum = np.fft.rfft(inputs, size, axis=0)
    product = np.fft.irfft(np.sum(np.abs(spectrum) ** 2, axis=1), size)[: largest + 1]
    square = np.cumsum(np.concatenate([[0.0], np.sum(inputs**2, axis=1)]))
    lag = np.arange(largest + 1)
    both = square[n - lag] + (square[n] - square[lag])
    distance = np.where(both > 0, 1 - 2 * product / np.where(both > 0, both, 1.0), 1.0)
    apart = np.flatnonzero(distance > 0.5)
    if apart.size == 0:
        return None
    rest = distance[apart[0] :]
    # below the rounding of the transform, nothing is told apart
    floor = max(float(np.min(rest)), 1e-13)
    if floor > ALIKE:
        return None
    first = apart[0] + int(np.flatnonzero(rest <= 4 * floor)[0])
    while first < largest and distance[first + 1] < distance[first]:
        first += 1
    return int(first)


def _settled(outputs: ComplexArray) -> int:
    """Return how many periods at the start to leave out: [periods][lines][outputs], at least three stay."""
    drop = 0
    while outputs.shape[0] - drop > 3:
        rest = outputs[drop + 1 :]
        mean = np.mean(rest, axis=0)
        scatter = np.sum(np.abs(rest - mean) ** 2) / (rest.shape[0] - 1)
        apart = np.sum(np.abs(outputs[drop] - mean) ** 2) / (1 + 1 / rest.shape[0])
        if apart <= UNSETTLED * scatter:
            break
        drop += 1
    return drop


def average(records: list[Record], period: float, length: int) -> Estimate:
    """Return the estimate at the excited lines.

    Parameters
    ----------
    records : list of Record
        All of the same excitation period; with several inputs, as many experiments.
    period : float
        s.
    length : int
        Samples of one period of the excitation.

    Raises
    ------
    InputError
        Fewer experiments than inputs, no whole period.
    """
    m = records[0].inputs.shape[1]
    if length < 4:
        raise InputError(f"an excitation period of {length} samples", "at least 4", field="excitation-period")
    if len(records) < m:
        raise InputError(
            f"{len(records)} record(s) with {m} inputs that repeat together",
            f"{m} records or more, each with another pattern of the inputs (or another experiment for each input)",
            field="input",
        )
    line = np.arange(1, (length + 1) // 2)
    means, scatters, counts, dropped = [], [], [], []
    for record in records:
        count = record.inputs.shape[0] // length
        if count == 0:
            raise InputError(
                f"{record.inputs.shape[0]} samples", f"at least one period of {length} samples", field="input"
            )
        # the last whole periods: the start settles
        start = record.inputs.shape[0] - count * length
        u, y = (
            np.fft.rfft(side[start:].reshape(count, length, -1), axis=1)[:, line]
            for side in (record.inputs, record.outputs)
        )
        drop = _settled(y)
        dropped.append(drop)
        u, y = u[drop:], y[drop:]
        means.append((np.mean(u, axis=0), np.mean(y, axis=0)))
        scatters.append((u - means[-1][0], y - means[-1][1]))
        counts.append(count - drop)
    x = np.stack([u for u, _ in means], axis=1)
    out = np.stack([y for _, y in means], axis=1)
    strength = np.max(np.abs(x), axis=1)
    excited = np.all(strength >= UNEXCITED * np.max(strength, axis=0), axis=1) & np.all(strength > 0, axis=1)
    if not np.any(excited):
        raise InputError(
            "no line at which all inputs are excited",
            "inputs that excite the same lines; one after the other, they are records of their own",
            field="input",
        )
    size = np.sqrt(np.sum(np.abs(x[excited]) ** 2, axis=1, keepdims=True))
    q, r = np.linalg.qr(x[excited] / size)
    singular = np.linalg.svd(r, compute_uv=False)
    if np.median(singular[:, -1] / singular[:, 0]) < TOGETHER:
        raise InputError(
            "experiments with the same pattern of the inputs", "another pattern in each record", field="input"
        )
    # W: [lines][inputs][experiments]
    back = np.linalg.solve(r, np.conj(np.swapaxes(q, 1, 2))) / np.swapaxes(size, 1, 2)
    response = np.swapaxes(back @ out[excited], 1, 2)
    cautions: list[str] = []
    deviation: Array | None
    if max(counts) > 1:
        deviation, freedom = _from_scatter(back, response, scatters, counts, excited)
        basis = "scatter of the periods"
    else:
        deviation, freedom = _from_neighbours(x[excited], out[excited], response, back, line[excited]), 0.0
        basis = "neighbouring lines"
        if deviation is None:
            cautions.append("one period, with too few lines to tell the noise: the response has no deviation")
        else:
            cautions.append(
                "one period alone: the deviation is what neighbouring lines do not predict of each other; record "
                "several periods to know it"
            )
    coherence = None
    if deviation is not None and max(counts) > 1:
        share = np.abs(response) ** 2
        whole = share + sum(counts) * deviation**2
        coherence = np.where(whole > 0, share / np.where(whole > 0, whole, 1.0), 0.0)
        noise = np.sqrt(np.mean(deviation**2, axis=(0, 2)))
        for i in np.flatnonzero(noise > np.sqrt(np.mean(np.abs(response) ** 2, axis=(0, 2)))):
            cautions.append(f"output {i} is not related to the inputs: its response is smaller than its deviation")
    if any(dropped):
        cautions.append(f"{max(dropped)} period(s) at the start have not settled and are left out")
    return Estimate(
        frequency=line[excited] / (length * period),
        response=response,
        deviation=deviation,
        coherence=coherence,
        method=f"periodic, {sum(counts)} period(s) of {length}",
        cautions=cautions,
        details={
            "averaging": "periodic",
            "excitation_period": length,
            "periods": counts,
            "settled_after": dropped,
            "deviation_from": basis,
            "freedom": float(freedom),
            "resolution": 1 / (length * period),
        },
    )


def _from_scatter(
    back: ComplexArray,
    response: ComplexArray,
    scatters: list[tuple[ComplexArray, ComplexArray]],
    counts: list[int],
    excited: NDArray[np.bool_],
) -> tuple[Array, float]:
    """Return deviations from the period-to-period scatter of Y - H U, and the degrees of freedom of each."""
    lines, p, m = response.shape
    variance = np.zeros((lines, p, m))
    freedom = float(sum(count - 1 for count in counts)) / len(counts)
    most = 0.0
    pairs = [(u[:, excited], y[:, excited], count) for (u, y), count in zip(scatters, counts, strict=True)]
    several = [pair for pair in pairs if pair[2] > 1]
    own = []
    for u, y, count in several:
        errors = y - np.einsum("lij,klj->kli", response, u)
        own.append(np.sum(np.abs(errors) ** 2, axis=0) / (count - 1))
    # a record of one period alone has the noise of the others
    common = np.mean(own, axis=0)
    taken = iter(own)
    for k, (_, _, count) in enumerate(pairs):
        power = next(taken) if count > 1 else common
        shared, total = pooled_noise(power, max(float(count - 1), 1.0))
        most = max(most, total)
        weight = np.abs(back[:, :, k]) ** 2
        variance += shared[:, :, None] * weight[:, None, :] / count * deviation_factor(total) ** 2
    return np.sqrt(variance), max(freedom, most)


def _from_neighbours(
    x: ComplexArray, out: ComplexArray, response: ComplexArray, back: ComplexArray, line: NDArray[np.int64]
) -> Array | None:
    """Return deviations where each experiment has one period: what neighbouring lines do not predict.

    Over seven lines, H is a parabola in the number of the line, fitted to Y with the weight |U|^2; the power that is
    left, by its four degrees of freedom, is noise. The larger counts of what a line's own neighbourhood leaves and of
    the median over 41 neighbours: near a sharp peak of H a parabola is no model, and the lines know less.
    """
    lines, experiments, p = out.shape
    m = x.shape[2]
    width = 7 if m == 1 else 2 * (3 * m) // 2 * 2 + 1
    if lines < max(2 * width, 16) or m > 1:
        return None
    left = np.empty((lines, p))
    for k in range(lines):
        low = min(max(0, k - width // 2), lines - width)
        here = slice(low, low + width)
        t = (line[here] - line[k]) / max(float(line[low + width - 1] - line[low]), 1.0)
        powers = np.stack([np.ones(width), t, t**2], axis=1)
        u = x[here, :, 0]
        problem = (u[:, :, None] * powers[:, None, :]).reshape(-1, 3)
        values = out[here].reshape(-1, p)
        rest = values - problem @ np.linalg.lstsq(problem, values, rcond=None)[0]
        left[k] = np.sum(np.abs(rest) ** 2, axis=0) / (width * experiments - 3)
    freedom = width * experiments - 3
    # median of chi^2(2f)/(2f)
    typical = (1 - 1 / (9 * freedom)) ** 3
    noise = np.maximum(running_median(left, 20) / typical, left)
    return np.sqrt(noise[:, :, None] * np.sum(np.abs(back) ** 2, axis=2)[:, None, :])
