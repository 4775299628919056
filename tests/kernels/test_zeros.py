"""Finite zeros in doubles against exact ones, zeros at infinity, hidden modes, units; roots without overflow."""

from __future__ import annotations

from fractions import Fraction
from typing import Any

import numpy as np
import pytest

from realize.kernels import factored
from realize.kernels.exact import states
from realize.kernels.exact.roots import roots
from realize.kernels.zeros import (
    NormalRank,
    at_origin,
    components,
    connected_states,
    eigenvalues,
    invariant_zeros,
    poles,
    zeros,
)


def exact_zeros(A: Any, B: Any, C: Any, D: Any) -> np.ndarray:
    """Zeros of one channel from the exact numerator, common factors kept."""
    ratios = [
        [[float(value).as_integer_ratio() for value in row] for row in np.asarray(matrix)] for matrix in (A, B, C, D)
    ]
    numerators, _ = states.transfer_matrix(*ratios, None)
    found = roots(numerators[0][0]) if numerators[0][0].degree() > 0 else []
    return np.array([root.value for root in found for _ in range(root.multiplicity)], dtype=complex)


def distance(one: np.ndarray, two: np.ndarray) -> float:
    """Largest distance of the nearest members, relative to the largest of all."""
    assert one.size == two.size
    if one.size == 0:
        return 0.0
    between = np.abs(one[:, None] - two[None, :])
    return float(max(between.min(axis=0).max(), between.min(axis=1).max()) / np.abs(two).max())


def plant(seed: int, n: int, degree: int) -> tuple[np.ndarray, ...]:
    """Dense A and B, and a C that is orthogonal to B, AB, ... so that the relative degree is given; integers."""
    rng = np.random.default_rng(seed)
    A = rng.integers(-4, 5, (n, n)).astype(float)
    B = np.zeros((n, 1))
    B[-1] = 1.0
    A[: n - 1, n - 1] = 0.0
    for k in range(1, degree):
        A[n - 1 - k, : n - k] = rng.integers(-4, 5, n - k)
        A[n - 1 - k, n - k] = 1.0
        A[: n - 1 - k, n - 1 - k] = 0.0
        A[n - 1 - k, n - k + 1 :] = 0.0
    C = np.zeros((1, n))
    C[0, : n - degree] = rng.integers(-3, 4, n - degree)
    C[0, n - degree] = 1.0
    return A, B, C, np.zeros((1, 1))


@pytest.mark.parametrize("seed", range(6))
@pytest.mark.parametrize("through", [0.0, 1.0, 1e-3])
def test_zeros_of_random_models_are_the_exact_ones(seed: int, through: float) -> None:
    rng = np.random.default_rng(seed)
    n = 2 + seed
    A, B, C = (rng.standard_normal(shape) for shape in ((n, n), (n, 1), (1, n)))
    D = np.array([[through]])
    expected = exact_zeros(A, B, C, D)
    assert distance(zeros(A, B, C, D), expected) < 1e-10


@pytest.mark.parametrize("degree", [1, 2, 3, 5])
def test_zeros_at_infinity_are_taken_away(degree: int) -> None:
    A, B, C, D = plant(degree, 8, degree)
    expected = exact_zeros(A, B, C, D)
    assert expected.size == 8 - degree
    found = zeros(A, B, C, D)
    assert distance(found, expected) < 1e-9
    turn = np.linalg.qr(np.random.default_rng(1).standard_normal((8, 8)))[0]
    assert distance(zeros(turn @ A @ turn.T, turn @ B, C @ turn.T, D), expected) < 1e-6


def test_no_zeros_and_no_states() -> None:
    chain = np.diag(np.ones(4), 1)
    assert zeros(chain, np.eye(5)[:, 4:], np.eye(5)[:1], np.zeros((1, 1))).size == 0
    empty = np.zeros((0, 0)), np.zeros((0, 1)), np.zeros((1, 0))
    assert zeros(*empty, np.ones((1, 1))).size == 0
    with pytest.raises(NormalRank):
        zeros(*empty, np.zeros((1, 1)))


def test_a_zero_channel_is_said_to_be_one() -> None:
    A = np.array([[-1.0, 0.0], [3.0, -2.0]])
    with pytest.raises(NormalRank):
        zeros(A, np.array([[0.0], [1.0]]), np.array([[1.0, 0.0]]), np.zeros((1, 1)))
    assert connected_states(A, np.array([0.0, 1.0]), np.array([1.0, 0.0])).size == 0


def test_hidden_modes_count_as_zeros() -> None:
    A = np.diag([-1.0, -2.0, 3.0])
    B, C = np.array([[1.0], [1.0], [0.0]]), np.array([[1.0, 1.0, 1.0]])
    assert np.allclose(sorted(zeros(A, B, C, np.zeros((1, 1))).real), [-1.5, 3.0], rtol=1e-14)
    assert connected_states(A, B[:, 0], C[0]).tolist() == [0, 1]


def test_several_inputs_and_outputs() -> None:
    # known by construction: G = diag((s + 1)/(s + 2)^2, 1 + 1/(s - 3)) with rotated inputs and outputs
    A = np.array([[0.0, 1.0, 0.0], [-4.0, -4.0, 0.0], [0.0, 0.0, 3.0]])
    B = np.array([[0.0, 0.0], [1.0, 0.0], [0.0, 1.0]])
    C = np.array([[1.0, 1.0, 0.0], [0.0, 0.0, 1.0]])
    D = np.array([[0.0, 0.0], [0.0, 1.0]])
    turn = np.array([[0.6, 0.8], [-0.8, 0.6]])
    found = zeros(A, B @ turn, turn.T @ C, turn.T @ D @ turn)
    assert np.allclose(sorted(found.real), [-1.0, 2.0], rtol=1e-13) and not found.imag.any()
    # more outputs than inputs: the common zero alone
    tall = zeros(np.diag([-1.0, -2.0]), np.array([[1.0], [0.0]]), np.eye(2), np.zeros((2, 1)))
    assert np.allclose(tall, [-2.0])


def test_descriptor_with_an_algebraic_state_and_a_derivative() -> None:
    one = np.ones((2, 1)), np.ones((1, 2)), np.zeros((1, 1))
    A, E = np.diag([-1.0, 1.0]), np.diag([1.0, 0.0])
    assert np.allclose(zeros(A, *one, E), [0.0], atol=1e-15) and np.allclose(poles(A, E), [-1.0])
    # y = s u + u / (s + 2): numerator s^2 + 2 s + 1
    A = np.diag([-2.0, 1.0, 1.0])
    E = np.array([[1.0, 0.0, 0.0], [0.0, 0.0, 1.0], [0.0, 0.0, 0.0]])
    B, C = np.array([[1.0], [0.0], [-1.0]]), np.array([[1.0, 1.0, 0.0]])
    turn = np.linalg.qr(np.random.default_rng(2).standard_normal((3, 3)))[0]
    other = np.linalg.qr(np.random.default_rng(3).standard_normal((3, 3)))[0]
    for left, right in ((np.eye(3), np.eye(3)), (turn, other)):
        system = left @ A @ right, left @ B, C @ right, np.zeros((1, 1)), left @ E @ right
        found = zeros(*system)
        assert found.size == 2 and np.allclose(found, -1.0, atol=1e-6)
        assert np.allclose(poles(system[0], system[4]), [-2.0])
    with pytest.raises(NormalRank):
        poles(np.diag([1.0, 0.0]), np.diag([1.0, 0.0]))


@pytest.mark.parametrize("unit", [1e-280, 1e-9, 1e7, 1e280])
def test_units_change_nothing(unit: float) -> None:
    rng = np.random.default_rng(5)
    A, B, C = (rng.standard_normal(shape) for shape in ((5, 5), (5, 1), (1, 5)))
    D = np.array([[0.3]])
    plain = zeros(A, B, C, D)
    power = 2.0 ** round(np.log2(unit))
    root = 2.0 ** (round(np.log2(unit)) // 2)
    time = zeros(A * root, B * root, C, D)
    assert np.array_equal(time, plain * root)
    gains = zeros(A, B * power, C / power, D)
    assert distance(gains, plain) < 1e-13


def test_blocks_do_not_disturb_each_other() -> None:
    pair = np.array([[-1.0, 2.0], [-2.0, -1.0]])
    A = np.kron(np.eye(4), pair)
    A[2:, :-2] += np.kron(np.eye(3), np.ones((2, 2)))
    found = np.unique(eigenvalues(A))
    assert found.size == 2 and np.allclose(found, [-1 - 2j, -1 + 2j], rtol=4e-16)
    assert sorted(len(part) for part in components(A != 0)) == [2, 2, 2, 2]


def test_singular_means_a_zero_at_the_origin_whatever_the_units() -> None:
    values = np.array([-1e-9 + 0j, -5.0])
    assert at_origin(values, np.array([[1.0, 2.0], [2.0, 4.0]])).tolist() == [0.0, -5.0]
    assert at_origin(values, np.diag([1e-20, 1.0])).tolist() == values.tolist()


@pytest.mark.parametrize("scale", [1e-150, 1.0, 1e150])
def test_polynomial_roots_of_any_size(scale: float) -> None:
    expected = np.array([-1.0, -2.0, -3.0 + 4j, -3.0 - 4j, 0.0, 0.0]) * scale
    found = factored.polynomial_roots(factored.multiplied_out(expected))
    assert np.sum(found == 0) == 2
    assert distance(found, expected) < 1e-14
    wide = np.array([-1e-200, -1.0, -1e200]) * 1.0
    back = np.sort(factored.polynomial_roots(factored.multiplied_out(wide)).real)
    assert np.allclose(back / np.sort(wide), 1.0, rtol=1e-14)


def test_a_quadratic_keeps_small_damping_and_far_roots() -> None:
    m, e = np.frexp([1.0, 2e-9, 1.0])
    found = factored.polynomial_roots((m, e.astype(np.int64)))
    assert np.array_equal(found.real, [-1e-9, -1e-9]) and not found.imag.sum()
    m, e = np.frexp([1.0, 1e200, 1.0])
    found = np.sort(factored.polynomial_roots((m, e.astype(np.int64))).real)
    assert np.allclose(found, [-1e200, -1e-200], rtol=1e-15, atol=0.0)


def test_multiplying_out_against_fractions() -> None:
    given = [-0.1, -0.2, -30.5, 4.0]
    product = [Fraction(1)]
    for root in given:
        shifted = [*product, Fraction(0)]
        for k, value in enumerate(product):
            shifted[k + 1] -= value * Fraction(root)
        product = shifted
    m, e = factored.multiplied_out(np.array(given, dtype=complex))
    assert np.allclose(np.ldexp(m, e), [float(value) for value in product], rtol=1e-15)


def test_series_of_partial_fractions() -> None:
    # (s + 3) / ((s + 1)^2 (s + 2)) = -1/(s + 1) + 2/(s + 1)^2 + 1/(s + 2)
    m, e = factored.local_series(np.array([-3.0 + 0j]), np.array([-2.0 + 0j]), -1.0, 2)
    assert np.allclose(m * 2.0**e, [2.0, -1.0], rtol=1e-15)
    # s^2 / (s + 1) = s - 1 + ...
    found = factored.series_at_infinity(np.zeros(2, dtype=complex), np.array([-1.0 + 0j]), 2)
    assert np.array_equal(found, [1.0, -1.0])


def test_inputs_are_left_alone() -> None:
    rng = np.random.default_rng(9)
    given = tuple(rng.standard_normal(shape) for shape in ((4, 4), (4, 2), (2, 4), (2, 2)))
    before = [matrix.copy() for matrix in given]
    invariant_zeros(*given)
    zeros(*given, np.diag([1.0, 1.0, 0.0, 2.0]))
    assert all(np.array_equal(a, b) for a, b in zip(given, before, strict=True))


def test_structure_at_infinity_against_the_exact_form() -> None:
    """Orders and normal rank from deflation in doubles, units stretched, against the exact Smith-McMillan form."""
    from realize.kernels.exact.smith import smith_mcmillan
    from realize.kernels.zeros import structure_at_infinity

    rng = np.random.default_rng(5)
    for p, m, late in ((2, 2, 0), (3, 2, 1), (2, 2, 2), (2, 3, 1), (1, 1, 3)):
        n = 5
        A = rng.integers(-4, 5, (n, n)).astype(float)
        B, C, D = rng.integers(-3, 4, (n, m)) + 0.0, rng.integers(-3, 4, (p, n)) + 0.0, np.zeros((p, m))
        # integrators before one output push its zeros towards infinity
        size = n + late
        a, b, c = np.zeros((size, size)), np.zeros((size, m)), np.zeros((p, size))
        a[:n, :n], b[:n], c[:, :n] = A, B, C
        if late:
            a[n, :n], c[0] = C[0], 0.0
            for k in range(n, size - 1):
                a[k + 1, k] = 1.0
            c[0, size - 1] = 1.0
        ratios = [[[float(x).as_integer_ratio() for x in row] for row in part] for part in (a, b, c, D)]
        numerators, d = states.transfer_matrix(*ratios, None)
        exact = smith_mcmillan([[(numerator, d) for numerator in row] for row in numerators])
        units = 2.0 ** rng.integers(-20, 20, size)
        a, b, c = a / units[:, None] * units * 2.0**30, b / units[:, None] * 2.0**-9, c * units
        assert structure_at_infinity(a, b, c, D) == (exact.normal_rank, list(exact.zeros_at_infinity))
