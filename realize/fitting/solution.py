"""Residues, direct terms and their ranks for given poles: full matrices, or as low in rank as the data allow."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from realize.fitting.covariance import Covariance, free_covariance, shaped_covariance
from realize.fitting.sample_problem import Measured
from realize.fitting.slopes import Slopes, slopes_of
from realize.kernels.information import ChannelFactor, channel_factor
from realize.kernels.low_rank_residues import Shape, Unknowns, nearest_in_metric, shape_of
from realize.kernels.structured_solution import Solution

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

#: Chance that noise alone makes any of the ranks of a fit too large.
FALSE_ALARM = 5e-3
#: Ranks are looked at while the joint information of all modes takes no more operations than this (some seconds).
AFFORDABLE = 2e10
#: Channels scaled further apart than this, beside outputs and inputs, are no matrix whose rank could be told.
SMALLEST_SCALE = 2.0**-100
#: Relinearisations of the joint fit of shapes.
ROUNDS = 4


@dataclass(frozen=True, eq=False)
class Estimate:
    """A solution with its covariance.

    Parameters
    ----------
    solution : Solution
        Free poles first, then fixed ones; scaled.
    free : int
        Number of free poles.
    ranks : [poles] int
    covariance : Covariance
    shapes : list of Shape or None
        None where the residues are full matrices.
    """

    solution: Solution
    free: int
    ranks: NDArray[np.intp]
    covariance: Covariance
    shapes: list[Shape] | None = None

    @property
    def poles(self) -> ComplexArray:
        return self.solution.poles

    @property
    def residues(self) -> ComplexArray:
        return self.solution.residues

    @property
    def misfit(self) -> ComplexArray:
        return self.solution.misfit

    @property
    def free_poles(self) -> ComplexArray:
        return self.solution.poles[: self.free]


def solved(problem: Measured, poles: ComplexArray, lift: NDArray[np.int64], factor: float | None) -> Estimate:
    """Return the fit of all residues, then the one with the lowest ranks that the data do not contradict.

    The rank of each residue is raised until the distance of the full residue to the nearest one of that rank, in the
    metric of its own covariance, lies below the quantile of the chi-square distribution with 2 (p - r)(m - r) degrees
    of freedom (half for a real pole); then poles, shapes and direct terms are fitted again together.

    Parameters
    ----------
    problem : Problem or SampleProblem
    poles : [n] complex
    lift : [outputs][inputs] int
        Powers of two taken off the channels.
    factor : float, optional
        Noise in units of 1/weights; None: from the misfit of the full residues.
    """
    p, shape = problem, (int(lift.shape[0]), int(lift.shape[1]))
    solution = p.solved(poles)
    active = np.any(p.values != 0, axis=0)
    slopes = slopes_of(p, solution, poles.size)
    factors = factors_of(p, slopes, solution.misfit)
    full = np.full(solution.poles.size, min(shape), dtype=np.intp)
    whole = Estimate(solution, poles.size, full, free_covariance(factors, slopes, active))
    if min(shape) == 1 or poles.size == 0 or not np.all(active) or not _affordable(poles.size, shape):
        return whole
    if p.structure is not None:
        return whole
    level = noise_level(p, solution.misfit, p.unknowns(poles.size)) if factor is None else factor
    level = max(level, float(np.sqrt(2 * p.rounding(poles) / p.numbers)))
    scale = channel_scale(lift)
    if not np.all((scale > SMALLEST_SCALE) & (scale < 1 / SMALLEST_SCALE)):
        return whole
    shapes = _lowest(whole, scale, level)
    if all(s.rank == min(shape) for s in shapes):
        return whole
    found = _refitted(p, whole, shapes, scale, factors, level)
    if found is not whole:
        return found
    # residues of poles far above the lines trade off with the direct term: those keep all ranks
    far = p.far(poles)
    kept = [
        shape_of(solution.residues[s.index].reshape(shape) / scale, min(shape), s.index, s.paired)
        if far[s.index]
        else s
        for s in shapes
    ]
    if not np.any(far) or all(s.rank == min(shape) for s in kept):
        return whole
    return _refitted(p, whole, kept, scale, factors, level)


def channel_scale(lift: NDArray[np.int64]) -> Array:
    """Return what the channels' scaling is beside one power of two for each output and one for each input."""
    outputs = np.rint(np.mean(lift, axis=1))
    inputs = np.rint(np.mean(lift - outputs[:, None], axis=0))
    with np.errstate(under="ignore", over="ignore"):
        return np.asarray(np.exp2(outputs[:, None] + inputs - lift))


def noise_level(problem: Measured, misfit: ComplexArray, unknowns: int) -> float:
    """Return sqrt(2 sum |weights misfit|^2 / (numbers - unknowns)), real numbers half: the noise in 1/weights."""
    cost = problem.unlikelihood(misfit)
    return float(np.sqrt(2 * cost / max(problem.numbers - unknowns, 1)))


def unknowns_of(estimate: Estimate, problem: Measured) -> int:
    """Return how many real numbers were fitted."""
    if estimate.shapes is None:
        return problem.unknowns(estimate.free)
    own = sum(s.size for s in estimate.shapes) + (problem.channels if problem.direct else 0)
    return estimate.free + own


def _affordable(order: int, shape: tuple[int, int]) -> bool:
    channels = shape[0] * shape[1]
    most = order * (1 + channels) + channels
    return channels * (2 * order + 1.0) * most**2 * 2 <= AFFORDABLE


def factors_of(p: Measured, slopes: Slopes, misfit: ComplexArray) -> list[ChannelFactor]:
    """Return the factors of all channels."""
    return [
        channel_factor(slopes.at(p.points, c), p.weights[:, c], misfit[:, c], p.real) for c in range(p.values.shape[1])
    ]


def _lowest(whole: Estimate, scale: Array, level: float) -> list[Shape]:
    from scipy.special import chdtri

    first = np.flatnonzero(whole.poles.imag >= 0)
    shape = scale.shape
    full = min(shape)
    shapes = []
    for k in first:
        paired = bool(whole.poles[k].imag > 0)
        residue = whole.residues[k].reshape(shape) / scale
        if not paired:
            residue = residue.real + 0j
        metric = whole.covariance.residue_metric(int(k), paired)
        metric = None if metric is None else metric * (np.repeat(scale.reshape(-1), 2 if paired else 1) / level)
        chosen = shape_of(residue, full, int(k), paired)
        for rank in range(1, full):
            if metric is None:
                break
            freedom = (2 if paired else 1) * (shape[0] - rank) * (shape[1] - rank)
            near, distance = nearest_in_metric(residue, metric, shape_of(residue, rank, int(k), paired), 20)
            if distance <= chdtri(freedom, FALSE_ALARM / first.size):
                chosen = near
                break
        shapes.append(chosen)
    return shapes


def _assembled(shapes: list[Shape], order: int, scale: Array) -> ComplexArray:
    residues = np.zeros((order, shapes[0].residue.size), dtype=complex)
    for s in shapes:
        residues[s.index] = (s.residue * scale).reshape(-1)
        if s.paired:
            residues[s.index + 1] = residues[s.index].conj()
    return residues


def _refitted(
    p: Measured, whole: Estimate, shapes: list[Shape], scale: Array, factors: list[ChannelFactor], level: float
) -> Estimate:
    """Return poles, shapes and direct terms fitted together by Gauss-Newton steps, from where each shape is best alone.

    Each round takes the derivatives of all channels once and minimises the linearised misfit over the unknowns, whose
    shapes enter as products. Poles that the data leave undetermined stay where they are.
    """
    n = whole.poles.size
    held = whole.covariance.pole_deviation() * level > np.abs(p.margin(whole.poles))
    poles, direct = whole.poles, whole.solution.direct
    base = whole.residues
    moves = np.concatenate([~held, np.ones(Unknowns(n, shapes, scale, p.direct).size - n, bool)])
    best: Estimate | None = None
    lowest = np.inf
    for _ in range(ROUNDS):
        poles, shapes, direct = _compressed(factors, poles, base, direct, shapes, scale, moves, p.direct, level)
        residues = _assembled(shapes, n, scale)
        misfit = p.evaluated(poles, _coefficients(poles, residues), direct)
        cost = p.unlikelihood(misfit)
        if not cost < lowest or np.any(p.margin(poles) <= 0):
            break
        done = lowest - cost <= 1e-3 * level**2
        lowest = cost
        solution = Solution(poles, np.ones(n, dtype=np.int64), residues, direct, misfit)
        slopes = slopes_of(p, solution, n)
        factors = factors_of(p, slopes, misfit)
        ranks = np.zeros(n, dtype=np.intp)
        for s in shapes:
            ranks[s.index : s.index + (2 if s.paired else 1)] = s.rank
        unknowns = Unknowns(n, shapes, scale, p.direct)
        best = Estimate(solution, n, ranks, shaped_covariance(factors, slopes, unknowns), shapes)
        base = residues
        if done:
            break
    return best if best is not None and _bears(p, whole, best.shapes or [], lowest, level) else whole


def _bears(p: Measured, whole: Estimate, shapes: list[Shape], cost: float, level: float) -> bool:
    """Return whether the misfit grew by no more than chance when all residues were given their ranks together.

    Ranks that are bearable one by one need not be so together: where poles, residues and direct terms trade off, far
    above the lines, the steps may even end far away.
    """
    from scipy.special import chdtri

    size = min(shapes[0].C.shape[0], shapes[0].B.shape[1])
    most = max(shapes[0].C.shape[0], shapes[0].B.shape[1])
    freedom = sum((2 if s.paired else 1) * (size - s.rank) * (most - s.rank) for s in shapes)
    before = p.unlikelihood(whole.misfit)
    return 2 * (cost - before) <= level**2 * float(chdtri(freedom, FALSE_ALARM / len(shapes)))


def _coefficients(poles: ComplexArray, residues: ComplexArray) -> Array:
    """Return residues as coefficients of the real basis [n][channels]."""
    result = residues.real.copy()
    second = np.flatnonzero(poles.imag < 0)
    result[second] = residues[second - 1].imag
    return result


def _coordinates(poles: ComplexArray) -> Array:
    result = poles.real.copy()
    second = np.flatnonzero(poles.imag < 0)
    result[second] = poles[second - 1].imag
    return result


def _compressed(
    factors: list[ChannelFactor],
    poles: ComplexArray,
    residues: ComplexArray,
    direct: Array,
    shapes: list[Shape],
    scale: Array,
    moves: NDArray[np.bool_],
    with_direct: bool,
    level: float,
) -> tuple[ComplexArray, list[Shape], Array]:
    """Return the unknowns that minimise the misfit linearised at (poles, residues, direct) in the channels' unknowns.

    The shapes may start elsewhere than the residues of the linearisation.
    """
    from realize.kernels.low_rank_residues import moved

    n = poles.size
    base = np.vstack([np.tile(_coordinates(poles)[:, None], residues.shape[1]), _coefficients(poles, residues)])
    if with_direct:
        base = np.vstack([base, direct])
    at = _coordinates(poles)
    constant = direct.copy()

    def residual(at: Array, shapes: list[Shape], constant: Array) -> Array:
        new = np.vstack([np.tile(at[:, None], residues.shape[1]), _coefficients(poles, _assembled(shapes, n, scale))])
        if with_direct:
            new = np.vstack([new, constant])
        change = new - base
        return np.concatenate([f.inner + f.triangle @ change[:, c] for c, f in enumerate(factors)])

    here = residual(at, shapes, constant)
    for _ in range(12):
        unknowns = Unknowns(n, shapes, scale, with_direct)
        slopes = unknowns.jacobian(factors)[:, moves]
        norm = np.linalg.norm(slopes, axis=0)
        norm = np.where(norm > 0, norm, 1.0)
        step = np.zeros(unknowns.size)
        step[moves] = -np.linalg.lstsq(slopes / norm, here, rcond=None)[0] / norm
        for _ in range(8):
            new_at = at + step[:n]
            new_shapes = [
                moved(s, step[a:b]) for s, a, b in zip(shapes, unknowns.starts[:-1], unknowns.starts[1:], strict=True)
            ]
            new_constant = constant + step[unknowns.starts[-1] :] if with_direct else constant
            there = residual(new_at, new_shapes, new_constant)
            if there @ there <= here @ here:
                break
            step = step / 4
        else:
            break
        gain = float(here @ here - there @ there)
        at, shapes, constant, here = new_at, new_shapes, new_constant, there
        if gain <= 1e-4 * level**2:
            break
    result = at.astype(complex)
    second = np.flatnonzero(poles.imag < 0)
    result[second - 1] = at[second - 1] + 1j * at[second]
    result[second] = result[second - 1].conj()
    return result, shapes, constant
