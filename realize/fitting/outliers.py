"""Lines that do not belong: found before the search so that no pole is spent on them, weighted down in the fit.

Before. A line that its neighbours do not predict, while they predict each other once it is replaced, is no resonance:
it is trusted less during the search over orders.

After. u = misfit / deviation of one line and channel is exponential in square for Gaussian errors; beyond t, which only
one fit in a hundred reaches by chance anywhere, the deviation of the entry is enlarged by u/t. Its influence then falls
like 1/u (the weights of a Cauchy distribution beyond t, of a Gaussian one within; source 1), and the fit is repeated
until the entries stay the same. A model that lacks something is no fault of the lines: only where the other lines
misfit no more than the noise are entries treated so, and longer runs of lines only where their misfit is as rough as
noise.

Sources
-------
1. P. J. Huber, E. M. Ronchetti, Robust Statistics, 2nd edition 2009, chapters 3 and 7 (from memory).
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from realize.fitting.noise import noise_factor, noise_shape, smoothed_size, unpredicted
from realize.fitting.order import Search, Trial, polish
from realize.fitting.problem import Problem
from realize.fitting.records import Outlier
from realize.fitting.registry import Outcome

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

#: Chance that Gaussian errors of a whole fit reach the threshold anywhere.
CHANCE = 0.01
#: Fewer lines than this do not tell an outlier from a response.
FEWEST = 24
#: Longest run of lines that may be outliers whatever their misfit looks like, and the largest share of all lines.
LONGEST_RUN, MOST = 3, 0.1
#: Power that neighbours do not predict, as a share of all: about 0.8 for noise, and under 0.1 for a response that has
#: some lines to each feature. Above this the misfit of a run is rough. Runs nearer than this many lines are one.
ROUGH, NEAR = 0.25, 3
#: The misfit of the other lines is at most this many times the noise that neighbouring lines show.
POOR = 1.5
#: An error of less than this share of a channel's peak is not looked for before the fit.
SMALLEST = 2.0**-20
#: Repetitions of the weighted fit.
ROUNDS = 6


def threshold(entries: int) -> float:
    """Return t with entries exp(-t^2) = CHANCE."""
    return float(np.sqrt(np.log(entries / CHANCE)))


def trusted(problem: Problem) -> Problem:
    """Return the problem with the weights of isolated lines lowered, and how far they are: ``trust``."""
    lines, channels = problem.values.shape
    if lines < FEWEST:
        return problem
    limit = threshold(lines * channels)
    trust = np.ones((lines, channels))
    for c in range(channels):
        values, weight = problem.values[:, c].copy(), problem.weights[:, c]
        if not np.any(values):
            continue
        missed = np.zeros(lines)
        missed[2:-2] = np.abs(unpredicted(problem.x, values[:, None])[:, 0]) * weight[2:-2]
        scale = 1.0 if problem.known else float(np.sqrt(np.median(missed[2:-2] ** 2) / np.log(2)))
        least = SMALLEST * float(np.max(np.abs(values)))
        if scale == 0:
            continue
        suspects = np.flatnonzero((missed > limit * scale) & (missed > least * weight))
        if suspects.size > 2.5 * LONGEST_RUN * MOST * lines:
            continue
        for k in suspects[np.argsort(-missed[suspects], kind="stable")]:
            size = _error_alone(problem.x, values, weight, int(k), limit * scale)
            if size > limit * scale:
                values[k] = _interpolated(problem.x, values, int(k))
                trust[k, c] = limit * scale / size
    if np.all(trust == 1):
        return problem
    return replace(problem, weights=problem.weights * trust, trust=trust)


def _interpolated(x: Array, values: ComplexArray, k: int) -> complex:
    nodes = np.array([k - 2, k - 1, k + 1, k + 2])
    result = 0j
    for i in nodes:
        part = 1.0
        for j in nodes:
            if i != j:
                part *= (x[k] - x[j]) / (x[i] - x[j])
        result += part * complex(values[i])
    return result


def _error_alone(x: Array, values: ComplexArray, weight: Array, k: int, limit: float) -> float:
    """Return the weighted error of line k if its neighbours are predicted once it is replaced, else 0."""
    low, high = max(k - 4, 0), min(k + 5, values.size)
    if high - low < 9:
        return 0.0
    patch = values[low:high].copy()
    place = k - low
    patch[place] = _interpolated(x[low:high], patch, place)
    # lines k - 2 to k + 2 but k itself, whose prediction is what was put there
    left = np.abs(unpredicted(x[low:high], patch[:, None])[:, 0]) * weight[low + 2 : high - 2]
    if np.any(np.delete(left, place - 2) > limit):
        return 0.0
    return float(np.abs(values[k] - patch[place]) * weight[k])


def without_outliers(outcome: Outcome, lowest: int, highest: int) -> Outcome:
    """Return the outcome fitted again with outliers weighted down, and in ``sizes`` u where there are some, else 0.

    Without outliers the outcome is the one handed over, but for lines that were trusted less without need.
    """
    problem = outcome.problem
    trust = np.ones(problem.values.shape) if problem.trust is None else problem.trust
    base = replace(problem, weights=problem.weights / trust, trust=None)
    nothing = np.zeros(problem.values.shape)
    if problem.points.size < FEWEST or problem.numbers <= 2 * problem.unknowns(outcome.poles.size):
        return outcome if problem.trust is None else replace(outcome, problem=base)
    poles, found = outcome.poles, 1 / trust
    sizes = nothing
    for turn in range(ROUNDS):
        sizes = _outliers(base, poles, found)
        factor = np.maximum(sizes / threshold(sizes.size), 1.0)
        if np.array_equal(factor > 1, found > 1) and np.max(np.abs(factor / found - 1)) < 0.05:
            break
        if base.estimated and turn == 0:
            # the shape of the noise was estimated with the outliers in
            misfit = np.where(factor > 1, 0.0, base.misfit(poles))
            size = smoothed_size(base.values + base.misfit(poles), 0)
            base = base.with_weights(1 / noise_shape(base.x, misfit, size))
        found = factor
        poles = polish(base.with_weights(base.weights / found), poles, 12, 1e-4).poles
    if np.all(found == 1) and problem.trust is None:
        return outcome
    final = base.with_weights(base.weights / found)
    if lowest < highest and poles.size > lowest:
        search = Search(final)
        trial = polish(final, poles, 30, 1e-6)
        search.best[trial.order] = trial
        better: Trial = search.prune(trial.order, lowest, search.noise_power())
        poles = polish(final, better.poles, 60, 1e-9).poles
    else:
        poles = polish(final, poles, 60, 1e-9).poles
    poles = final.apart(poles)
    order = poles.size + final.given
    candidates = tuple(replace(c, kept=c.order == order) for c in outcome.candidates)
    if not any(c.kept for c in candidates):
        candidates = outcome.candidates
    sizes = np.where(found > 1, sizes, 0.0)
    return replace(outcome, problem=final, poles=poles, candidates=candidates, sizes=sizes)


def _outliers(base: Problem, poles: ComplexArray, found: Array) -> Array:
    """Return u of entries that count as outliers with these poles, 0 elsewhere."""
    misfit = base.with_weights(base.weights / found).misfit(poles)
    active = np.any(base.values != 0, axis=0)
    u = np.abs(misfit * base.weights)
    free = base.numbers / max(base.numbers - base.unknowns(poles.size), 1)
    scale = float(np.sqrt(np.median(u[:, active] ** 2) / np.log(2) * free))
    least = float(np.sqrt(2 * base.rounding(poles) / base.numbers))
    if scale <= least:
        return np.zeros(u.shape)
    noise = 1.0 if base.known else noise_factor(base.x, misfit[:, active], base.weights[:, active]) * np.sqrt(free)
    if scale > POOR * noise:
        return np.zeros(u.shape)
    if base.known:
        # deviations that were given count as they are
        scale = max(scale, 1.0)
    flagged = (u > threshold(u.size) * scale) & active
    for c in range(u.shape[1]):
        flagged[:, c] &= ~_smooth_runs(flagged[:, c], base.x, misfit[:, c])
    if np.mean(np.any(flagged, axis=1)) > MOST:
        return np.zeros(u.shape)
    return np.where(flagged, u / scale, 0.0)


def _smooth_runs(flags: NDArray[np.bool_], x: Array, misfit: ComplexArray) -> NDArray[np.bool_]:
    """Return the flags of runs longer than LONGEST_RUN over which neighbours predict the misfit of each other."""
    lines = np.flatnonzero(flags)
    result = np.zeros(flags.size, dtype=bool)
    for run in np.split(lines, np.flatnonzero(np.diff(lines) >= NEAR) + 1):
        if run.size <= LONGEST_RUN:
            continue
        first, last = run[0], run[-1] + 1
        low, high = max(first - 2, 0), min(last + 2, x.size)
        rough = np.mean(np.abs(unpredicted(x[low:high], misfit[low:high, None])) ** 2) if high - low >= 5 else 0.0
        result[first:last] = rough < ROUGH * np.mean(np.abs(misfit[first:last]) ** 2)
    return result


def outlier_rows(
    sizes: Array | None, used: NDArray[np.bool_], w: Array, inputs: int
) -> tuple[tuple[Outlier, ...], list[str]]:
    """Return the outliers by decreasing size, and words about them.

    Parameters
    ----------
    sizes : [used lines][channels] float or None
        Misfit in deviations, 0 where there is no outlier.
    used : [k] bool
    w : [k] float
        rad/s.
    inputs : int
    """
    if sizes is None or not np.any(sizes > 0):
        return (), []
    places = np.argwhere(sizes > 0)
    lines, limit = np.flatnonzero(used), threshold(sizes.size)
    rows = []
    for k, c in places.tolist():
        size = float(sizes[k, c])
        line = int(lines[k])
        rows.append(Outlier(line, c // inputs, c % inputs, float(w[line]), size, min(1.0, (limit / size) ** 2)))
    rows.sort(key=lambda row: -row.size)
    distinct = np.unique([row.frequency for row in rows]) / (2 * np.pi)
    listed = ", ".join(f"{hertz:.6g}" for hertz in distinct[:6]) + (", ..." if distinct.size > 6 else "")
    text = (
        f"{len(rows)} value(s) of {distinct.size} line(s) misfit beyond chance and count less, the worst with a weight "
        f"of {rows[0].weight:.2g} ({rows[0].size:.3g} deviations): {listed} Hz"
    )
    mains = hum(distinct)
    if mains is not None:
        text += f"; they are multiples of {mains:g} Hz, as mains hum is"
    return tuple(rows), [text]


def hum(frequency: Array) -> float | None:
    """Return 50 or 60 where at least three quarters of the frequencies (Hz, three at least) are multiples of it."""
    if frequency.size < 3:
        return None
    for mains in (50.0, 60.0):
        turns = frequency / mains
        near = (np.abs(turns - np.rint(turns)) < 0.02) & (turns > 0.5)
        if np.mean(near) >= 0.75 and np.unique(np.rint(turns[near])).size >= 2:
            return mains
    return None
