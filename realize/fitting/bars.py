"""Error bars: the size of the noise, what the misfit says against the assumptions, and deviations enlarged to suit.

Maximum likelihood with independent errors of the stated shape has the covariance of ``realize.fitting.covariance``.
The misfit is asked whether that is so: alike from line to line, alike between channels, as large as stated where each
mode lives. Where it is not, each mode's variance is the larger one of two: that one, and the sandwich that puts the
covariance of the errors as the misfit shows it between the same derivatives (sources 1 and 2), with correlations
pooled over all lines.

Sources
-------
1. H. White, "A heteroskedasticity-consistent covariance matrix estimator and a direct test for heteroskedasticity",
   Econometrica 48, 1980; residuals divided by sqrt(1 - leverage) (J. G. MacKinnon, H. White, Journal of Econometrics
   29, 1985), from memory.
2. W. K. Newey, K. D. West, "A simple, positive semi-definite, heteroskedasticity and autocorrelation consistent
   covariance matrix", Econometrica 55, 1987, from memory.
3. R. Pintelon, J. Schoukens, System Identification: A Frequency Domain Approach, 2nd edition 2012, section 11.3
   (whiteness of residuals), from memory.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from realize.fitting.covariance import Covariance
from realize.fitting.records import Bars
from realize.fitting.sample_problem import Measured
from realize.fitting.solution import Estimate, unknowns_of
from realize.kernels.information import length

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

#: Deviations of a test statistic that pure chance does not reach (once in some ten thousand).
CHANCE = 4.0
#: Lags looked at by the test of whiteness.
LAGS = 12
#: Fewer lines than this say nothing about how errors go together.
FEWEST = 24
#: Leverage above this counts as this: a line that the fit passes through says nothing about its own error.
MOST_LEVERAGE = 0.9


@dataclass(frozen=True, eq=False)
class Judged:
    """Bars, the deviation of ``wanted`` pole gradients, and the factor by which each pole's other bars grow."""

    bars: Bars
    deviation: Array
    growth: Array


def judged(problem: Measured, solution: Estimate, wanted: Array) -> Judged:
    """Return the error bars of linear functions of the pole coordinates.

    Parameters
    ----------
    problem : Problem or SampleProblem
    solution : Estimate
    wanted : [functions][n] float
        Gradients by the pole coordinates.

    Returns
    -------
    Judged
        ``deviation`` [functions], infinite where the data leave it undetermined or no degree of freedom is left;
        ``growth`` [functions] at least 1.
    """
    covariance = solution.covariance
    freedom = problem.numbers - unknowns_of(solution, problem)
    level, enlarged = noise_size(problem, solution, freedom)
    plain = length(wanted @ covariance.pole_root)
    loose = np.any((wanted != 0) & covariance.free, axis=1)
    leverage = np.minimum(
        (covariance.response_deviation(problem.points) * problem.weights) ** 2,
        MOST_LEVERAGE,
    )
    scaled = problem.weights * solution.misfit / np.sqrt(1 - leverage)
    scaled = scaled[:, covariance.active]
    rho = alike_lines(scaled, problem.parts)
    across = alike_channels(scaled, problem.parts)
    size = level if level is not None else 0.0
    growth = np.ones(wanted.shape[0])
    if size > 0 and wanted.size and problem.points.size >= FEWEST:
        turned = _turned(problem, solution, wanted)
        # the fitted values: given ones that are all noise are small where their errors are
        model = (problem.values + solution.misfit)[:, covariance.active]
        power = uneven(scaled / size, model, problem.parts)
        growth = np.sqrt(_variance_ratio(turned, scaled / size, rho, across, power, problem.parts))
    deviation = np.where(loose | (level is None), np.inf, plain * size * growth)
    bars = Bars(
        level,
        "sandwich" if np.any(growth > 1) else "information",
        freedom,
        float(rho[1]) if rho.size > 1 else 0.0,
        is_white(rho, scaled.shape[0] * (scaled.shape[1] if across is None else 1), problem.parts),
        across is None,
        enlarged,
        float(np.max(growth, initial=1.0)),
    )
    return Judged(bars, deviation, growth)


def noise_size(problem: Measured, solution: Estimate, freedom: int) -> tuple[float | None, bool]:
    """Return the noise in units of 1/weights, and whether it is more than what was given.

    Known deviations count as they are unless the misfit is larger beyond chance. Otherwise the misfit over the degrees
    of freedom f; sqrt(f/(f - 2)) more, so that error over bar has mean square 1 although the size is an estimate
    itself (the variance of Student's distribution). Never less than rounding.
    """
    cost = problem.unlikelihood(solution.misfit)
    least = float(np.sqrt(2 * problem.rounding(solution.free_poles) / max(problem.numbers, 1)))
    if freedom <= 2:
        return (1.0, False) if problem.known else (None, False)
    found = float(np.sqrt(2 * cost / freedom))
    if problem.known and found <= 1 + CHANCE / np.sqrt(2 * freedom):
        return max(1.0, least), False
    return max(found * float(np.sqrt(freedom / (freedom - 2))), least), problem.known


def alike_lines(scaled: ComplexArray, parts: int = 2) -> Array:
    """Return the correlation of misfits by their distance in lines, from lag 0 to the last one beyond chance.

    For independent errors the correlation of N numbers of so many real parts has the deviation 1/sqrt(parts N).
    White misfits give [1, r] with the first correlation r. Samples of time count negative correlations too: those of
    differences have them, and modes near half the rate have the larger bars.
    """
    lines, channels = scaled.shape
    power = float(np.sum(np.abs(scaled) ** 2))
    if power == 0 or lines < FEWEST:
        return np.array([1.0])
    # channels that err together count once
    count = parts * lines * (1 if alike_channels(scaled, parts) is not None else channels)
    found = [1.0] + [
        float(np.sum((scaled[lag:].conj() * scaled[:-lag]).real)) / power for lag in range(1, min(LAGS, lines // 4) + 1)
    ]
    sizes = np.abs(found) if parts == 1 else np.array(found)
    last = max((lag for lag, r in enumerate(sizes[1:], 1) if r > CHANCE / np.sqrt(count)), default=0)
    return np.array(found[: last + 1] if last else found[:2])


def is_white(rho: Array, count: int, parts: int = 2) -> bool:
    """Return whether no correlation of a misfit with that many values of so many real parts is beyond chance."""
    sizes = np.abs(rho) if parts == 1 else rho
    return rho.size < 2 or bool(np.all(sizes[1:] <= CHANCE / np.sqrt(parts * count)))


def alike_channels(scaled: ComplexArray, parts: int = 2) -> ComplexArray | None:
    """Return the correlation of the misfits of different channels, None where it is no more than chance.

    The squared coherence of independent misfits has the mean 1/lines, and the deviation sqrt(2/parts)/lines.
    """
    lines, channels = scaled.shape
    if channels < 2 or lines < FEWEST:
        return None
    size = np.linalg.norm(scaled, axis=0)
    unit = scaled / np.where(size > 0, size, 1.0)
    matrix = unit.conj().T @ unit
    pairs = channels * (channels - 1) / 2
    mean = float(np.sum(np.triu(np.abs(matrix) ** 2, 1))) / pairs
    # half as much again: channels share poles, and what those took from each
    return matrix if mean > 1.5 * (1 + CHANCE * np.sqrt(2 / (parts * pairs))) / lines else None


def uneven(scaled: ComplexArray, values: ComplexArray, parts: int = 2) -> Array:
    """Return the power of the misfit, relative to its deviation, as it goes with the response's size: [k][channels].

    All ones where groups of like size do not differ beyond chance: a square of so many real parts has the deviation
    sqrt(2/parts).
    """
    top = np.max(np.abs(values), axis=0)
    size = np.abs(values) / np.where(top > 0, top, 1.0)
    power = np.abs(scaled) ** 2
    order = np.argsort(size.reshape(-1), kind="stable")
    groups = np.array_split(order, int(np.clip(order.size // 24, 2, 16)))
    mean = np.array([np.mean(power.reshape(-1)[g]) for g in groups])
    result = np.ones(power.size)
    if np.any(mean > 1 + (CHANCE + 1) * np.sqrt(2 / parts / min(g.size for g in groups))):
        for g, level in zip(groups, mean, strict=True):
            result[g] = level
    return result.reshape(power.shape)


def _turned(problem: Measured, solution: Estimate, wanted: Array) -> ComplexArray:
    """Return t with which misfits e, in units of their deviation, move the functions: -2 Re sum conj(t) e: [f][k][c].

    A misfit moves the unknowns by -2 X X^T J^T e.
    """
    covariance: Covariance = solution.covariance
    root = covariance.pole_root
    own = np.where(problem.real, np.sqrt(0.5), 1.0)[:, None] * problem.weights
    rows = []
    for c in np.flatnonzero(covariance.active):
        across = covariance.channel_root(int(c))[:, : root.shape[1]] @ (wanted @ root).T
        slopes = covariance.slopes.at(problem.points, int(c))
        rows.append((own[:, c, None] * (slopes @ across)).T)
    return np.stack(rows, axis=2)


def _variance_ratio(
    turned: ComplexArray, scaled: ComplexArray, rho: Array, across: ComplexArray | None, power: Array, parts: int
) -> Array:
    """Return how much larger the variance of each function is than that of independent errors of level 1; at least 1.

    Two estimates: from correlations pooled over all lines, V = 2 Re sum rho(l - k) R_cd conj(t_kc) t_ld with t scaled
    by the power that goes with the size of the response; and from the function's own lines, sum (2 Re conj(t) e)^2
    (half of it where e is real: its square is not shared with an imaginary part), which counts where it is beyond
    what as few lines as a mode has can make by chance.
    """
    usual = 2 * np.sum(np.abs(turned) ** 2, axis=(1, 2))
    weighted = turned * np.sqrt(power)
    mixed = weighted if across is None else weighted @ across.T
    pooled = 2 * np.sum((weighted.conj() * mixed).real, axis=(1, 2))
    if not is_white(rho, scaled.shape[0] * (scaled.shape[1] if across is None else 1), parts):
        for lag in range(1, rho.size):
            pooled += 4 * rho[lag] * np.sum((weighted[:, lag:].conj() * mixed[:, :-lag]).real, axis=(1, 2))
    line = 2 * np.sum(np.abs(turned) ** 2, axis=2)
    local = 0.5 * parts * np.sum(np.sum(2 * (turned.conj() * scaled).real, axis=2) ** 2, axis=1)
    safe = np.where(usual > 0, usual, 1.0)
    few = np.where(usual > 0, np.sum(line**2, axis=1) / safe**2, 1.0)
    own = np.where(local / safe > 1 + CHANCE * np.sqrt(2 * few), local / safe, 1.0)
    # below a thousandth it is rounding
    ratio = np.maximum(pooled / safe, own)
    return np.where((usual > 0) & (ratio > 1.001), ratio, 1.0)
