"""From scaled poles to the record of a fit in the units of the data."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from realize.errors import Refused
from realize.fitting.noise import noise_factor
from realize.fitting.problem import Problem
from realize.fitting.records import Candidate, Factored, Fit, Noise, PoleRow, Worst
from realize.fitting.restored import factors_in_units, in_z, values_of

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

#: Misfit of this many times the noise is worth a caution.
POOR = 1.5


def finish(
    w: Array,
    H: ComplexArray,
    problem: Problem,
    poles: ComplexArray,
    candidates: tuple[Candidate, ...],
    cautions: list[str],
    method: str,
    basis: str,
    period: float | None,
    shift: int,
    lift: NDArray[np.int64],
    used: NDArray[np.bool_],
) -> Fit:
    """Return the record of a fit: residues for the scaled poles, units put back, misfit of the values handed over.

    Parameters
    ----------
    w : [k] float
        rad/s.
    H : [k][outputs][inputs] complex
    problem : Problem
        As solved.
    poles : [n] complex
        Scaled, in the s plane.
    shift, lift : int, [channels] int
        Powers of two taken off the frequencies and the channels.
    used : [k] bool
        Lines that took part.
    """
    lines, p, m = H.shape
    solved = poles
    solution = problem.solved(poles)
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
    if not all(np.all(np.isfinite(a)) for a in (out_residues, out_direct, out_poles)):
        raise Refused("a residue lies beyond the range of double precision; use other units of frequency or response")
    top = np.max(lift)
    common = _ldexp(np.ones((1, lift.size), complex), np.maximum(lift - top, -500)).real
    size = float(np.sqrt(np.sum(np.abs(lifted * common) ** 2)))
    rms = float(np.sqrt(np.sum(np.abs(missed * common) ** 2))) / size if size > 0 else 0.0
    peak = np.max(np.abs(lifted), axis=0)
    relative = np.abs(missed) / np.where(peak > 0, peak, 1.0)
    line, channel = np.unravel_index(int(np.argmax(relative)), relative.shape)
    worst = Worst(float(relative[line, channel]), int(line), int(channel) // m, int(channel) % m, float(w[line]))
    weighted, noise = _noise(problem, solved, missed[used], basis, common, size)
    table = _pole_table(poles, contribution, peak, period, scale)
    cautions = [*cautions, *_remarks(table, w, noise, weighted, worst)]
    return Fit(
        poles=_frozen(out_poles),
        residues=_frozen(out_residues),
        direct=_frozen(out_direct),
        order=int(out_poles.size),
        method=method,
        misfit=_frozen(misfit),
        rms=rms,
        worst=worst,
        weighted=weighted,
        noise=noise,
        candidates=candidates,
        pole_table=table,
        cautions=tuple(cautions),
        powers=_frozen(powers),
        factors=None if factors is None else Factored(factors[0], _frozen(factors[1].reshape(p, m))),
    )


def _frozen(array: NDArray) -> NDArray:
    array = np.ascontiguousarray(array)
    array.setflags(write=False)
    return array


def _ldexp(values: ComplexArray, exponents: Any) -> ComplexArray:
    result = np.empty(values.shape, dtype=complex)
    with np.errstate(under="ignore"):
        result.real = np.ldexp(values.real, exponents)
        result.imag = np.ldexp(values.imag, exponents)
    return result


def _noise(
    problem: Problem, poles: ComplexArray, missed: ComplexArray, basis: str, common: Array, size: float
) -> tuple[float, Noise]:
    """Return RMS of misfit over deviation, and the deviations' size.

    Where only the shape of the deviations is known, their size is the median of what neighbouring misfits do not
    predict (``noise.noise_factor``); with fewer than eight lines the misfit itself over the degrees of freedom.
    """
    alive = np.any(problem.values != 0, axis=0)
    if not np.any(alive):
        return 0.0, Noise(basis, 0.0)
    scaled = missed[:, alive] * problem.weights[:, alive]
    rms = float(np.sqrt(np.sum(np.abs(scaled) ** 2) * 2 / problem.numbers))
    factor = 1.0
    if not problem.known:
        factor = noise_factor(problem.x, missed[:, alive], problem.weights[:, alive])
        free = problem.numbers - problem.unknowns(poles.size)
        if problem.points.size < 8:
            factor = rms * np.sqrt(problem.numbers / max(free, 1))
        elif free > 0:
            # neighbouring misfits are alike the more unknowns there are: the same correction for both
            factor *= np.sqrt(problem.numbers / free)
        # rounding is the least that any deviation can be
        factor = max(factor, np.sqrt(2 * problem.rounding(poles) / problem.numbers))
    deviation = (factor * common / problem.weights)[:, alive]
    level = float(np.sqrt(np.sum(deviation**2))) / size if size > 0 else 0.0
    return (rms / factor if factor > 0 else 0.0), Noise(basis, level)


def _pole_table(
    poles: ComplexArray, contribution: list[ComplexArray], peak: Array, period: float | None, scale: int
) -> tuple[PoleRow, ...]:
    rows = []
    for j in np.flatnonzero(poles.imag >= 0):
        pair = bool(poles[j].imag > 0)
        part = contribution[j] + contribution[j + 1] if pair else contribution[j]
        size_there = np.where(np.isfinite(part), np.abs(part), 0.0)
        share = float(np.max(np.max(size_there, axis=0) / np.where(peak > 0, peak, 1.0)))
        s = complex(poles[j]) if period is None else complex(np.log(poles[j])) / period
        size = abs(s)
        rows.append(PoleRow(float(np.ldexp(size, scale)), -s.real / size if size > 0 else 1.0, share, int(j), pair))
    return tuple(sorted(rows, key=lambda row: row.frequency))


def _remarks(
    table: tuple[PoleRow, ...],
    w: Array,
    noise: Noise,
    weighted: float,
    worst: Worst,
) -> list[str]:
    remarks = []
    lowest = w[w > 0][0]
    slow = [row for row in table if 0 < row.frequency < 0.1 * lowest and row.dominance > 0.1]
    if slow:
        remarks.append(
            f"{sum(2 if row.pair else 1 for row in slow)} pole(s) lie below a tenth of the lowest line: the data look "
            "like an integrator there, and the model is a stable stand-in for it below the band"
        )
    fast = [row for row in table if row.frequency > 10 * w[-1] and row.dominance > 1]
    if fast:
        remarks.append(
            f"{sum(2 if row.pair else 1 for row in fast)} pole(s) lie far above the highest line: the response still "
            "grows there, and the (proper) model levels off somewhere above the band"
        )
    narrow = [row for row in table if row.pair and _narrow(row, w)]
    if narrow:
        places = ", ".join(f"{row.frequency:.6g}" for row in narrow)
        remarks.append(
            "resonance(s) narrower than half the distance of the lines, whose damping hangs on a few lines: "
            f"{places} rad/s"
        )
    if weighted > POOR and noise.level > 0 and worst.value > 1e-9:
        source = "given" if noise.basis == "given" else "estimated"
        remarks.append(
            f"the misfit is {weighted:.3g} times the {source} noise: the data contain more than a model of this order, "
            "or their errors are not independent from line to line"
        )
    return remarks


def _narrow(row: PoleRow, w: Array) -> bool:
    if w.size < 3 or not w[0] < row.frequency < w[-1]:
        return False
    k = int(np.clip(np.searchsorted(w, row.frequency), 1, w.size - 1))
    return 2 * row.damping * row.frequency < 0.5 * (w[k] - w[k - 1])
