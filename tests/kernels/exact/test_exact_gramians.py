"""Balanced coordinates of models with hidden states, against exact Markov parameters of the source."""

from __future__ import annotations

import random
from fractions import Fraction

import numpy as np
import pytest

from realize.kernels.exact.gramians import balanced_projection, balanced_states, ranks_of, staircase_states

Rows = list[list[Fraction]]


def product(a: Rows, b: Rows) -> Rows:
    return [
        [sum((x * y for x, y in zip(row, column, strict=True)), Fraction(0)) for column in zip(*b, strict=True)]
        for row in a
    ]


def ratios(matrix: Rows) -> list[list[tuple[int, int]]]:
    return [[entry.as_integer_ratio() for entry in row] for row in matrix]


def hidden(seed: int, poles: list[Fraction], visible: int, m: int, p: int) -> tuple[Rows, Rows, Rows]:
    """`visible` states that count, then some that no input reaches, then some that no output sees, in sheared axes."""
    draw = random.Random(seed)
    n = len(poles)
    middle = visible + (n - visible) // 2
    A = [[Fraction(0)] * n for _ in range(n)]
    B = [[Fraction(draw.randint(1, 3)) for _ in range(m)] for _ in range(n)]
    C = [[Fraction(draw.randint(1, 3)) for _ in range(n)] for _ in range(p)]
    for i, pole in enumerate(poles):
        A[i][i] = pole
        for j in range(n):
            from_unreached = i < visible <= j < middle
            into_unseen = i >= middle and j < visible
            if from_unreached or into_unseen or (i < j < visible):
                A[i][j] = Fraction(draw.randint(-2, 2))
    for i in range(visible, middle):
        B[i] = [Fraction(0)] * m
    for row in C:
        row[middle:] = [Fraction(0)] * (n - middle)
    for _ in range(2 * n):
        i, j = draw.sample(range(n), 2)
        factor = draw.choice([-2, -1, 1, 2])
        for matrix in (A, B):
            matrix[i] = [x + factor * y for x, y in zip(matrix[i], matrix[j], strict=True)]
        for matrix in (A, C):
            for row in matrix:
                row[j] -= factor * row[i]
    return A, B, C


def markov(A: Rows, B: Rows, C: Rows, count: int) -> list[np.ndarray]:
    found, v = [], B
    for _ in range(count):
        found.append(np.array([[float(x) for x in row] for row in product(C, v)]))
        v = product(A, v)
    return found


PLANTS: dict[str, tuple[list[Fraction], bool]] = {
    "stable": ([Fraction(-k, 4) for k in (1, 2, 3, 5, 7, 9, 2, 11)], False),
    "unstable": ([Fraction(k, 4) for k in (3, 1, -2, -5, -7, 1, -9, -3)], False),
    "integrators": ([Fraction(k, 2) for k in (0, 0, -1, -3, 0, -2, -1, -1)], False),
    "sampled": ([Fraction(k, 8) for k in (1, 3, -5, 0, 7, 2, 6, -3)], True),
    "sampled, on the circle": ([Fraction(k, 8) for k in (8, -8, 9, 0, 7, 2, 8, -3)], True),
}


@pytest.mark.parametrize("name", PLANTS)
def test_the_markov_parameters_of_the_source_survive(name: str) -> None:
    poles, sampled = PLANTS[name]
    A, B, C = hidden(3, poles, 4, 2, 2)
    data = ratios(A), ratios(B), ratios(C)
    ranks = ranks_of(*data)
    assert ranks == (6, 6)
    found = balanced_projection(*data, 4, (*ranks, 4), sampled=sampled)
    exact = markov(A, B, C, 8)
    forms = [balanced_states(found), staircase_states(found, outputs=False), staircase_states(found, outputs=True)]
    for a, b, c in forms:
        assert a.shape == (4, 4)
        v = b
        for parameter in exact:
            scale = max(np.abs(parameter).max(), np.abs(c).max() * np.abs(v).max())
            np.testing.assert_allclose(c @ v, parameter, rtol=0, atol=1e-13 * scale)
            v = a @ v
    assert found.shifted == (name not in ("stable", "sampled"))


def test_units_of_channels_states_and_time_are_powers_of_two_that_come_back() -> None:
    A, B, C = hidden(5, PLANTS["stable"][0], 4, 2, 2)
    two = Fraction(2)
    n = len(A)
    plain = balanced_projection(ratios(A), ratios(B), ratios(C), 4, (6, 6, 4), sampled=False)
    states = [two ** ((7 * k) % 41 - 20) for k in range(n)]
    A = [[A[i][j] * states[i] / states[j] * two**30 for j in range(n)] for i in range(n)]
    B = [[B[i][j] * states[i] * two ** (20 * (-1) ** j) for j in range(2)] for i in range(n)]
    C = [[C[i][j] / states[j] * two ** (-18 * (-1) ** i) for j in range(n)] for i in range(2)]
    other = balanced_projection(ratios(A), ratios(B), ratios(C), 4, (6, 6, 4), sampled=False)
    eigenvalues = [np.sort_complex(np.linalg.eigvals(balanced_states(x)[0])) for x in (plain, other)]
    np.testing.assert_allclose(eigenvalues[1] / 2.0**30, eigenvalues[0], rtol=1e-12)
    assert other.bits == plain.bits


def test_roll_off_is_exact_in_staircase_coordinates() -> None:
    # three poles behind each other: C B = C A B = 0
    A = [[Fraction(-1), Fraction(1), Fraction(0)], [Fraction(0), Fraction(-2), Fraction(1)], [Fraction(0)] * 3]
    A[2][2] = Fraction(-3)
    B, C = [[Fraction(0)], [Fraction(0)], [Fraction(1)]], [[Fraction(1), Fraction(0), Fraction(0)]]
    found = balanced_projection(ratios(A), ratios(B), ratios(C), 3, (3, 3, 3), sampled=False)
    for outputs in (False, True):
        a, b, c = staircase_states(found, outputs=outputs)
        assert (c @ b)[0, 0] == 0.0
        assert (c @ (a @ b))[0, 0] == 0.0
        np.testing.assert_allclose((c @ (a @ (a @ b)))[0, 0], 1.0, rtol=1e-14)


def test_truncation_keeps_the_leading_states() -> None:
    # 1/(s+1) + 1/(s+10): Hankel singular values 0.51767 and 0.03233 (docs/methods/balanced-truncation)
    A = [[(-1, 1), (0, 1)], [(0, 1), (-10, 1)]]
    B, C = [[(1, 1)], [(1, 1)]], [[(1, 1), (1, 1)]]
    found = balanced_projection(A, B, C, 1, None, sampled=False)
    a, b, c = balanced_states(found)
    gain = -(c @ b / a)[0, 0]
    assert abs(gain - 1.1) == pytest.approx(2 * 0.03233, rel=1e-3)
