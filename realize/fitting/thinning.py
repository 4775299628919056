"""Fewer lines for the search over orders, where there are very many; the fit itself always uses all of them."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from realize.fitting.problem import Problem

#: Lines times channels that the search over orders works on.
SEARCH_SIZE = 6000
#: Fewest lines left by thinning.
FEWEST = 500


def thinned(problem: Problem) -> Problem:
    """Return the problem with some of its lines, or itself where it is small enough.

    Half of the lines left are evenly spread in place; the others are whole stretches between those where linear
    interpolation misses most (resonances), judged by the sum over the stretch so that single noisy lines do not count.
    """
    keep = max(SEARCH_SIZE // problem.channels, FEWEST)
    return thinned_to(problem, keep) if problem.points.size > 1.5 * keep else problem


def thinned_to(problem: Problem, keep: int) -> Problem:
    """Return the problem with at most so many of its lines (or a stretch more), chosen as ``thinned`` says."""
    lines, channels = problem.values.shape
    if lines <= keep:
        return problem
    spread = np.unique(np.rint(np.linspace(0, lines - 1, keep // 2)).astype(int))
    missed = np.zeros(lines)
    for c in range(channels):
        values = problem.values[:, c]
        between = np.interp(problem.x, problem.x[spread], values[spread].real) + 1j * np.interp(
            problem.x, problem.x[spread], values[spread].imag
        )
        missed += np.abs(problem.weights[:, c] * (values - between)) ** 2
    stretch = np.searchsorted(spread, np.arange(lines), side="right") - 1
    power = np.bincount(stretch, weights=missed) / np.maximum(np.bincount(stretch), 1)
    size = np.bincount(stretch)
    chosen = np.zeros(lines, dtype=bool)
    chosen[spread] = True
    left = keep - spread.size
    for k in np.argsort(-power, kind="stable"):
        if left <= 0:
            break
        chosen[stretch == k] = True
        left -= int(size[k])
    trust = None if problem.trust is None else problem.trust[chosen]
    return replace(
        problem,
        points=problem.points[chosen],
        values=problem.values[chosen],
        weights=problem.weights[chosen],
        trust=trust,
    )
