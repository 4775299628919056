"""From poles of scaled samples to the record of a fit in the units of the data, with ranks and error bars."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from realize.errors import Refused
from realize.fitting.modes import SampleUnits, mode_table
from realize.fitting.records import Bars, Candidate, Fit, Noise
from realize.fitting.remarks import POOR
from realize.fitting.sample_problem import SampleProblem
from realize.fitting.sizes import Sizes, channel_rows, sizes_of, spread_fields
from realize.fitting.solution import Estimate, solved, unknowns_of
from realize.fitting.spread import Spread, residue_deviations, sized
from realize.kernels.exponentials import powers
from realize.kernels.information import length
from realize.models.checks import frozen

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

#: A misfit of this share of the samples leaves nothing explained.
NOTHING = 0.5


@dataclass(frozen=True, eq=False)
class Given:
    """What was handed over.

    Parameters
    ----------
    samples : [k][outputs][inputs] float
    scaled : [k][channels] float
        Without the powers of two ``lift`` of the channels.
    lift : [channels] int
    start : [channels] float
        Weights of h[0], where deviations are known.
    period : float
        s.
    sampled : bool
    """

    samples: Array
    scaled: Array
    lift: NDArray[np.int64]
    start: Array
    period: float
    sampled: bool


def record_of(
    given: Given,
    problem: SampleProblem,
    poles: ComplexArray,
    candidates: tuple[Candidate, ...],
    cautions: list[str],
    method: str,
    direct: bool | str,
) -> Fit:
    """Return the record of a fit.

    Parameters
    ----------
    given : Given
    problem : SampleProblem
        Of a sampled system without h[0].
    poles : [n] complex
        Of the samples.
    candidates, cautions, method
    direct : bool or "auto"
        Direct term of a sampled system: h[0] itself, none, or where h[0] stands out of the noise.
    """
    p, m = given.samples.shape[1:]
    lift, scaled, sampled, period = given.lift, given.scaled, given.sampled, given.period
    estimate = solved(problem, poles, lift.reshape(p, m), 1.0 if problem.known else None)
    poles, coefficient = estimate.poles, estimate.residues
    missed: Array = np.asarray(estimate.misfit.real)
    out = poles.copy()
    if not sampled:
        if np.any((poles.imag == 0) & (poles.real <= 0)):
            raise Refused(
                "the samples alternate in sign from one to the next, which no continuous model does; use more samples "
                "a second, or say that the system is sampled"
            )
        with np.errstate(over="ignore"):
            out = np.asarray(np.log(poles) / period, dtype=complex)
    constant, fitted = np.zeros(p * m), missed
    if sampled:
        if direct is True or (direct == "auto" and _stands_out(scaled[0], problem, missed)):
            constant = scaled[0].copy()
        missed = np.concatenate([(constant - scaled[0])[None], missed])
    with np.errstate(over="ignore", under="ignore"):
        misfit = np.ldexp(missed, lift).reshape(given.samples.shape)
        residues = (np.ldexp(coefficient.real, lift) + 1j * np.ldexp(coefficient.imag, lift)).reshape(-1, p, m)
        out_direct = np.ldexp(constant, lift).reshape(p, m)
    if not all(np.all(np.isfinite(a)) for a in (residues, out_direct, out)):
        raise Refused("a pole or residue lies beyond the range of double precision; use other units")
    places = np.asarray(np.arange(missed.shape[0]) * period, dtype=float)
    sizes = sizes_of(missed, scaled, lift, places, m)
    weighted, factor, noise = _noise(problem, estimate, fitted, sizes)
    units = SampleUnits(0, lift, period)
    table, bars, growth = mode_table(problem, estimate, (p, m), units, _dominance(estimate, problem, sizes.peak))
    if weighted > POOR and noise.level > 0 and sizes.worst.value > 1e-9:
        source = "given" if noise.basis == "given" else "estimated"
        cautions.append(
            f"the misfit is {weighted:.3g} times the {source} noise: the data contain more than a model of this order, "
            "or their errors are not independent from sample to sample"
        )
    if poles.size == 0 and sizes.rms > NOTHING:
        cautions.append("nothing stands out of the noise of the samples: the model has no poles, and says nothing")
    if sizes.size == 0:
        cautions.append("all samples are zero: the model is zero")
    start = given.start if problem.known or not problem.samples.size else problem.weights[0]
    spread = _deviations(given, problem, estimate, constant, start, units, bars, growth)
    weighting = factor / (np.vstack([start, problem.weights]) if sampled else problem.weights)
    with np.errstate(over="ignore", under="ignore"):
        deviation = np.ldexp(weighting, lift).reshape(given.samples.shape)
    return Fit(
        poles=frozen(out),
        residues=frozen(residues),
        direct=frozen(out_direct),
        order=int(out.size),
        method=method,
        misfit=frozen(misfit),
        rms=sizes.rms,
        worst=sizes.worst,
        weighted=weighted,
        noise=noise,
        candidates=candidates,
        pole_table=table,
        cautions=tuple(cautions),
        powers=frozen(np.ones(out.size, dtype=np.int64)),
        bars=bars,
        channels=channel_rows(missed, scaled, fitted * problem.weights, factor, places, m),
        **spread_fields(spread, given.samples.shape),
        deviation=frozen(deviation),
    )


def _stands_out(start: Array, problem: SampleProblem, missed: Array) -> bool:
    """Return whether h[0] is better explained by a direct term: the criterion's penalty is ln N a channel."""
    alive = start != 0
    if not np.any(alive):
        return False
    deviation = problem.scatter(missed)
    if problem.known:
        deviation = 1 / problem.weights[0]
    deviation = np.maximum(deviation, 2.0**-50)
    gain = float(np.sum((start[alive] / deviation[alive]) ** 2))
    return bool(gain > np.sum(alive) * np.log(max(problem.numbers, 2)))


def _noise(problem: SampleProblem, estimate: Estimate, missed: Array, sizes: Sizes) -> tuple[float, float, Noise]:
    """Return RMS of misfit over deviation, the deviations in units of 1/weights, and their size."""
    basis = "given" if problem.known else "estimated"
    alive = np.any(problem.flat != 0, axis=0)
    if not np.any(alive):
        return 0.0, 0.0, Noise(basis, 0.0)
    scaled = missed[:, alive] * problem.weights[:, alive]
    rms = float(np.sqrt(np.mean(scaled**2)))
    factor = 1.0
    if not problem.known:
        free = problem.numbers - unknowns_of(estimate, problem)
        factor = float(np.median(problem.scatter(scaled)))
        factor *= np.sqrt(problem.numbers / max(free, 1))
        # rounding is the least that any deviation can be
        least = max(16 * problem.floor, 2 * problem.rounding(estimate.poles))
        factor = max(factor, float(np.sqrt(least / problem.numbers)))
    deviation = (factor * sizes.common / problem.weights)[:, alive]
    level = float(np.sqrt(np.sum(deviation**2))) / sizes.size if sizes.size > 0 else 0.0
    return (rms / factor if factor > 0 else 0.0), factor, Noise(basis, level)


def _dominance(estimate: Estimate, problem: SampleProblem, peak: Array) -> Array:
    """Return the largest share of each pole, with its conjugate, in a channel: [n]."""
    poles = estimate.poles
    result = np.zeros(poles.size)
    for j in np.flatnonzero(poles.imag >= 0):
        values = powers(poles[j : j + 1], 0, problem.samples.shape[0])
        part = np.abs(np.real(values * estimate.residues[j])) * (2 if poles[j].imag > 0 else 1)
        result[j] = np.max(np.max(part, axis=0, initial=0.0) / np.where(peak > 0, peak, 1.0))
    return result


def _deviations(
    given: Given,
    problem: SampleProblem,
    estimate: Estimate,
    constant: Array,
    start: Array,
    units: SampleUnits,
    bars: Bars,
    growth: Array,
) -> Spread:
    """Return the deviations of samples, residues, direct term and steady-state gain.

    A direct term is h[0] and has its error, which is independent of all others.
    """
    covariance, lift = estimate.covariance, given.lift
    level = np.inf if bars.level is None else bars.level
    most = level * float(np.max(growth, initial=1.0))
    with np.errstate(divide="ignore"):
        direct = np.where(constant == 0, 0.0, 1 / start)
    samples = _times(covariance.response_deviation(problem.points), most)
    direct = _times(direct, level)
    if given.sampled:
        samples = np.vstack([direct, samples])
    gain, change = _steady_gain(estimate, given.sampled)
    gain_deviation = np.hypot(_times(change, np.inf if np.any(covariance.free) else most), direct)
    with np.errstate(over="ignore", under="ignore", invalid="ignore"):
        scale = 1.0 if given.sampled else given.period
        return Spread(
            response=sized(samples, 1.0, lift, False),
            residues=sized(residue_deviations(estimate, units, growth), level, lift, False),
            direct=sized(direct, 1.0, lift, False),
            gain=np.ldexp((gain + constant) * scale, lift),
            gain_deviation=sized(gain_deviation * scale, 1.0, lift, False),
        )


def _times(values: Array, level: float) -> Array:
    """Return values times a level that may be infinite; zero stays zero."""
    result = np.zeros_like(values)
    np.multiply(values, level, out=result, where=values != 0)
    return result


def _steady_gain(estimate: Estimate, sampled: bool) -> tuple[Array, Array]:
    """Return the gain without direct term and its deviation in units of the level, continuous: over the period.

    Sampled: sum r/(1 - z); continuous: sum -r/ln z, whose derivative by z is r/(z ln(z)^2).
    """
    poles, residues, covariance = estimate.poles, estimate.residues, estimate.covariance
    n, channels = poles.size, covariance.active.size
    weight = 1 / (1 - poles) if sampled else -1 / np.log(poles)
    slope = weight**2 if sampled else weight**2 / poles
    first = np.flatnonzero(poles.imag >= 0)
    paired = poles[first].imag > 0
    gain = (weight @ residues).real if n else np.zeros(channels)
    deviation = np.zeros(channels)
    for c in np.flatnonzero(covariance.active):
        row = np.zeros(2 * n)
        for at, part in ((0, slope * residues[:, c]), (n, weight)):
            row[at + first] = np.where(paired, 2.0, 1.0) * part[first].real
            row[at + first[paired] + 1] = -2.0 * part[first[paired]].imag
        deviation[c] = length((row @ covariance.channel_root(int(c)))[None])[0]
    return gain, deviation
