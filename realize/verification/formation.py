"""Exact fractions held against the structure they were formed from, at one random rational point."""

from __future__ import annotations

import random
from functools import lru_cache
from typing import Any

from realize.models import (
    MatrixFraction,
    Model,
    PoleResidue,
    SecondOrder,
    Sections,
    StateSpace,
    TransferFunction,
    ZeroPoleGain,
)
from realize.schema import KINDS


class FormationFault(RuntimeError):
    """Exact fractions that do not agree with the model they were formed from: a bug."""


def check_at_a_point(model: Model, fractions: list[list[tuple[Any, Any]]]) -> None:
    """Compare the fractions with the model's own structure at one random integer point, in exact arithmetic."""
    for x in _points(1000 * (model.order or 0) + 10 * model.shape[0] + model.shape[1]):
        values = _structural_value(model, x)
        if values is None:
            continue
        for i, row in enumerate(fractions):
            for j, (n, d) in enumerate(row):
                below = d(x)
                if below == 0:
                    break
                if n(x) != values[i][j] * below:
                    raise FormationFault(f"channel output {i}, input {j}: fraction and structure disagree at {x}")
        return


@lru_cache(maxsize=64)
def _points(seed: int) -> tuple[Any, ...]:
    """Return random rational points of 61 bits, to be tried in turn until one is no pole."""
    from realize.kernels.exact.numbers import fraction

    rng = random.Random(seed)
    return tuple(fraction((rng.getrandbits(61) | 1, 1 << 20)) for _ in range(8))


def _structural_value(model: Model, x: Any) -> list[list[Any]] | None:
    """Return the model at the rational point x by its own structure, or None where x is a pole."""
    from realize.kernels.exact import states
    from realize.kernels.exact.numbers import complex_fraction, fraction

    p, m = model.shape
    zero, one = fraction(0), fraction(1)

    def horner(ratios: Any) -> Any:
        value = zero
        for ratio in ratios:
            value = value * x + fraction(ratio)
        return value

    def product(roots: Any) -> Any:
        re, im = one, zero
        for root in roots:
            a, b = complex_fraction(root)
            a, b = x - a, -b
            re, im = re * a - im * b, re * b + im * a
        return re

    if isinstance(model, TransferFunction):
        above, under = model.exact("numerator"), model.exact("denominator")
        pairs = [[(horner(above[i][j]), horner(under[i][j])) for j in range(m)] for i in range(p)]
    elif isinstance(model, ZeroPoleGain):
        zeros, poles, gain = model.exact("zeros"), model.exact("poles"), model.exact("gain")
        pairs = [
            [(product(zeros[i][j]) * fraction(gain[i][j]), product(poles[i][j])) for j in range(m)] for i in range(p)
        ]
    elif isinstance(model, Sections):
        above, under = fraction(model.exact("gain")), one
        for numerator, denominator in model.exact("sections"):
            above, under = above * horner(numerator), under * horner(denominator)
        pairs = [[(above, under)]]
    elif isinstance(model, PoleResidue):
        poles, residues, direct = model.exact("poles"), model.exact("residues"), model.exact("direct")
        values = [[horner([matrix[i][j] for matrix in direct]) for j in range(m)] for i in range(p)]
        for pole, residue, power in zip(poles, residues, model.powers, strict=True):
            a, b = complex_fraction(pole)
            a, b = x - a, -b
            size = a * a + b * b
            if size == 0:
                return None
            # 1 / (x - pole) = conj / |.|^2, then the power
            u, v = a / size, -b / size
            re, im = one, zero
            for _ in range(int(power)):
                re, im = re * u - im * v, re * v + im * u
            for i in range(p):
                for j in range(m):
                    c, d = complex_fraction(residue[i][j])
                    # imaginary parts cancel between conjugates
                    values[i][j] += re * c - im * d
        return values
    elif isinstance(model, StateSpace):
        A, B, C, D, E = (model.exact(name) for name in "ABCDE")
        try:
            response = states.response_at(A, B, C, D, E, x, zero)
        except ZeroDivisionError:
            return None
        return [[value[0] for value in row] for row in response]
    elif isinstance(model, MatrixFraction):
        return _fraction_at(model, x)
    elif isinstance(model, SecondOrder):
        from realize.kernels.exact.second_order import value_at

        try:
            return value_at([model.exact(f.name) for f in KINDS[model.kind].fields], x)
        except ZeroDivisionError:
            return None
    else:
        raise TypeError(model.kind)
    if any(under == 0 for row in pairs for _, under in row):
        return None
    return [[above / under for above, under in row] for row in pairs]


def _fraction_at(model: MatrixFraction, x: Any) -> list[list[Any]] | None:
    """Return a matrix fraction at a rational point by one exact solve, None at a pole."""
    from flint import fmpq_mat

    from realize.kernels.exact.numbers import fraction

    def at(name: str) -> fmpq_mat:
        parts = [fmpq_mat([[fraction(entry) for entry in row] for row in matrix]) for matrix in model.exact(name)]
        total = parts[0]
        for part in parts[1:]:
            total = total * x + part
        return total

    N, D = at("numerator"), at("denominator")
    try:
        value = D.solve(N) if model.side == "left" else D.transpose().solve(N.transpose()).transpose()
    except ZeroDivisionError:
        return None
    table: list[list[Any]] = value.tolist()
    return table
