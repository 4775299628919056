"""Dead times estimated with the fit: a start from trial fits, then jointly with the poles.

The dead time of a channel is the sum of those that act on it. Continuous responses: any number of seconds, found as an
unknown of the least squares problem beside the poles, with its standard deviation from the joint covariance. Sampled
responses: whole periods, since a model in z holds no other; what is left of a period is in the numerator.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from realize.fitting.order import HIGHEST_ORDER, spacing_of, start
from realize.fitting.prepare import Prepared
from realize.fitting.problem import Problem
from realize.fitting.records import DeadTimeRow, Fit
from realize.fitting.registry import Outcome
from realize.fitting.result import finish
from realize.kernels.structured_fit import Task, delay_covariance, structured_polish

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

#: Orders of the trial fits that look for a start, and lines that they use at most.
TRIAL_ORDERS, TRIAL_LINES = (3, 6, 12, 20), 200
#: Dead times tried: a quarter of a turn apart at the highest line, at most so many.
STEP, MOST_TRIALS = np.pi / 2, 120
#: Turns of lead that zeros may hide from the phase.
HIDDEN = 3.0
#: Step of the phase from line to line, radians, up to which its turns are certain.
CERTAIN = 2.2
#: Units with the most damping that trial fits from poles found leave out, one after the other.
MOST_LEFT_OUT = 3
#: Steps of half as much again by which a deviation may grow beyond that of the covariance.
MOST_DOUBLINGS = 8
#: Phase at the highest line, radians, by which a dead time may move without another search over orders.
SETTLED = 0.02
#: Searches over orders at the most.
ROUNDS = 4


def groups_of(kind: str, outputs: int, inputs: int) -> tuple[Array, list[tuple[int | None, int | None]]]:
    """Return which dead times act on which channel [channels][delays], and (output, input) of each."""
    channel = np.arange(outputs * inputs)
    if kind == "auto":
        return np.ones((channel.size, 1)), [(None, None)]
    if kind == "auto-per-input":
        return np.equal.outer(channel % inputs, np.arange(inputs)).astype(float), [(None, j) for j in range(inputs)]
    if kind == "auto-per-output":
        return np.equal.outer(channel // inputs, np.arange(outputs)).astype(float), [(i, None) for i in range(outputs)]
    return np.eye(channel.size), [(int(k) // inputs, int(k) % inputs) for k in channel]


@dataclass(frozen=True, eq=False)
class Estimate:
    """Dead times in the scaled unit, and their standard deviations (None: whole periods)."""

    delays: Array
    deviations: Array | None


def turned(problem: Problem, phase: Array, channels: Array) -> Problem:
    """Return the problem with dead times taken out.

    Parameters
    ----------
    phase : [k] float
        Angle of one unit of dead time at each line.
    channels : [channels] float
        Dead time of each channel in that unit.
    """
    return replace(problem, values=problem.values * np.exp(1j * phase[:, None] * channels))


def longest_delay(problem: Problem, phase: Array) -> float:
    """Return the longest dead time that the phase can hold: its lag, and what zeros may hide of it.

    The lag is counted from line to line up to the first step of more than ``CERTAIN``, where it could be another turn.
    """
    longest = 0.0
    for c in range(problem.channels):
        values = problem.values[:, c]
        if not np.any(values != 0):
            continue
        step = np.angle(values[1:] * values[:-1].conj())
        unsure = np.flatnonzero(np.abs(step) > CERTAIN)
        end = int(unsure[0]) if unsure.size and phase[unsure[0]] > 0.1 * phase[-1] else step.size
        if end > 0:
            longest = max(longest, 1.1 * float(-np.sum(step[:end])) / float(phase[end]))
    return longest + 2 * np.pi * HIDDEN / float(phase[-1])


def trial_delays(longest: float, top: float, whole: bool) -> Array:
    """Return dead times worth trying, up to the longest; ``top`` is the angle of one unit at the highest line."""
    if whole:
        return np.arange(min(int(longest), MOST_TRIALS) + 1, dtype=float)
    count = int(np.clip(longest * top / STEP, 2, MOST_TRIALS))
    return np.linspace(0.0, longest, count + 1)


def scan(problem: Problem, phase: Array, groups: Array, whole: bool, highest: int) -> Array:
    """Return a start for the dead times: those of the trial fits with the best criterion, one group after the other.

    Parameters
    ----------
    problem : Problem
    phase : [k] float
    groups : [channels][delays] float
    whole : bool
        Whole numbers alone.
    highest : int
        Largest number of free poles that the fit may have.
    """
    delays = np.zeros(groups.shape[1])
    orders = sorted({min(order, highest) for order in TRIAL_ORDERS})
    for g in range(groups.shape[1]):
        cut = _part(problem, groups[:, g])
        if cut is None:
            continue
        part, lines = cut
        delaying = trial_delays(_longest(problem, phase, groups[:, g]), float(phase[-1]), whole)
        usable = [n for n in orders if part.fewest <= n <= max(part.largest_order // 2, part.fewest)]
        starts = [start(part, n, spacing_of(part)) for n in usable]
        found = _trials(part, phase[lines], starts, delaying)
        delays[g] = _best(part, found, whole, delays[g])
    return delays


def rescan(
    problem: Problem, phase: Array, groups: Array, whole: bool, poles: ComplexArray, lowest: int
) -> tuple[Array, float, ComplexArray] | None:
    """Return the dead time, criterion and poles of trial fits from poles found, those with the most damping left out.

    Poles that stood in for a dead time have a large damping ratio: without them another dead time may do better. For
    one dead time of all channels alone.
    """
    if groups.shape[1] != 1 or poles.size == 0:
        return None
    upper = [k for k in np.flatnonzero(poles.imag >= 0) if poles[k].real < 0]
    upper.sort(key=lambda k: poles[k].real / abs(poles[k]))
    starts = []
    for count in range(min(len(upper), MOST_LEFT_OUT) + 1):
        out = [i for k in upper[:count] for i in ([k, k + 1] if poles[k].imag > 0 else [k])]
        left = np.delete(poles, out)
        if max(lowest, problem.fewest) <= left.size and left.size > 0:
            starts.append(left)
    cut = _part(problem, groups[:, 0])
    if cut is None or not starts:
        return None
    part, lines = cut
    delaying = trial_delays(_longest(problem, phase, groups[:, 0]), float(phase[-1]), whole)
    found = _trials(part, phase[lines], starts, delaying)
    best: tuple[Array, float, ComplexArray] | None = None
    task = task_of(problem, groups)
    for entry in _leaders(found):
        begin = np.array([entry[1]])
        better, delay, cost = structured_polish(task, entry[2], begin, 30, 1e-4)
        criterion = problem.criterion(better.size, cost)
        if best is None or criterion < best[1]:
            best = delay, criterion, better
    return best


#: Criterion, dead time, poles.
_Entry = tuple[float, float, ComplexArray]


def _longest(problem: Problem, phase: Array, group: Array) -> float:
    own = group > 0
    return longest_delay(replace(problem, values=problem.values[:, own], weights=problem.weights[:, own]), phase)


def _trials(part: Problem, phase: Array, starts: list[ComplexArray], delays: Array) -> list[_Entry]:
    found = []
    for delay in delays:
        here = turned(part, phase, np.full(part.channels, delay))
        for begin in starts:
            poles, cost = here.relocated(begin, 3)
            found.append((here.criterion(poles.size, cost), float(delay), poles))
    return found


def _leaders(found: list[_Entry]) -> list[_Entry]:
    """Return the best entry of every number of poles."""
    best: dict[int, _Entry] = {}
    for entry in found:
        if entry[2].size not in best or entry[0] < best[entry[2].size][0]:
            best[entry[2].size] = entry
    return list(best.values())


def _best(part: Problem, found: list[_Entry], whole: bool, otherwise: float) -> float:
    if not found:
        return otherwise
    if whole:
        return min(found, key=lambda entry: entry[0])[1]
    best, delay = np.inf, otherwise
    task = task_of(part, np.ones((part.channels, 1)))
    for _, begin, poles in _leaders(found):
        better, end, cost = structured_polish(task, poles, np.array([begin]), 20, 1e-3)
        criterion = part.criterion(better.size, cost)
        if criterion < best:
            best, delay = criterion, float(end[0])
    return delay


def _part(problem: Problem, group: Array) -> tuple[Problem, NDArray[np.int64]] | None:
    """Return the channels that a dead time acts on, at some of the lines, and which lines; None if all are zero."""
    lines = problem.points.size
    keep = np.unique(np.rint(np.linspace(0, lines - 1, min(TRIAL_LINES, lines))).astype(int))
    own = np.flatnonzero(group > 0)
    own = own[np.any(problem.values[:, own] != 0, axis=0)]
    if own.size == 0:
        return None
    kept = problem.structure
    if kept is not None and kept.gain is not None:
        kept = replace(kept, gain=kept.gain[own])
    rows = np.ix_(keep, own)
    cut = replace(
        problem,
        points=problem.points[keep],
        values=problem.values[rows],
        weights=problem.weights[rows],
        structure=kept,
    )
    return cut, keep


def task_of(problem: Problem, groups: Array) -> Task:
    """Return a problem with unknown dead times as the kernels take it: angles in units of its points."""
    return replace(problem.structured().task(), groups=groups)


def joint(problem: Problem, poles: ComplexArray, delays: Array, groups: Array) -> tuple[ComplexArray, Array, float]:
    """Return poles and dead times polished together, poles left out one by one where the criterion is better without.

    The problem holds the values with no dead time taken out.
    """
    task = task_of(problem, groups)
    poles, delays, cost = structured_polish(task, poles, delays, 60, 1e-7)
    return problem.apart(poles), delays, cost


def deviations(problem: Problem, poles: ComplexArray, delays: Array, cost: float, groups: Array) -> Array:
    """Return one standard deviation of each dead time; the size of the noise from the misfit where it is not known.

    From the joint covariance; and where zeros can stand in for part of a dead time, so that the misfit is not
    quadratic, half the distance at which the misfit of two deviations is reached, the larger side.
    """
    covariance = delay_covariance(task_of(problem, groups), poles, delays)
    power = 1.0
    if not problem.known:
        free = problem.numbers - problem.unknowns(poles.size) - delays.size
        power = 2 * cost / max(free, 1)
    spread = np.sqrt(power * np.diagonal(covariance))
    return np.array([_profiled(problem, poles, delays, cost, groups, g, spread[g], power) for g in range(delays.size)])


def _profiled(
    problem: Problem,
    poles: ComplexArray,
    delays: Array,
    cost: float,
    groups: Array,
    g: int,
    spread: float,
    power: float,
) -> float:
    """Return half the distance at which the misfit, all else fitted anew, has risen by that of two deviations."""
    if not (spread > 0 and np.isfinite(spread)):
        return spread
    rise = 2.0 * power
    others = np.delete(groups, g, axis=1)
    widest = spread
    for side in (-1.0, 1.0):
        reach = 2 * spread
        at = poles, np.delete(delays, g)
        for _ in range(MOST_DOUBLINGS):
            moved = delays[g] + side * reach
            if moved < 0:
                break
            base = replace(problem, values=problem.values * np.exp(problem.points[:, None] * (groups[:, g] * moved)))
            fitted = structured_polish(task_of(base, others), *at, 15, 1e-3)
            if fitted[2] - cost >= rise:
                break
            widest = max(widest, reach / 2)
            at = fitted[0], fitted[1]
            reach *= 1.5
    return float(widest)


def rows_of(estimate: Estimate, unit: float, places: list[tuple[int | None, int | None]]) -> tuple[DeadTimeRow, ...]:
    """Return the estimates in seconds; ``unit``: seconds of one scaled unit."""
    return tuple(
        DeadTimeRow(
            float(estimate.delays[g]) * unit,
            None if estimate.deviations is None else float(estimate.deviations[g]) * unit,
            output,
            column,
        )
        for g, (output, column) in enumerate(places)
    )


def widened(fit: Fit, other: Fit, change: ComplexArray) -> Fit:
    """Return a fit whose error bars hold what one deviation of a dead time does to it as well.

    var(x) = var(x with the dead time known) + (d x / d dead time)^2 var(dead time).

    Parameters
    ----------
    fit, other : Fit
        With the dead time as estimated, and with one deviation more.
    change : [k][outputs][inputs] complex
        Change of the response, dead time included.
    """
    if len(fit.pole_table) != len(other.pole_table) or fit.residues.shape != other.residues.shape:
        return fit
    rows, residues = [], fit.residue_deviation.copy()
    for row, there in zip(fit.pole_table, other.pole_table, strict=True):
        rows.append(
            replace(
                row,
                frequency_deviation=float(np.hypot(row.frequency_deviation, there.frequency - row.frequency)),
                damping_deviation=float(np.hypot(row.damping_deviation, there.damping - row.damping)),
            )
        )
        if row.pair == there.pair:
            size = np.abs(other.residues[there.index] - fit.residues[row.index])
            residues[row.index : row.index + 1 + int(row.pair)] = np.hypot(residues[row.index], size)
    with np.errstate(invalid="ignore"):
        gain = np.nan_to_num(other.gain - fit.gain)
    direct = np.hypot(fit.direct_deviation, other.direct - fit.direct)
    steady = np.hypot(fit.gain_deviation, gain)
    response = np.hypot(fit.response_deviation, np.abs(change))
    for array in (residues, direct, steady, response):
        array.setflags(write=False)
    return replace(
        fit,
        pole_table=tuple(rows),
        residue_deviation=residues,
        direct_deviation=direct,
        gain_deviation=steady,
        response_deviation=response,
    )


def fit_with_dead_time(
    w: Array,
    H: ComplexArray,
    kind: str,
    period: float | None,
    prepare: Callable[[ComplexArray], Prepared],
    search: Callable[[Prepared, Problem], tuple[str, Outcome]],
    wanted: tuple[int, int | None],
) -> Fit:
    """Fit a model and its dead times.

    Start from trial fits; search over orders with the dead times taken out; polish poles and dead times together; again
    until the dead times stay where they are.

    Parameters
    ----------
    w : [k] float
        rad/s.
    H : [k][outputs][inputs] complex
    kind : str
        A name of ``realize.schema.ESTIMATED_DEAD_TIMES``.
    period : float or None
    prepare, search : callable
        Values to a problem, and a problem to the outcome of the method.
    wanted : (int, int or None)
        Range of orders; None: no upper end.
    """
    lines, p, m = H.shape
    groups, places = groups_of(kind, p, m)
    first = prepare(H)
    lowest = wanted[0] - first.problem.given
    highest = HIGHEST_ORDER if wanted[1] is None else max(wanted[1] - first.problem.given, 0)
    unit = float(np.ldexp(1.0, -first.shift)) if period is None else period
    turn = w * unit
    phase = turn[first.used]
    begin = scan(first.problem, phase, groups, period is not None, highest)

    def rotated(delays: Array) -> ComplexArray:
        return H * np.exp(1j * turn[:, None] * (groups @ delays)).reshape(lines, p, m)

    data = prepare(rotated(begin))
    found = _continuous if period is None else _sampled
    name, outcome, estimate = found(data, phase, groups, begin, search, lowest)
    fit = finish(w, rotated(estimate.delays), data, outcome, name, period)
    for g, spread in enumerate([] if estimate.deviations is None else estimate.deviations.tolist()):
        step = np.where(np.arange(groups.shape[1]) == g, spread, 0.0)
        if not 0 < spread < np.inf:
            continue
        problem = turned(outcome.problem, phase, groups @ step)
        poles = problem.apart(problem.polished(outcome.poles, 20, 1e-7)[0])
        moved = replace(outcome, problem=problem, poles=poles)
        other = finish(w, rotated(estimate.delays + step), data, moved, name, period)
        turn_back = np.exp(-1j * turn[:, None] * (groups @ step)).reshape(lines, p, m)
        change = (other.misfit + rotated(estimate.delays + step)) * turn_back - fit.misfit - rotated(estimate.delays)
        fit = widened(fit, other, change)
    total = (groups @ estimate.delays * unit).reshape(p, m)
    back = np.exp(-1j * turn[:, None] * (groups @ estimate.delays)).reshape(lines, p, m)
    misfit = fit.misfit * back
    misfit.setflags(write=False)
    return replace(fit, misfit=misfit, dead_time=total, dead_times=rows_of(estimate, unit, places))


def _continuous(
    data: Prepared,
    phase: Array,
    groups: Array,
    begin: Array,
    search: Callable[[Prepared, Problem], tuple[str, Outcome]],
    lowest: int,
) -> tuple[str, Outcome, Estimate]:
    delays = begin
    for _ in range(ROUNDS):
        name, outcome = search(data, turned(data.problem, phase, groups @ (delays - begin)))
        raw = turned(outcome.problem, phase, -(groups @ delays))
        poles, new, cost = joint(raw, outcome.poles, delays, groups)
        other = rescan(raw, phase, groups, False, poles, lowest)
        if other is not None and other[1] < raw.criterion(poles.size, cost) and poles.size > other[2].size:
            delays = other[0]
            continue
        moved = float(np.max(np.abs(new - delays))) * phase[-1]
        delays = new
        if moved <= SETTLED:
            break
    else:
        poles, delays, cost = joint(raw, poles, delays, groups)
    spread = deviations(raw, poles, delays, cost, groups)
    poles = raw.apart(poles)
    rows = tuple(replace(c, kept=c.order == poles.size + raw.given) for c in outcome.candidates)
    final = turned(raw, phase, groups @ delays)
    return name, replace(outcome, problem=final, poles=poles, candidates=rows), Estimate(delays, spread)


def _sampled(
    data: Prepared,
    phase: Array,
    groups: Array,
    begin: Array,
    search: Callable[[Prepared, Problem], tuple[str, Outcome]],
    lowest: int,
) -> tuple[str, Outcome, Estimate]:
    """Return the best of the whole periods around the start: one dead time by full searches, several as they are."""
    trials = [begin]
    if begin.size == 1:
        trials += [begin + step for step in (-1.0, 1.0) if begin[0] + step >= 0]
    best: tuple[float, str, Outcome, Array] | None = None
    for delays in trials:
        name, outcome = search(data, turned(data.problem, phase, groups @ (delays - begin)))
        judged = outcome.problem.with_weights(data.problem.weights)
        criterion = judged.criterion(outcome.poles.size, judged.polished(outcome.poles, 0, 1.0)[1])
        if best is None or criterion < best[0]:
            best = criterion, name, outcome, delays
    assert best is not None
    return best[1], best[2], Estimate(best[3], None)
