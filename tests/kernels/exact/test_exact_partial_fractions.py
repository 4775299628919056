"""Partial fractions: closed forms, exact zeros, and the sum put together again."""

import math

import flint
import pytest
from flint import fmpq
from hypothesis import given, settings
from hypothesis import strategies as st

from realize.kernels.exact.numbers import precision
from realize.kernels.exact.partial_fractions import residues
from realize.kernels.exact.polynomials import coefficients, from_partial_fractions, polynomial

S = polynomial([1, 0])
ONE = polynomial([1])


def table(n, d):
    terms, direct = residues(n, d)
    return {root.value: values for root, values in terms}, direct


def test_real_and_repeated_poles():
    # 1 / (s^3 (s + 1)^2) = 3/s - 2/s^2 + 1/s^3 - 3/(s + 1) - 1/(s + 1)^2
    found, direct = table(ONE, S**3 * (S + 1) ** 2)
    assert found == {0: [3, -2, 1], -1: [-3, -1]}
    assert direct == [0]
    assert all(value.imag == 0 for values in found.values() for value in values)


def test_exact_zero_parts_of_complex_poles():
    root2 = math.sqrt(2)
    assert table(ONE, S**2 + 1)[0][1j] == [-0.5j]
    assert table(S + 1, S**2 + 2 * S + 2)[0][-1 + 1j] == [0.5]
    found, _ = table(ONE, S**2 + 2 * S + 3)
    value = found[complex(-1, root2)][0]
    assert value.real == 0 and value.imag == pytest.approx(-0.25 * root2, rel=1e-15)
    # repeated on the axis: 1 / (s^2 + 2)^2
    found, _ = table(ONE, (S**2 + 2) ** 2)
    first, second = found[complex(0, root2)]
    assert first.real == 0 and first.imag == pytest.approx(-root2 / 16, rel=1e-15)
    assert second == -0.125
    # the first power is exactly zero at irrational real poles
    found, _ = table(S, (S**2 - 2) ** 2)
    assert [values[0] for values in found.values()] == [0, 0]


def test_polynomial_part_and_cancelled_factors():
    found, direct = table(polynomial([1, 0, 0, 0]) * (S + 5), (S + 1) * (S + 5))
    assert found == {-1: [-1]}
    assert direct == [1, -1, 1]
    assert table(polynomial([3]), polynomial([6])) == ({}, [fmpq(1, 2)])
    assert table(polynomial([]), S + 1) == ({}, [0])


def test_a_tie_of_a_rational_residue_is_half_even():
    half = 1 + fmpq(1, 2**53)
    assert table(half * ONE, S + 1)[0] == {-1: [1.0]}


def test_modal_sum_has_imaginary_residues():
    n, d = polynomial([]), ONE
    expected = []
    for k in range(1, 9):
        w = fmpq(*(1.7**k).as_integer_ratio())
        damping = fmpq(*(0.003 / k).as_integer_ratio())
        gain = fmpq(*(1 / k).as_integer_ratio())
        q = S**2 + 2 * damping * w * S + w**2
        n, d = n * q + gain * d, d * q
        expected.append((1 / k) / (2 * 1.7**k * math.sqrt(1 - (0.003 / k) ** 2)))
    terms, _ = residues(n, d)
    values = [values[0] for root, values in terms if root.value.imag > 0]
    assert all(value.real == 0 for value in values)
    assert [-value.imag for value in values] == pytest.approx(expected, rel=1e-14)


def test_residues_far_outside_the_range():
    far = fmpq(10) ** 400
    assert table(far * ONE, S + 1)[0] == {-1: [math.inf]}
    assert table(ONE / far, S + 1)[0] == {-1: [0]}


def test_clustered_poles():
    near = fmpq(1, 10**12)
    found, _ = table(ONE, (S + 1) * (S + 1 + near))
    assert found[-1.0] == [1e12]
    terms, _ = residues(ONE, (S**2 + S + 1) * (S**2 + S + 1 + near))
    assert all(root.multiplicity == 1 for root, _ in terms)
    assert max(abs(values[0]) for _, values in terms) == pytest.approx(1e12 / math.sqrt(3), rel=1e-9)


small = st.fractions(min_value=-5, max_value=5, max_denominator=5)


@settings(deadline=None, max_examples=40)
@given(st.lists(st.tuples(small, small, small, small, st.integers(1, 3)), min_size=1, max_size=4))
def test_known_terms_come_back(terms):
    wanted: dict[tuple, dict[int, complex]] = {}
    poles, values, powers = [], [], []
    for x, y, u, v, k in terms:
        y = abs(y)
        v = v if y else fmpq(0)
        pair = lambda a, b: ((int(a.numerator), int(a.denominator)), (int(b.numerator), int(b.denominator)))  # noqa: E731
        v_ratio = v if y else type(u)(0)
        for sign in (1, -1) if y else (1,):
            poles.append(pair(x, sign * y))
            values.append(pair(u, sign * v_ratio))
            powers.append(k)
        held = wanted.setdefault((x, y), {})
        a, b = held.get(k, (type(u)(0), type(u)(0)))
        held[k] = (a + u, b + v_ratio)
    n, d = from_partial_fractions(poles, values, powers, [])
    found, _ = residues(n, d)
    assert flint.ctx.prec == 53
    for root, parts in found:
        x, y = next(
            key for key in wanted if complex(float(key[0]), float(key[1])) in (root.value, root.value.conjugate())
        )
        for k, part in enumerate(parts, start=1):
            u, v = wanted[x, y].get(k, (0, 0))
            expected = complex(float(u), float(v))
            assert part == (expected if root.value.imag >= 0 else expected.conjugate())


def test_residues_add_up_at_a_point():
    d = (S**3 + S + 1) ** 2 * (S**2 + S + 7)
    n = polynomial([1, (1, 3), 5])
    terms, direct = residues(n, d)
    s = 0.7 + 0.2j
    total = sum(value / (s - root.value) ** k for root, values in terms for k, value in enumerate(values, start=1))
    with precision(200):
        exact = complex(flint.acb_poly(n)(flint.acb(s)) / flint.acb_poly(d)(flint.acb(s)))
    assert direct == [0] and abs(total - exact) < 1e-14 * abs(exact)
    assert coefficients(n)[0] == 1
