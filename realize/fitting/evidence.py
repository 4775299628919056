"""What speaks for an order beside the information criterion: held-out lines, whiteness, poles that are known at all.

Held out. Each line is predicted by the fit without it. To first order its misfit is then e / (1 - h), h the leverage of
the line (source 1): as many fits as there are lines, for the price of one covariance.

Sources
-------
1. D. M. Allen, "The relationship between variable selection and data augmentation and a method for prediction",
   Technometrics 16, 1974 (from memory).
2. R. Pintelon, J. Schoukens, System Identification: A Frequency Domain Approach, 2nd edition 2012, chapter 11 (model
   selection and validation), from memory.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from realize.fitting.bars import MOST_LEVERAGE, alike_lines
from realize.fitting.covariance import free_covariance
from realize.fitting.problem import Problem
from realize.fitting.records import Candidate
from realize.fitting.registry import Outcome
from realize.fitting.slopes import slopes_of
from realize.fitting.solution import factors_of, noise_level

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

#: Candidates on either side of the kept one that are looked at.
BESIDE = 2
#: Lines times channels times (free poles)^2 that one candidate may cost; larger problems show the kept one alone.
AFFORDABLE = 2e8
#: A residue that noise alone would reach once in a thousand fits may be noise.
CHANCE = 1e-3
#: A smaller order must predict held-out lines better by this many deviations of the difference to raise a doubt.
BETTER = 2.0


def judged_candidates(outcome: Outcome, chosen_by_data: bool) -> tuple[tuple[Candidate, ...], list[str]]:
    """Return the candidates, those around the kept one with more evidence, and doubts about the order in words."""
    listed = list(outcome.candidates)
    problem = outcome.problem
    place = next((k for k, c in enumerate(listed) if c.kept), None)
    if place is None or problem.points.size < 8:
        return outcome.candidates, []
    missed: dict[int, Array] = {}
    for k in range(max(place - BESIDE, 0), min(place + BESIDE + 1, len(listed))):
        free = listed[k].order - problem.given
        poles = outcome.poles if k == place else outcome.tried.get(free)
        if poles is None or (k != place and problem.values.size * max(free, 1) ** 2 > AFFORDABLE):
            continue
        if problem.unknowns(free) + 2 >= problem.numbers:
            continue
        listed[k], missed[k] = _looked_at(problem, listed[k], poles)
    doubts = []
    if chosen_by_data and place in missed:
        for k in missed:
            if listed[k].order < listed[place].order:
                gain = missed[k] - missed[place]
                if np.sum(gain) < -BETTER * np.sqrt(gain.size) * np.std(gain):
                    doubts.append(
                        f"lines that are left out are predicted better with order {listed[k].order}: the order chosen "
                        "may be too high"
                    )
                    break
    return tuple(listed), doubts


def _looked_at(problem: Problem, candidate: Candidate, poles: ComplexArray) -> tuple[Candidate, Array]:
    """Return the candidate with its evidence, and the held-out misfit power of every line and channel."""
    solution = problem.solved(poles)
    active = np.any(problem.values != 0, axis=0)
    slopes = slopes_of(problem, solution, poles.size)
    covariance = free_covariance(factors_of(problem, slopes, solution.misfit), slopes, active)
    leverage = np.minimum((covariance.response_deviation(problem.points) * problem.weights) ** 2, MOST_LEVERAGE)
    scaled = (problem.weights * solution.misfit)[:, active]
    held = np.abs(scaled / (1 - leverage[:, active])) ** 2
    rho = alike_lines(scaled)
    level = max(
        1.0 if problem.known else 0.0,
        noise_level(problem, solution.misfit, problem.unknowns(poles.size)),
        float(np.sqrt(2 * problem.rounding(poles) / problem.numbers)),
    )
    spread, cancelling = 0.0, 0
    deviation = covariance.pole_deviation() * level
    from scipy.special import chdtri

    for k in np.flatnonzero(poles.imag >= 0):
        paired = bool(poles[k].imag > 0)
        distance = max(abs(poles[k].real), np.finfo(float).tiny)
        spread = max(spread, float(np.max(deviation[k : k + 1 + int(paired)])) / distance)
        metric = covariance.residue_metric(int(k), paired) if np.all(active) else None
        if metric is not None:
            residue = solution.residues[k]
            flat = np.stack([residue.real, residue.imag], axis=1).reshape(-1) if paired else residue.real
            strength = float(np.sum((metric @ flat / level) ** 2))
            cancelling += int(strength < chdtri(flat.size, CHANCE))
    weighted = candidate.weighted
    # in the units of the candidate's own misfit
    unit = float(np.sqrt(np.mean(np.abs(scaled) ** 2)))
    return (
        replace(
            candidate,
            held_out=float(np.sqrt(np.mean(held))) * (weighted / unit if unit > 0 else 1.0),
            correlation=float(rho[1]) if rho.size > 1 else 0.0,
            spread=spread,
            cancelling=cancelling,
        ),
        held,
    )
