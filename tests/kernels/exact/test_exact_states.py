"""Exact transfer matrices against the exact solve, a brute-force adjugate, closed forms and hard inputs."""

import json
import time
from fractions import Fraction
from pathlib import Path

import flint
import numpy as np
import pytest
from flint import arb, fmpq

from realize.kernels.exact.integer_scaling import integer_states
from realize.kernels.exact.numbers import nearest, precision
from realize.kernels.exact.polynomials import coefficients, polynomial
from realize.kernels.exact.states import (
    SingularPencil,
    characteristic_polynomial,
    response_at,
    response_ball,
    strong_blocks,
    transfer_matrix,
)

HARD = Path(__file__).parents[4] / "shared" / "data" / "hard-inputs.json"


def ratios(matrix):
    return [[float(x).as_integer_ratio() for x in row] for row in np.atleast_2d(np.asarray(matrix, dtype=float))]


def at(p, real, imaginary):
    x, y = fmpq(0), fmpq(0)
    for c in coefficients(p):
        x, y = x * real - y * imaginary + c, x * imaginary + y * real
    return x, y


def divide(a, b):
    size = b[0] ** 2 + b[1] ** 2
    return (a[0] * b[0] + a[1] * b[1]) / size, (a[1] * b[0] - a[0] * b[1]) / size


def agree(model, real, imaginary):
    numerators, denominator = transfer_matrix(*model)
    response = response_at(*model, real, imaginary)
    below = at(denominator, real, imaginary)
    for row, exact_row in zip(numerators, response, strict=True):
        for n, exact in zip(row, exact_row, strict=True):
            assert divide(at(n, real, imaginary), below) == exact


def random_model(rng, n, p, m, spread=6, density=0.6, descriptor=False):
    def g(rows, columns):
        entries = rng.standard_normal((rows, columns)) * 10.0 ** rng.uniform(-spread, spread, (rows, columns))
        entries = entries * (rng.random((rows, columns)) < density)
        return [[float(x).as_integer_ratio() for x in row] for row in entries]

    return g(n, n), g(n, m), g(p, n), g(p, m), (g(n, n) if descriptor else None)


@pytest.mark.parametrize("descriptor", [False, True])
@pytest.mark.parametrize("seed", range(25))
def test_transfer_matrix_agrees_with_the_solve(seed, descriptor):
    rng = np.random.default_rng(seed)
    n, p, m = rng.integers(0, 7), rng.integers(1, 4), rng.integers(1, 4)
    model = random_model(rng, n, p, m, descriptor=descriptor, density=0.9 if descriptor else 0.6)
    try:
        transfer_matrix(*model)
    except SingularPencil:
        with pytest.raises(ZeroDivisionError):
            response_at(*model, fmpq(37, 11), fmpq(5, 3))
        return
    agree(model, fmpq(37, 11), fmpq(5, 3))
    agree(model, fmpq(-2, 7), fmpq(0))


def faddeev_leverrier(a, b, c):
    """Coefficients of det(sI - A) and c adj(sI - A) b, highest power first, by Faddeev's recursion in fractions."""
    n = len(a)
    product = [[Fraction(int(i == j)) for j in range(n)] for i in range(n)]
    d, numerator = [Fraction(1)], []
    for k in range(1, n + 1):
        numerator.append(sum(c[i] * product[i][j] * b[j] for i in range(n) for j in range(n)))
        product = [[sum(a[i][l] * product[l][j] for l in range(n)) for j in range(n)] for i in range(n)]
        d.append(-sum(product[i][i] for i in range(n)) / k)
        for i in range(n):
            product[i][i] += d[-1]
    return numerator, d


@pytest.mark.parametrize("seed", range(8))
def test_against_a_brute_force_adjugate(seed):
    rng = np.random.default_rng(100 + seed)
    n = int(rng.integers(1, 6))
    pick = lambda: (int(rng.integers(-9, 10)), int(rng.integers(1, 8)))  # noqa: E731
    A = [[pick() for _ in range(n)] for _ in range(n)]
    B, C = [[pick()] for _ in range(n)], [[pick() for _ in range(n)]]
    numerators, denominator = transfer_matrix(A, B, C, [[(0, 1)]])
    a = [[Fraction(*x) for x in row] for row in A]
    above, below = faddeev_leverrier(a, [Fraction(*row[0]) for row in B], [Fraction(*x) for x in C[0]])
    assert denominator == polynomial([(x.numerator, x.denominator) for x in below])
    assert numerators[0][0] == polynomial([(x.numerator, x.denominator) for x in above])


def test_order_zero_and_no_channels():
    assert transfer_matrix([], [], [[]], [[(3, 2)]]) == ([[polynomial([(3, 2)])]], polynomial([1]))
    assert response_at([], [], [[]], [[(3, 2)]], None, fmpq(1), fmpq(1)) == [[(fmpq(3, 2), fmpq(0))]]
    numerators, denominator = transfer_matrix([[(-1, 1)]], [[]], [[(1, 1)]], [[]])
    assert numerators == [[]] and denominator == polynomial([1, 1])


@pytest.mark.parametrize("size", [1e-300, 1e300])
def test_far_units_leave_short_integers(size):
    # x1' = size x2, x2' = -x1 / size - x2: a change of the unit of one state
    model = (ratios([[0, size], [-1 / size, -1]]), ratios([[0], [1 / size]]), ratios([[1, 0]]), ratios([[0]]))
    numerators, denominator = transfer_matrix(*model)
    inverse = fmpq(*(1 / size).as_integer_ratio())
    exact = fmpq(*size.as_integer_ratio())
    assert denominator == polynomial([fmpq(1), fmpq(1), exact * inverse])
    assert numerators[0][0] == polynomial([exact * inverse])
    integers = integer_states(*model[:3])
    assert max(int(entry).bit_length() for entry in integers.A.entries()) < 120


def test_decimals_with_exponent_5000():
    tiny, huge = (1, 10**5000), (10**5000, 1)
    model = ([[tiny, (1, 1)], [(0, 1), huge]], [[(0, 1)], [(1, 1)]], [[huge, (0, 1)]], [[tiny]])
    numerators, denominator = transfer_matrix(*model)
    assert denominator == polynomial([1, -fmpq(*tiny)]) * polynomial([1, -fmpq(*huge)])
    assert numerators[0][0] == fmpq(*huge) + fmpq(*tiny) * denominator


def test_blocks_of_a_triangular_matrix():
    A = ratios([[1, 2, 0, 0], [-2, 1, 0, 0], [5, 0, 3, 0], [0, 7, 1, 4]])
    assert sorted(strong_blocks(A)) == [(0, 1), (2,), (3,)]
    s = polynomial([1, 0])
    assert characteristic_polynomial(A) == ((s - 1) ** 2 + 4) * (s - 3) * (s - 4)


def test_structural_zeros_stay_zero():
    # chain of five integrators: relative degree 5, an exact numerator 1
    n = 5
    A = [[(int(j == i + 1), 1) for j in range(n)] for i in range(n)]
    numerators, denominator = transfer_matrix(
        A, [[(int(i == n - 1), 1)] for i in range(n)], [[(int(i == 0), 1) for i in range(n)]], [[(0, 1)]]
    )
    assert numerators[0][0] == polynomial([1])
    assert denominator == polynomial([1, 0, 0, 0, 0, 0])


def test_descriptor_with_an_improper_part():
    # E nilpotent: y = -(u + s u') for N = [[0, 1], [0, 0]], sE - A with A = I
    E = [[(0, 1), (1, 1)], [(0, 1), (0, 1)]]
    A = [[(1, 1), (0, 1)], [(0, 1), (1, 1)]]
    numerators, denominator = transfer_matrix(A, [[(0, 1)], [(1, 1)]], [[(1, 1), (0, 1)]], [[(0, 1)]], E)
    assert denominator == polynomial([1])
    assert numerators[0][0] == polynomial([-1, 0])


def test_descriptor_with_far_units():
    E = ratios([[1e-200, 0], [0, 3e250]])
    A = ratios([[-2e-190, 1e-195], [1e255, -5e255]])
    agree((A, ratios([[1e-150], [0]]), ratios([[0, 1e80]]), ratios([[0.5]]), E), fmpq(10**9), fmpq(10**10, 3))


def test_singular_pencil_is_found():
    E = [[(1, 1), (1, 1)], [(1, 1), (1, 1)]]
    A = [[(2, 1), (2, 1)], [(2, 1), (2, 1)]]
    with pytest.raises(SingularPencil):
        transfer_matrix(A, [[(1, 1)], [(0, 1)]], [[(1, 1), (0, 1)]], [[(0, 1)]], E)
    zero = [[(0, 1)] * 2] * 2
    with pytest.raises(SingularPencil):
        transfer_matrix(zero, [[(1, 1)], [(0, 1)]], [[(1, 1), (0, 1)]], [[(0, 1)]], zero)


def test_a_pole_has_no_response():
    model = (ratios([[0, 1], [-4, 0]]), ratios([[0], [1]]), ratios([[1, 0]]), ratios([[0]]), None)
    for respond in (response_at, response_ball):
        with pytest.raises(ZeroDivisionError):
            respond(*model, fmpq(0), fmpq(2))


@pytest.mark.parametrize("descriptor", [False, True])
def test_balls_hold_the_exact_response(descriptor):
    rng = np.random.default_rng(5)
    model = random_model(rng, 6, 2, 2, density=1.0, descriptor=descriptor)
    real, imaginary = fmpq(3, 7), fmpq(11, 5)
    exact = response_at(*model, real, imaginary)
    balls = response_ball(*model, real, imaginary)
    for row, ball_row in zip(exact, balls, strict=True):
        for (x, y), ball in zip(row, ball_row, strict=True):
            assert ball.rel_accuracy_bits() >= 60
            with precision(20000):
                assert ball.real.overlaps(arb(x)) and ball.imag.overlaps(arb(y))
    assert flint.ctx.prec == 53


def test_an_exactly_zero_channel_is_a_ball_over_zero():
    model = (ratios([[-1, 0.3], [0, -2]]), ratios([[1, 0], [0, 1]]), ratios([[0, 1]]), ratios([[0, 0]]), None)
    ball = response_ball(*model, fmpq(0), fmpq(1))[0][0]
    assert ball.contains(0) and ball.abs_upper() < arb(2) ** -100


def hard_cases():
    if not HARD.exists():
        return []
    return [case for case in json.loads(HARD.read_text())["cases"] if case["kind"] == "to-coefficients"]


@pytest.mark.skipif(not HARD.exists(), reason="shared/data/hard-inputs.json is absent")
def test_hard_inputs_to_coefficients():
    cases = hard_cases()
    assert len(cases) >= 3
    for case in cases:
        given, oracle = case["input"], case["oracle"]
        model = tuple(ratios(given[name]) for name in "ABCD")
        numerators, denominator = transfer_matrix(*model)
        assert [nearest(c) for c in coefficients(denominator)] == oracle["den"], case["id"]
        for i, row in enumerate(numerators):
            for j, n in enumerate(row):
                assert [nearest(c) for c in coefficients(n)] == np.trim_zeros(oracle["num"][i][j], "f"), case["id"]
                assert denominator.degree() - n.degree() == oracle["relative_degree"][i][j], case["id"]


def test_order_forty_is_usable():
    rng = np.random.default_rng(1)
    model = random_model(rng, 40, 1, 1, spread=1, density=1.0)
    start = time.perf_counter()
    numerators, denominator = transfer_matrix(*model)
    print(f"order 40: {time.perf_counter() - start:.4f} s")
    assert denominator.degree() == 40 and numerators[0][0].degree() == 40
    agree(model, fmpq(1, 3), fmpq(0))
