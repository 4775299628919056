"""Averaging over windowed, overlapping segments: for noise-like and any other excitation (references 1, 2).

H1 = S_yx S_xx^-1, H2 = S_yy S_xy^-1, Hv by total least squares. The deviation is that of the least squares problem of
each line, with the correlation of overlapping segments; for one input and segments without overlap it is the textbook's

    deviation^2 = |H|^2 (1 - c) / (c (K - 1)),

with coherence c and K segments. The bias by finite resolution, from the curvature over the lines, is added in squares.
Of the lines only those are kept that are independent with the window: every second one with Hann's.

Sources
-------
1. P. D. Welch, IEEE Trans. Audio Electroacoustics 15(2), 1967.
2. J. S. Bendat, A. G. Piersol, *Random Data*, 4th edition, 2010, sections 7.1 to 7.3, 9.1 to 9.3 (from memory).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from realize.errors import InputError, Refused
from realize.estimation.noise import deviation_factor, pooled_noise
from realize.estimation.records import Array, ComplexArray, Estimate, Record, Settings
from realize.kernels.spectra import (
    Lines,
    independent_step,
    resolution_bias,
    segment_spectra,
    solve_lines,
    total_least_squares,
    window_correlation,
    window_of,
)

#: Estimates of two lines count as independent below this squared correlation.
ALIKE = 0.05
#: Lines whose input has less than this share of the largest power are not excited.
UNEXCITED = 1e-10
#: Inputs that move together to within this share cannot be told apart.
TOGETHER = 1e-6
#: Fewest segments side by side for each input where the length is chosen here: a fit averages over lines, and what it
#: cannot mend is resolution.
SEGMENTS_PER_INPUT = 8
#: Most numbers in all segments together.
MOST = 200_000_000
#: Shortest segment that is chosen here, samples.
SHORTEST = 16
#: Share of the lines at which the bias by resolution may exceed twice the random error without a caution.
BIASED = 0.02


@dataclass(frozen=True)
class _Cut:
    """Where the segments lie: first samples, their record, the window."""

    starts: NDArray[np.int64]
    runs: NDArray[np.int64]
    window: Array

    @property
    def averages(self) -> float:
        """Number of segments without overlap that would average noise as well."""
        total = 0.0
        for run in np.unique(self.runs):
            own = self.starts[self.runs == run]
            step = int(own[1] - own[0]) if own.size > 1 else self.window.size
            alike = range(1, min(own.size, -(-self.window.size // step)))
            total += own.size
            total += 2 * sum((own.size - q) * window_correlation(self.window, q * step) ** 2 for q in alike)
        return self.starts.size**2 / total if total > 0 else 0.0


def average(records: list[Record], period: float, settings: Settings) -> Estimate:
    """Return the estimate from segments of all records; raises InputError where there are too few samples."""
    m = records[0].inputs.shape[1]
    if settings.segment is not None:
        return _finished(records, period, settings, settings.segment, chosen=False)
    shortest = min(record.inputs.shape[0] for record in records)
    total = sum(record.inputs.shape[0] for record in records)
    longest = min(total // (SEGMENTS_PER_INPUT * m), shortest)
    if longest < SHORTEST:
        least = SHORTEST * SEGMENTS_PER_INPUT * m
        raise InputError(
            f"{total} samples",
            f"at least {least} for {m} input(s), {SEGMENTS_PER_INPUT * m} segments of {SHORTEST}; or pass --segment",
            field="input",
        )
    return _finished(records, period, settings, 1 << (longest.bit_length() - 1), chosen=True)


def _cut(records: list[Record], length: int, settings: Settings) -> _Cut:
    window = window_of(settings.window, length)
    step = max(1, length - round(settings.overlap * length))
    starts, runs = [], []
    for k, record in enumerate(records):
        own = np.arange(0, record.inputs.shape[0] - length + 1, step, dtype=np.int64)
        starts.append(own)
        runs.append(np.full(own.size, k, dtype=np.int64))
    return _Cut(np.concatenate(starts), np.concatenate(runs), window)


def _finished(records: list[Record], period: float, settings: Settings, length: int, *, chosen: bool) -> Estimate:
    m, p = records[0].inputs.shape[1], records[0].outputs.shape[1]
    if length < 8:
        raise InputError(f"segments of {length} samples", "at least 8", field="segment")
    cut = _cut(records, length, settings)
    if cut.starts.size * length * (m + p) > MOST:
        raise Refused(
            f"{cut.starts.size:,} segments of {length:,} samples do not fit in memory: pass a smaller --overlap, or "
            "thin the record out"
        )
    if cut.averages < m + 1:
        raise InputError(
            f"{cut.starts.size} segment(s) of {length} samples, {cut.averages:.3g} independent ones",
            f"more than {m + 1} for {m} input(s); pass a smaller --segment",
            field="segment",
        )
    spectra = [
        np.concatenate(
            [
                segment_spectra(getattr(record, side), cut.starts[cut.runs == k], cut.window)
                for k, record in enumerate(records)
            ],
            axis=1,
        )
        for side in ("inputs", "outputs")
    ]
    # the mean and the highest line, which is real, tell nothing about a response
    line = np.arange(1, (length + 1) // 2)
    x, y = spectra[0][line], spectra[1][line]
    power = np.sum(np.abs(x) ** 2, axis=1)
    excited = np.all(power > UNEXCITED * np.max(power, axis=0), axis=1)
    if not np.any(excited):
        raise InputError("no line at which all inputs move", "inputs with a common band", field="input")
    x, y, line = x[excited], y[excited], line[excited]
    solved = solve_lines(x, y, line, cut.starts, cut.runs, cut.window)
    if np.median(solved.condition) < TOGETHER:
        raise InputError(
            "inputs that move together",
            "inputs that are independent of each other; or one experiment for each input, as several records",
            field="input",
        )
    freedom = max(cut.averages - m, 0.25)
    response, variance = _response(x, y, solved, line, cut, settings.estimator, freedom)
    bias = resolution_bias(response, cut.window)
    step = independent_step(cut.window, ALIKE)
    kept = (line % step == 0) & (line >= 2)
    kept = kept if np.any(kept) else np.ones(line.size, bool)
    random = np.sqrt(variance[kept])
    bias = bias[kept]
    size = np.sqrt(np.mean(np.abs(response[kept]) ** 2, axis=0))
    biased = np.any((bias > 2 * random) & (bias > 1e-3 * size), axis=(1, 2))
    partial, multiple = coherences(solved)
    partial, multiple = partial[kept], multiple[kept]
    cautions = []
    limit = 1 - 0.01 ** (1 / freedom)
    unrelated = np.median(multiple, axis=0) < limit
    for i in np.flatnonzero(unrelated):
        cautions.append(
            f"output {i} is not related to the inputs: its coherence is {np.median(multiple[:, i]):.2g} at half of the "
            f"lines, and noise alone gives up to {limit:.2g} with {cut.averages:.3g} averages"
        )
    if np.mean(biased) > BIASED:
        cautions.append(
            f"segments of {length} samples resolve {1 / (length * period):.3g} Hz, and the response turns faster than "
            "that at some lines, where peaks come out too low and too wide: the curvature is added to their deviation; "
            + ("record for longer" if chosen else "pass a longer --segment, or record for longer")
        )
    return Estimate(
        frequency=line[kept] / (length * period),
        response=response[kept],
        deviation=np.hypot(random, bias),
        coherence=partial,
        method=f"{settings.estimator}, welch, {settings.window} window, {cut.starts.size} segments of {length}",
        cautions=cautions,
        details={
            "averaging": "welch",
            "estimator": settings.estimator,
            "window": settings.window,
            "segment": length,
            "segments": int(cut.starts.size),
            "averages": float(cut.averages),
            "resolution": 1 / (length * period),
            "biased_share": float(np.mean(biased)),
            "multiple_coherence": [float(np.median(multiple[:, i])) for i in range(p)],
        },
    )


def coherences(solved: Lines) -> tuple[Array, Array]:
    """Return partial coherence [lines][outputs][inputs] and multiple coherence [lines][outputs].

    Partial: |H_ij|^2 / (|H_ij|^2 + R_i [(X^H X)^-1]_jj) with the residual power R_i; the ordinary one for one input.
    """
    part = np.abs(solved.response) ** 2
    other = solved.residual[:, :, None] * solved.plain[:, None, :]
    total = part + other
    partial = np.where(total > 0, part / np.where(total > 0, total, 1.0), 0.0)
    whole = np.where(solved.power > 0, solved.power, 1.0)
    return np.clip(partial, 0, 1), np.clip(np.where(solved.power > 0, 1 - solved.residual / whole, 0.0), 0, 1)


def _response(
    x: ComplexArray, y: ComplexArray, solved: Lines, line: NDArray[np.int64], cut: _Cut, estimator: str, freedom: float
) -> tuple[ComplexArray, Array]:
    """Return the response of an estimator and the variance of its random error."""
    noise = np.einsum("kii->ki", solved.noise).real
    spread = np.einsum("kjj->kj", solved.spread).real
    if estimator == "h1":
        shared, total = pooled_noise(noise, freedom)
        return solved.response, shared[:, :, None] * spread[:, None, :] * deviation_factor(total) ** 2
    if estimator == "hv":
        response = total_least_squares(x, y)
        errors = np.swapaxes(y, 1, 2) - response @ np.swapaxes(x, 1, 2)
        left = np.sum(np.abs(errors) ** 2, axis=2) / solved.freedom[:, None]
        shared, total = pooled_noise(left, freedom)
        # the inputs carry noise too: their true power is less by the root of the coherence
        multiple = coherences(solved)[1]
        true = np.sqrt(np.clip(multiple, 0.05, 1.0))
        return response, (shared / true)[:, :, None] * spread[:, None, :] * deviation_factor(total) ** 2
    # h2 is the inverse of the response from outputs to inputs: dH = -H dG H
    back = solve_lines(y, x, line, cut.starts, cut.runs, cut.window)
    if np.median(back.condition) < TOGETHER:
        raise InputError("outputs that move together", "outputs that are independent of each other", field="output")
    response = np.linalg.inv(back.response).astype(complex)
    own = np.einsum("kaa->ka", back.noise).real
    shared, total = pooled_noise(own, freedom)
    factor = np.sqrt(shared / np.where(own > 0, own, 1.0))
    pooled = back.noise * factor[:, :, None] * factor[:, None, :]
    left = np.einsum("kia,kac,kic->ki", response, pooled, np.conj(response)).real
    right = np.einsum("kbj,kbd,kdj->kj", response, back.spread, np.conj(response)).real
    return response, np.maximum(left[:, :, None] * right[:, None, :], 0) * deviation_factor(total) ** 2
