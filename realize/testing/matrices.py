"""Invented transfer matrices with shared poles and a McMillan degree known by construction."""

from __future__ import annotations

import random
from dataclasses import dataclass
from typing import Any

from realize.models import TransferFunction

#: What the poles of a matrix are like.
FAMILIES = ("integers", "six decades", "lightly damped", "repeated")
#: Smallest gain of a pole, relative to the others, as a power of ten.
FAINTEST = -13


@dataclass(frozen=True)
class KnownMatrix:
    """A transfer matrix in exact decimals, its McMillan degree and how it was made."""

    model: TransferFunction
    degree: int
    family: str
    seed: int


def known_matrix(seed: int) -> KnownMatrix:
    """Return the matrix of a seed: 2 x 2 to 4 x 4, 3 to 8 distinct poles or pairs, each shared by several entries.

    Each pole contributes c (sI - J)^-1 b with a Jordan block or a rank of its own, so that the degrees add up.
    """
    from flint import fmpq, fmpq_poly

    from realize.kernels.exact.polynomials import reduce_fraction

    draw = random.Random(seed)
    family = FAMILIES[seed % len(FAMILIES)]
    p, m = draw.randint(2, 4), draw.randint(2, 4)
    count = draw.randint(3, 8)
    degree = 0
    grid = [[(fmpq_poly([]), fmpq_poly([1])) for _ in range(m)] for _ in range(p)]
    for polynomial, powers in _poles(draw, family, count):
        gain = fmpq(10) ** draw.choice([0, 0, 0, -1, -3, -6, FAINTEST])
        rank = draw.randint(1, min(p, m, 3)) if powers == 1 else 1
        left, right = _independent(draw, p, rank), _independent(draw, m, rank)
        if polynomial.degree() == 2:
            tops = [fmpq_poly([draw.randint(-9, 9), draw.randint(1, 9)]) for _ in range(rank)]
        else:
            tops = [fmpq_poly([draw.choice([-1, 1]) * draw.randint(1, 9)]) for _ in range(rank)]
        below = polynomial**powers
        # one column times one row over the highest power: a single Jordan block for each unit of rank
        degree += rank * powers * polynomial.degree()
        for i in range(p):
            for j in range(m):
                share = sum((top * (a[i] * b[j]) for top, a, b in zip(tops, left, right, strict=True)), fmpq_poly([]))
                n, d = grid[i][j]
                grid[i][j] = reduce_fraction(n * below + gain * share * d, d * below)
    return KnownMatrix(matrix_of(grid), degree, family, seed)


def matrix_of(grid: list[list[tuple[Any, Any]]]) -> TransferFunction:
    """Return a transfer function whose coefficients are exact decimals where they are no doubles."""
    from realize.kernels.exact.numbers import nearest

    parts: list[list[list[list[float]]]] = []
    decimals: dict[str, dict[Any, str]] = {}
    for which, name in enumerate(("numerator", "denominator")):
        texts = [[_decimals(pair[which]) for pair in row] for row in grid]
        decimals[name] = {
            (i, j, k): text
            for i, row in enumerate(texts)
            for j, line in enumerate(row)
            for k, text in enumerate(line)
            if text is not None
        }
        parts.append([[[nearest(c) for c in reversed(pair[which].coeffs())] or [0.0] for pair in row] for row in grid])
    return TransferFunction(numerator=parts[0], denominator=parts[1], decimals=decimals)


def _poles(draw: random.Random, family: str, count: int) -> list[tuple[Any, int]]:
    """Return monic polynomials of distinct poles or pairs, and how often each is repeated."""
    from flint import fmpq, fmpq_poly

    if family == "integers":
        return [(fmpq_poly([k, 1]), 1) for k in draw.sample(range(1, 25), count)]
    if family == "six decades":
        steps = draw.sample(range(-30, 31), count)
        # four digits keep neighbouring steps apart
        return [(fmpq_poly([fmpq(round(10 ** (6 + step / 10)), 10**6), 1]), 1) for step in steps]
    if family == "repeated":
        return [(fmpq_poly([k, 1]), draw.choice([1, 1, 2, 3])) for k in draw.sample(range(1, 12), min(count, 5))]
    made = []
    for k in draw.sample(range(1, 40), count):
        w = fmpq(k * 10 + draw.randint(0, 9), 10)
        damping = fmpq(draw.choice([2, 10, 50, 200]), 10000)
        made.append((fmpq_poly([w * w, 2 * damping * w, 1]), 1))
    return made


def _independent(draw: random.Random, size: int, rank: int) -> list[list[int]]:
    """Return linearly independent integer vectors, some entries zero, none of the vectors zero."""
    from flint import fmpz_mat

    while True:
        rows = [[draw.choice([0, 1, 1, -1, 2, -3, 5]) for _ in range(size)] for _ in range(rank)]
        if fmpz_mat(rows).rank() == rank:
            return rows


def _decimals(polynomial: Any) -> list[str | None]:
    """Return coefficients, highest power first, as exact decimals; None for a double."""
    from flint import fmpq

    from realize.kernels.exact.numbers import decimal_string, nearest

    texts: list[str | None] = []
    for c in reversed(polynomial.coeffs()):
        if fmpq(*nearest(c).as_integer_ratio()) == c:
            texts.append(None)
        else:
            # a finite decimal has no more digits than its numerator and denominator have bits
            texts.append(decimal_string(c, int(c.p).bit_length() + int(c.q).bit_length()))
    return texts or [None]
