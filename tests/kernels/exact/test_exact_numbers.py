"""Correct rounding of rationals and balls, against the fractions module and the decimal module."""

import decimal
import math
from fractions import Fraction

import flint
import pytest
from flint import arb, fmpq
from hypothesis import given, settings
from hypothesis import strategies as st

from realize.kernels.exact.numbers import (
    complex_fraction,
    decimal_string,
    fraction,
    midpoints,
    near_ball,
    nearest,
    nearest_ball,
    precision,
    scaled,
    scaled_ball,
    simplest,
    tie,
)

integers = st.integers(-(10**60), 10**60)
positive = st.integers(1, 10**60)


def as_fraction(value: fmpq) -> Fraction:
    return Fraction(int(value.p), int(value.q))


def test_fraction_takes_ratios_integers_and_rationals():
    assert fraction((3, 6)) == fmpq(1, 2)
    assert fraction([3, -6]) == fmpq(-1, 2)
    assert fraction(7) == fmpq(7)
    assert complex_fraction((1, 2)) == (fmpq(1, 2), fmpq(0))
    assert complex_fraction([(1, 2), (-1, 3)]) == (fmpq(1, 2), fmpq(-1, 3))


@pytest.mark.parametrize(
    ("value", "expected"),
    [
        (fmpq(2**53 + 1), 2.0**53),
        (fmpq(2**53 + 3), 2.0**53 + 4),
        (fmpq(10) ** 400, math.inf),
        (-(fmpq(10) ** 400), -math.inf),
        (fmpq(2) ** 1024 - fmpq(2) ** 970, math.inf),
        (fmpq(2) ** 1024 - fmpq(2) ** 970 - 1, 1.7976931348623157e308),
        (1 / fmpq(2) ** 1075, 0.0),
        (3 / fmpq(2) ** 1075, 1e-323),
        (1 / fmpq(2) ** 1075 + 1 / fmpq(2) ** 2000, 5e-324),
        (fmpq(0), 0.0),
    ],
)
def test_nearest_at_the_edges(value, expected):
    assert nearest(value) == expected


@settings(deadline=None, max_examples=200)
@given(st.floats(allow_nan=False, allow_infinity=False), st.integers(-3, 3))
def test_balls_round_like_rationals(x, steps):
    value = fmpq(*x.as_integer_ratio()) + fmpq(steps, 7 * 2**1100)
    with precision(3000):
        ball = arb(value)
    assert nearest_ball(ball) == nearest(value) or (nearest_ball(ball) is None and steps == 0)
    assert near_ball(ball) == nearest(value)


def test_a_ball_over_zero_or_over_a_tie_has_no_double():
    with precision(200):
        assert nearest_ball(arb(0)) == 0.0
        assert nearest_ball(arb(0, arb(2) ** -5000)) is None
        half = 1 + fmpq(1, 2**53)
        assert nearest_ball(arb(half)) == 1.0
        assert nearest_ball(arb(half) + arb(0, arb(2) ** -150)) is None
        assert tie(arb(half) + arb(0, arb(2) ** -150)) == half
        assert tie(arb(1) + arb(0, arb(2) ** -150)) is None
        assert nearest_ball(arb.nan()) is None
        assert nearest_ball(arb(10) ** 400) == math.inf
    assert flint.ctx.prec == 53


def test_precision_is_restored_after_an_exception():
    before = flint.ctx.prec
    with pytest.raises(RuntimeError), precision(999):
        raise RuntimeError
    assert flint.ctx.prec == before


@settings(deadline=None, max_examples=200)
@given(integers, positive, st.integers(-4000, 4000))
def test_scaled_mantissa_is_the_rounded_quotient(p, q, e):
    value = fmpq(p, q) * fmpq(2) ** e
    mantissa, exponent = scaled(value)
    if p == 0:
        assert (mantissa, exponent) == (0.0, 0)
        return
    assert 0.5 <= abs(mantissa) < 1
    back = Fraction(mantissa) * Fraction(2) ** exponent
    assert abs(back - as_fraction(value)) <= abs(as_fraction(value)) / 2**53
    with precision(400):
        assert scaled_ball(arb(value)) == (mantissa, exponent)


@settings(deadline=None, max_examples=200)
@given(integers, positive, st.integers(1, 40))
def test_decimal_string_against_decimal(p, q, digits):
    with decimal.localcontext() as context:
        context.prec, context.rounding = digits, decimal.ROUND_HALF_EVEN
        expected = decimal.Decimal(p) / decimal.Decimal(q)
        text = decimal_string(fmpq(p, q), digits)
        assert decimal.Decimal(text) == expected
    assert sum(c.isdigit() for c in text.split("e")[0].lstrip("-0.").replace(".", "").rstrip("0")) <= digits


@pytest.mark.parametrize(
    ("value", "digits", "text"),
    [
        (fmpq(1, 3), 5, "0.33333"),
        (fmpq(5, 2), 1, "2"),
        (fmpq(7, 2), 1, "4"),
        (fmpq(999999), 3, "1000000"),
        (fmpq(-1, 8), 10, "-0.125"),
        (fmpq(10) ** 5000 / 3, 3, "3.33e4999"),
        (1 / fmpq(10) ** 5000, 3, "1e-5000"),
        (fmpq(0), 3, "0"),
    ],
)
def test_decimal_string_examples(value, digits, text):
    assert decimal_string(value, digits) == text


def test_seventeen_digits_read_back():
    for x in (0.1, 1e300, 5e-324, 1.7976931348623157e308, -2.5e-5):
        assert float(decimal_string(fmpq(*x.as_integer_ratio()), 17)) == x


@settings(deadline=None, max_examples=100)
@given(st.floats(allow_nan=False, allow_infinity=False))
def test_midpoints_are_halfway(x):
    low, high = midpoints(x)
    assert low < fmpq(*x.as_integer_ratio()) < high
    assert nearest(low + fmpq(1, 2**1200)) == x or math.isinf(math.nextafter(x, -math.inf))
    assert nearest(high - fmpq(1, 2**1200)) == x or math.isinf(math.nextafter(x, math.inf))


@settings(deadline=None, max_examples=100)
@given(st.integers(-500, 500), st.integers(1, 500), st.integers(10**6, 10**9))
def test_simplest_finds_the_short_rational(p, q, width):
    value = fmpq(p, q)
    assert simplest(value - fmpq(1, width), value + fmpq(1, 3 * width)) == value
