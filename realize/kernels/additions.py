"""Poles worth adding to a fit: candidates over the band and around the largest misfit, each gain exact."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from realize.kernels.separable import groups_of
from realize.kernels.variable_projection import Sections, poles_of, sections_of
from realize.kernels.vector_fitting import stacked

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]


def best_additions(
    points: ComplexArray,
    poles: ComplexArray,
    values: ComplexArray,
    weights: Array,
    direct: bool,
    vanish: float,
) -> tuple[ComplexArray, ComplexArray]:
    """Return the pair and the real pole that lower the cost most when they are added, all present poles kept.

    A list of candidates is tried: pairs at the lines of the largest misfit and at frequencies spread over the band,
    each with damping ratios from half the distance of the lines up to 0.7; real poles spread over the band and a
    decade beyond; a few of both far outside. The gain of each is exact (linear least squares by
    projection). Parameters as in ``polished``.
    """
    x = points.imag
    w, a, single = sections_of(poles)
    offset = np.inf if direct else vanish
    basis = Sections(points, np.log(np.concatenate([w, a, single])), w.size, offset).columns()
    if direct:
        basis = np.hstack([basis, np.ones((x.size, 1))])
    parts = []
    strength = np.zeros(x.size)
    for members, common, factor in groups_of(weights):
        q = np.linalg.qr(_scaled(stacked(common[:, None] * basis)))[0]
        rest = stacked(common[:, None] * factor * values[:, members])
        rest -= q @ (q.T @ rest)
        rest -= q @ (q.T @ rest)
        strength += np.sum(rest[: x.size] ** 2 + rest[x.size :] ** 2, axis=1)
        parts.append((common, q, rest))
    pair_w, pair_a, real = addition_candidates(x, strength)
    m = pair_w.size
    trial = stacked(Sections(points, np.log(np.concatenate([pair_w, pair_a, real])), m, offset).columns())
    gains = np.zeros(m + real.size)
    for common, q, rest in parts:
        columns = np.tile(common, 2)[:, None] * trial
        before = np.linalg.norm(columns, axis=0)
        columns -= q @ (q.T @ columns)
        gains += gains_of(columns, rest.T @ columns, before, m)
    best = int(np.argmax(gains[:m]))
    pair = poles_of(pair_w[best : best + 1], pair_a[best : best + 1], np.zeros(0))
    return pair, np.array([complex(-real[int(np.argmax(gains[m:]))])])


def addition_candidates(x: Array, strength: Array) -> tuple[Array, Array, Array]:
    """Return w and a of pairs, and a of real poles, worth trying for the misfit power of each line."""
    positive = x[x > 0]
    low, high = positive[0], positive[-1]
    around = np.concatenate([strength[:1], strength, strength[-1:]])
    smooth = strength + 0.5 * (around[:-2] + around[2:])
    padded = np.concatenate([[-1.0], smooth, [-1.0]])
    peaks = np.flatnonzero((smooth >= padded[:-2]) & (smooth > padded[2:]) & (x > 0))
    peaks = peaks[np.argsort(-smooth[peaks], kind="stable")][:10]
    spread = np.unique(np.rint(np.linspace(0, x.size - 1, 14)).astype(int))
    lines = np.unique(np.concatenate([peaks, spread[x[spread] > 0]]))
    gap = np.gradient(x) if x.size > 1 else np.ones(1)
    frequency: list[float] = []
    damping: list[float] = []
    for k in lines:
        narrow = min(max(gap[k] / (2 * x[k]), 1e-9), 0.7)
        for zeta in np.geomspace(narrow, 0.7, 6):
            frequency.append(x[k])
            damping.append(zeta)
    # outside the band: what a double integrator below it, or a resonance above it, leaves within
    for place in [low * 2.0**-k for k in (1, 2, 4, 7, 12, 17)] + [high * 2.0**k for k in (0.5, 1.5, 4)]:
        frequency += [place, place]
        damping += [0.02, 0.7]
    real = [
        low * np.array([1e-9, 1e-6, 1e-4, 1e-2]),
        np.geomspace(low / 10, high * 10, 24),
        high * np.array([1e3, 1e6]),
    ]
    return np.array(frequency), 2 * np.array(frequency) * np.array(damping), np.concatenate(real)


def _scaled(matrix: Array) -> Array:
    norm = np.linalg.norm(matrix, axis=0)
    return matrix / np.where(norm > 0, norm, 1.0)


def gains_of(columns: Array, inner: Array, before: Array, m: int) -> Array:
    """Return what each candidate takes off the cost of all channels: inner [channels][columns].

    Pairs own columns i and m + i, real poles one column each.
    """
    square = np.sum(columns**2, axis=0)
    # a column that the present poles span already has nothing left but rounding
    kept = square > (1e-6 * before) ** 2
    first, second, rest = slice(0, m), slice(m, 2 * m), slice(2 * m, None)
    power = np.sum(inner**2, axis=0)
    mixed = np.sum(inner[:, first] * inner[:, second], axis=0)
    alone = np.where(kept, power / np.where(kept, square, 1.0), 0.0)
    cross = np.sum(columns[:, first] * columns[:, second], axis=0)
    e = square[first] * square[second] - cross**2
    both = kept[first] & kept[second] & (e > 1e-9 * square[first] * square[second])
    joint = square[second] * power[first] + square[first] * power[second] - 2 * cross * mixed
    pair = np.where(both, joint / np.where(both, e, 1.0), np.maximum(alone[first], alone[second]))
    return np.concatenate([pair, alone[rest]])
