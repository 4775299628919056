"""Stepped sine: one frequency after the other, each held for some cycles (a dwell).

The dwells are found by the zero crossings of the input, or by their length. Of each, the first third is left out. The
rest is cut into blocks of whole cycles; a sine, a cosine and a constant are fitted to every signal in every block, and
the ratio of the mean amplitudes is the response. The scatter of the blocks gives the deviation.

Source: IEEE Std 1057-2007, sine fitting with known frequency (from memory).
"""

from __future__ import annotations

import numpy as np

from realize.errors import InputError
from realize.estimation.noise import deviation_factor
from realize.estimation.records import Array, ComplexArray, Estimate, Record, Settings

#: Cycles of two blocks side by side in a dwell differ by less than this share.
SAME = 0.005
#: Two dwells are of one frequency to this share.
SAME_FREQUENCY = 1e-4
#: A dwell is one where a sine has this share of the input's power.
MOSTLY_SINE = 0.8
FEWEST_CYCLES = 4
#: Cycles at the start of a dwell that say how long one is.
TYPICAL = 64
MOST_BLOCKS = 8
LEFT_OUT = 1 / 3


def average(records: list[Record], period: float, settings: Settings) -> Estimate:
    """Return the estimate at the frequencies of the dwells; raises InputError where there are none."""
    if records[0].inputs.shape[1] > 1:
        raise InputError(
            f"{records[0].inputs.shape[1]} inputs", "one input at a time for a stepped sine", field="input"
        )
    if settings.segment is not None and settings.segment < 16:
        raise InputError(f"dwells of {settings.segment} samples", "at least 16", field="segment")
    rows = []
    for record in records:
        for start, stop in _dwells(record.inputs[:, 0], settings.segment):
            row = _dwell(record, start, stop)
            if row is not None:
                rows.append(row)
    if not rows:
        raise InputError(
            "no dwell of a sine in the input",
            f"a sine that keeps its frequency for {FEWEST_CYCLES} cycles or more; say how long with --segment SAMPLES",
            field="input",
        )
    rows.sort(key=lambda row: row[0])
    merged = _merged(rows)
    cycles = np.array([row[0] for row in merged])
    return Estimate(
        frequency=cycles / period,
        response=np.array([row[1] for row in merged])[:, :, None],
        deviation=np.sqrt(np.array([row[2] for row in merged]))[:, :, None],
        coherence=None,
        method=f"stepped sine, {len(merged)} frequencies",
        details={"averaging": "stepped-sine", "dwells": len(rows), "frequencies": len(merged)},
    )


def _dwells(u: Array, segment: int | None) -> list[tuple[int, int]]:
    """Return first and last sample (exclusive) of each dwell."""
    if segment is not None:
        return [(k, k + segment) for k in range(0, u.size - segment + 1, segment)]
    crossings = _rising(u)
    if crossings.size < FEWEST_CYCLES:
        return []
    length = np.diff(crossings)
    # noise moves each crossing, by what neighbouring cycles differ at best
    jitter = float(np.median(np.abs(np.diff(length)))) if length.size > 2 else 0.0
    found: list[tuple[int, int]] = []
    first, typical = 0, 0.0
    for k in range(1, length.size + 1):
        if k - first <= TYPICAL:
            typical = float(np.median(length[first:k]))
        same = k < length.size and abs(length[k] - typical) <= max(SAME * typical, 4 * jitter, 1e-6)
        if same:
            continue
        if k - first >= FEWEST_CYCLES:
            found.append((int(np.ceil(crossings[first])), int(np.floor(crossings[k])) + 1))
        first = k
    return found


def _rising(u: Array) -> Array:
    """Return the times (samples) at which a signal rises through zero, with a hysteresis of a tenth of its size."""
    level = 0.1 * float(np.sqrt(2) * np.std(u))
    beyond = np.flatnonzero(np.abs(u) > level)
    side = u[beyond] > 0
    tops = beyond[1:][side[1:] & ~side[:-1]]
    # the last sample at or below zero before each of them
    place = np.maximum.accumulate(np.where(u <= 0, np.arange(u.size), -1))
    below = place[tops]
    rise = u[below + 1] - u[below]
    return below - u[below] / np.where(rise > 0, rise, 1.0)  # type: ignore[no-any-return]


def _dwell(record: Record, start: int, stop: int) -> tuple[float, ComplexArray, Array] | None:
    """Return cycles a sample, response and variance of one dwell; None where it holds too few cycles."""
    start += int(LEFT_OUT * (stop - start))
    u, y = record.inputs[start:stop, 0], record.outputs[start:stop]
    f = _frequency(u)
    if f is None:
        return None
    cycles = f * u.size
    blocks = int(min(MOST_BLOCKS, cycles // 1, u.size // 8))
    if blocks < 2:
        return None
    each = int(np.floor(cycles / blocks)) / f
    signals = np.column_stack([u, y])
    amplitude = []
    for b in range(blocks):
        low, high = round(b * each), round((b + 1) * each)
        n = np.arange(low, high)
        basis = np.column_stack([np.cos(2 * np.pi * f * n), np.sin(2 * np.pi * f * n), np.ones(n.size)])
        if n.size < 4:
            return None
        found = np.linalg.lstsq(basis, signals[low:high], rcond=None)[0]
        amplitude.append(found[0] - 1j * found[1])
    values = np.array(amplitude)
    mean = np.mean(values, axis=0)
    if abs(mean[0]) == 0:
        return None
    if abs(mean[0]) ** 2 / 2 < MOSTLY_SINE * float(np.var(u)):
        return None
    response = mean[1:] / mean[0]
    errors = values[:, 1:] - values[:, :1] * response
    freedom = blocks - 1
    variance = np.sum(np.abs(errors) ** 2, axis=0) / freedom / blocks / abs(mean[0]) ** 2
    return f, response, variance * deviation_factor(float(freedom)) ** 2


def _frequency(u: Array) -> float | None:
    """Return the frequency of a sine in cycles a sample: the largest line, then by the turn between the two halves."""
    if u.size < 8:
        return None
    v = u - np.mean(u)
    if not np.any(v):
        return None
    n = np.arange(u.size)
    window = 1 - np.cos(2 * np.pi * (n + 0.5) / u.size)
    spectrum = np.abs(np.fft.rfft(v * window, 8 * u.size))
    f = float(np.argmax(spectrum[1:]) + 1) / (8 * u.size)
    half = u.size // 2
    taper = 1 - np.cos(2 * np.pi * (np.arange(half) + 0.5) / half)
    for _ in range(4):
        turn = np.exp(-2j * np.pi * f * n)
        a = np.sum(v[:half] * taper * turn[:half])
        b = np.sum(v[half : 2 * half] * taper * turn[half : 2 * half])
        if a == 0 or b == 0:
            return None
        f += float(np.angle(b / a)) / (2 * np.pi * half)
        if not 0 < f < 0.5:
            return None
    return f


def _merged(rows: list[tuple[float, ComplexArray, Array]]) -> list[tuple[float, ComplexArray, Array]]:
    """Return the dwells with those of the same frequency averaged."""
    merged = [rows[0]]
    weight = 1
    for f, response, variance in rows[1:]:
        last = merged[-1]
        if f - last[0] > SAME_FREQUENCY * f:
            merged.append((f, response, variance))
            weight = 1
            continue
        total = weight + 1
        merged[-1] = (
            last[0],
            (weight * last[1] + response) / total,
            (weight**2 * last[2] + variance) / total**2,
        )
        weight = total
    return merged
