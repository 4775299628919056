"""A solution of the scaled s plane brought back to the plane and the units of the data."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from realize.errors import Refused
from realize.fitting.problem import Problem
from realize.fitting.sampled import factors_back, mapped_back
from realize.fitting.structure import Inside
from realize.kernels.structured_solution import Chain, Factors, Solution

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]


def in_z(problem: Problem, solution: Solution, c: float) -> Solution:
    """Return the solution in z, s = c (z - 1)/(z + 1); fixed poles and zeros as they were given."""
    poles, residues, direct = mapped_back(solution.poles, solution.residues, solution.direct, c, solution.powers)
    kept = problem.structure
    factors = solution.factors
    if kept is None:
        return replace(
            solution,
            poles=poles,
            residues=residues,
            direct=direct if problem.direct else np.zeros_like(direct),
        )
    fixed = poles.size - kept.given_poles.size
    poles = np.concatenate([poles[:fixed], kept.given_poles])
    if factors is not None:
        zeros, gains = [], []
        for own, gain in zip(factors.zeros, factors.gain.tolist(), strict=True):
            if gain == 0:
                zeros.append(np.zeros(0, dtype=complex))
                gains.append(0.0)
                continue
            listed, lead = factors_back(own, solution.poles, gain, c)
            listed[: kept.given_zeros.size] = kept.given_zeros
            zeros.append(listed)
            gains.append(lead)
        factors = Factors(tuple(zeros), np.array(gains), _chain_in_z(kept, factors.chain, c))
        direct = np.where([z.size == poles.size for z in factors.zeros], factors.gain, 0.0)
    return replace(solution, poles=poles, residues=residues, direct=direct, factors=factors)


def _chain_in_z(kept: Inside, chain: Chain | None, c: float) -> Chain | None:
    if chain is None:
        return None
    zeros, lead = factors_back(chain.zeros, chain.outer, 1.0, c)
    zeros[: kept.given_zeros.size] = kept.given_zeros
    outer = mapped_back(chain.outer, np.zeros((chain.outer.size, 1), complex), np.zeros(1), c)[0]
    poles, residues, direct = mapped_back(chain.poles, chain.residues * lead, chain.direct * lead, c, chain.powers)
    images = c * (kept.given_poles - 1) / (kept.given_poles + 1)
    for given, image in zip(kept.given_poles, images, strict=True):
        outer[chain.outer == image] = given
        poles[chain.poles == image] = given
    return Chain(zeros, outer, poles, chain.powers, residues, direct)


def chain_in_units(problem: Problem, chain: Chain | None, scale: int, lift: NDArray[np.int64]) -> Chain | None:
    """Return the chain in the units of the data, fixed zeros and poles as they were given; None beyond doubles."""
    kept = problem.structure
    if chain is None or kept is None:
        return None
    if scale == 0:
        residues, direct = _lifted(chain.residues, lift), _lifted(chain.direct + 0j, lift).real
        return replace(chain, residues=residues, direct=direct)
    given = {complex(_lifted(p, -scale)): complex(p) for p in (*kept.given_poles, *kept.given_zeros)}

    def out(roots: ComplexArray) -> ComplexArray:
        back = [given.get(r, complex(_lifted(np.complex128(r), scale))) for r in roots.tolist()]
        return np.array(back, dtype=complex)

    excess = scale * (chain.outer.size - chain.zeros.size)
    with np.errstate(over="ignore", under="ignore"):
        residues = _lifted(chain.residues, lift + scale * chain.powers[:, None] + excess)
        direct = _lifted(chain.direct + 0j, lift + excess).real
    if not (np.all(np.isfinite(residues)) and np.all(np.isfinite(direct))):
        return None
    return Chain(out(chain.zeros), out(chain.outer), out(chain.poles), chain.powers, residues, direct)


def _lifted(values: Any, exponent: Any) -> ComplexArray:
    return np.asarray(np.ldexp(np.real(values), exponent) + 1j * np.ldexp(np.imag(values), exponent), dtype=complex)


def values_of(solution: Solution, points: ComplexArray, contributions: list[ComplexArray]) -> ComplexArray:
    """Return the values [k][channels]: from the factors where there are some, else the sum of the contributions."""
    if solution.factors is None:
        total = np.broadcast_to(solution.direct, (points.size, solution.direct.size)).astype(complex)
        for part in contributions:
            total = total + part
        return total
    columns = []
    for zeros, gain in zip(solution.factors.zeros, solution.factors.gain.tolist(), strict=True):
        value = np.full(points.size, complex(gain))
        poles = solution.poles if gain else solution.poles[:0]
        for k in range(max(zeros.size, poles.size)):
            if k < zeros.size:
                value = value * (points - zeros[k])
            if k < poles.size:
                value = value / (points - poles[k])
        columns.append(value)
    return np.stack(columns, axis=1)


def factors_in_units(
    problem: Problem, solution: Solution, scale: int, lift: NDArray[np.int64]
) -> tuple[tuple[ComplexArray, ...], Array] | None:
    """Return zeros and gains of all channels in the units of the data; fixed zeros as they were given.

    Raises
    ------
    Refused
        A gain beyond the range of double precision.
    """
    if solution.factors is None or problem.structure is None:
        return None
    given = problem.structure.given_zeros
    zeros, gains = [], []
    for c, (own, gain) in enumerate(zip(solution.factors.zeros, solution.factors.gain.tolist(), strict=True)):
        listed = np.ldexp(own.real, scale) + 1j * np.ldexp(own.imag, scale)
        if scale:
            listed[: min(given.size, listed.size)] = given[: listed.size]
        with np.errstate(over="ignore", under="ignore"):
            lead = float(np.ldexp(gain, int(lift[c]) + scale * (solution.poles.size - own.size)))
        if not np.isfinite(lead) or (lead == 0) != (gain == 0) or not np.all(np.isfinite(listed)):
            raise Refused("a gain lies beyond the range of double precision; use other units of frequency or response")
        zeros.append(listed)
        gains.append(lead)
    return tuple(zeros), np.array(gains)
