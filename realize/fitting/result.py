"""From scaled poles to the record of a fit in the units of the data."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from realize.errors import Refused
from realize.fitting.modes import Units, mode_table
from realize.fitting.noise import noise_factor
from realize.fitting.outliers import outlier_rows
from realize.fitting.prepare import Prepared
from realize.fitting.problem import Problem
from realize.fitting.records import Factored, Fit, Noise
from realize.fitting.registry import Outcome
from realize.fitting.remarks import remarks
from realize.fitting.restored import chain_in_units, factors_in_units, in_z, values_of
from realize.fitting.sizes import Sizes, channel_rows, sizes_of, spread_fields
from realize.fitting.solution import Estimate, solved, unknowns_of
from realize.fitting.spread import deviations
from realize.models.checks import frozen

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]


def finish(w: Array, H: ComplexArray, data: Prepared, outcome: Outcome, method: str, period: float | None) -> Fit:
    """Return the record of a fit: residues for the scaled poles, units put back, misfit of the values handed over.

    Parameters
    ----------
    w : [k] float
        rad/s.
    H : [k][outputs][inputs] complex
    data : Prepared
        What was taken off the data.
    outcome : Outcome
        The problem as solved, and its scaled poles in the s plane.
    method : str
    period : float or None
    """
    problem, poles, candidates = outcome.problem, outcome.poles, outcome.candidates
    basis, shift, lift, used = data.basis, data.shift, data.lift, data.used
    cautions = [*data.cautions, *outcome.cautions]
    lines, p, m = H.shape
    estimate = solved(problem, poles, lift.reshape(p, m), 1.0 if problem.known else None)
    solution = estimate.solution
    # a channel that is zero in all lines stays exactly zero
    if period is None:
        scale, points = shift, 1j * np.ldexp(w, -shift)
    else:
        solution = in_z(problem, solution, float(np.ldexp(1.0, -shift)))
        scale, points = 0, np.exp(1j * w * period)
    poles, powers, residues, direct = solution.poles, solution.powers, solution.residues, solution.direct
    with np.errstate(divide="ignore", invalid="ignore"):
        # a line at a fixed pole is not used
        contribution = [residues[j] / (points[:, None] - poles[j]) ** powers[j] for j in range(poles.size)]
        model = values_of(solution, points, contribution)
    lifted = _ldexp(H.reshape(lines, -1), -lift)
    missed = np.where(np.isfinite(model), model - lifted, 0.0)
    with np.errstate(over="ignore", under="ignore"):
        misfit = _ldexp(missed, lift).reshape(H.shape)
        out_residues = _ldexp(residues, lift + scale * powers[:, None]).reshape(-1, p, m)
        out_direct = np.ldexp(direct, lift).reshape(p, m)
        out_poles = _ldexp(poles, np.int64(scale))
    if problem.structure is not None:
        out_poles[poles.size - problem.given :] = problem.structure.given_poles
    factors = factors_in_units(problem, solution, scale, lift)
    chain = None if solution.factors is None else chain_in_units(problem, solution.factors.chain, scale, lift)
    if not all(np.all(np.isfinite(a)) for a in (out_residues, out_direct, out_poles)):
        raise Refused("a residue lies beyond the range of double precision; use other units of frequency or response")
    sizes = sizes_of(missed, lifted, lift, w, m)
    unknowns = unknowns_of(estimate, problem)
    weighted, factor, noise = _noise(problem, estimate, unknowns, missed[used], basis, sizes)
    units = Units(shift, lift, period)
    table, bars, growth = mode_table(problem, estimate, (p, m), units, _dominance(poles, contribution, sizes.peak))
    outliers, words = outlier_rows(outcome.sizes, used, w, m)
    cautions = [*cautions, *words, *remarks(table, w, noise, weighted, sizes.worst)]
    spread = deviations(problem, estimate, units, bars, growth, used)
    weighting = np.full((lines, p * m), np.inf)
    with np.errstate(over="ignore", under="ignore"):
        weighting[used] = np.ldexp(factor / problem.weights, lift)
    return Fit(
        poles=frozen(out_poles),
        residues=frozen(out_residues),
        direct=frozen(out_direct),
        order=int(out_poles.size),
        method=method,
        misfit=frozen(misfit),
        rms=sizes.rms,
        worst=sizes.worst,
        weighted=weighted,
        noise=noise,
        candidates=candidates,
        pole_table=table,
        cautions=tuple(cautions),
        powers=frozen(powers),
        factors=None if factors is None else Factored(factors[0], frozen(factors[1].reshape(p, m)), chain),
        bars=bars,
        channels=channel_rows(missed, lifted, missed[used] * problem.weights, factor, w, m),
        outliers=outliers,
        **spread_fields(spread, H.shape),
        deviation=frozen(weighting.reshape(H.shape)),
    )


def _ldexp(values: ComplexArray, exponents: Any) -> ComplexArray:
    result = np.empty(values.shape, dtype=complex)
    with np.errstate(under="ignore"):
        result.real = np.ldexp(values.real, exponents)
        result.imag = np.ldexp(values.imag, exponents)
    return result


def _noise(
    problem: Problem, fitted: Estimate, unknowns: int, missed: ComplexArray, basis: str, sizes: Sizes
) -> tuple[float, float, Noise]:
    """Return RMS of misfit over deviation, the deviations in units of 1/weights, and their size.

    Where only the shape of the deviations is known, their size is the median of what neighbouring misfits do not
    predict (``noise.noise_factor``); with fewer than eight lines the misfit itself over the degrees of freedom.
    """
    alive = np.any(problem.values != 0, axis=0)
    if not np.any(alive):
        return 0.0, 0.0, Noise(basis, 0.0)
    scaled = missed[:, alive] * problem.weights[:, alive]
    rms = float(np.sqrt(np.sum(np.abs(scaled) ** 2) * 2 / problem.numbers))
    factor = 1.0
    if not problem.known:
        factor = noise_factor(problem.x, missed[:, alive], problem.weights[:, alive])
        free = problem.numbers - unknowns
        if problem.points.size < 8:
            factor = rms * np.sqrt(problem.numbers / max(free, 1))
        elif free > 0:
            # neighbouring misfits are alike the more unknowns there are: the same correction for both
            factor *= np.sqrt(problem.numbers / free)
        # rounding is the least that any deviation can be
        factor = max(factor, np.sqrt(2 * problem.rounding(fitted.free_poles) / problem.numbers))
    deviation = (factor * sizes.common / problem.weights)[:, alive]
    level = float(np.sqrt(np.sum(deviation**2))) / sizes.size if sizes.size > 0 else 0.0
    return (rms / factor if factor > 0 else 0.0), float(factor), Noise(basis, level)


def _dominance(poles: ComplexArray, contribution: list[ComplexArray], peak: Array) -> Array:
    """Return the largest share of each pole, with its conjugate, in a channel: [n]."""
    result = np.zeros(poles.size)
    for j in np.flatnonzero(poles.imag >= 0):
        part = contribution[j] + contribution[j + 1] if poles[j].imag > 0 else contribution[j]
        size = np.where(np.isfinite(part), np.abs(part), 0.0)
        result[j] = np.max(np.max(size, axis=0) / np.where(peak > 0, peak, 1.0))
    return result
