"""Frequency responses and differences: exact rationals, another road at 2000 bits, hard inputs, poles and zeros."""

import json
import math
from fractions import Fraction
from pathlib import Path

import flint
import numpy as np
import pytest
from flint import acb, acb_poly, arb, fmpq
from hypothesis import given, settings
from hypothesis import strategies as st

from realize.kernels.exact.evaluation import difference, evaluate, evaluate_scaled
from realize.kernels.exact.numbers import precision
from realize.kernels.exact.polynomials import coefficients, from_roots, polynomial

HARD = Path(__file__).parents[4] / "shared" / "data" / "hard-inputs.json"
S = polynomial([1, 0])
ONE = polynomial([1])


def doubles(values):
    return polynomial([float(x).as_integer_ratio() for x in values])


def on_axis(n, d, w):
    """n / d at jw in fractions."""
    parts = []
    for p in (n, d):
        re, im = Fraction(0), Fraction(0)
        for c in coefficients(p):
            re, im = -im * Fraction(w) + Fraction(int(c.p), int(c.q)), re * Fraction(w)
        parts.append((re, im))
    (a, b), (c, d) = parts
    size = c * c + d * d
    return (a * c + b * d) / size, (b * c - a * d) / size


finite = st.floats(-1e6, 1e6).filter(lambda x: x == 0 or abs(x) > 1e-30)


@settings(deadline=None, max_examples=60)
@given(st.lists(finite, min_size=1, max_size=6), st.lists(finite, min_size=1, max_size=6), st.floats(1e-6, 1e6))
def test_bound_holds_on_the_axis(a, b, w):
    n, d = doubles(a), doubles(b)
    if not d:
        return
    value, bound = evaluate(n, d, np.array([w]))
    if np.isinf(value[0]):
        assert all(c == 0 for c in on_axis(d, ONE, w))
        return
    x, y = on_axis(n, d, w)
    error = (Fraction(value[0].real) - x) ** 2 + (Fraction(value[0].imag) - y) ** 2
    assert error <= Fraction(bound[0]) ** 2
    assert bound[0] <= 2.3e-16 * abs(value[0]) + 1e-322


@settings(deadline=None, max_examples=40)
@given(st.lists(finite, min_size=1, max_size=6), st.lists(finite, min_size=2, max_size=6), st.floats(1e-9, 1e9))
def test_bound_holds_on_the_circle(a, b, w):
    n, d = doubles(a), doubles(b)
    if not d:
        return
    period = fmpq(1, 44100)
    value, bound = evaluate(n, d, np.array([w]), period)
    with precision(2000):
        z = (acb(0, 1) * arb(fmpq(*w.as_integer_ratio()) * period)).exp()
        error = acb_poly(n)(z) / acb_poly(d)(z) - acb(value[0])
        assert error.abs_upper() <= arb(bound[0])


def test_zeros_and_poles_that_are_hit_exactly():
    value, bound = evaluate(S**2 + 4, (S**2 + 9) * (S + 1), np.array([0.0, 2.0, 3.0, -2.0, -3.0]))
    assert value[0] == 4 / 9
    assert value[1] == value[3] == 0
    assert value[2] == value[4] == math.inf
    assert list(bound[1:]) == [0, 0, 0, 0]
    # a common factor that vanishes at the point is cancelled
    assert evaluate(S * (S + 1), S * (S + 2), np.array([0.0]))[0][0] == 0.5
    # on the circle only z = 1 can be hit
    value, _ = evaluate(S - 1, S - fmpq(1, 2), np.array([0.0, 1.0]), fmpq(1))
    assert value[0] == 0 and value[1] != 0
    assert evaluate(S, S - 1, np.array([0.0]), fmpq(1, 7))[0][0] == math.inf
    assert list(evaluate(polynomial([]), S, np.array([0.0, 1.0]))[0]) == [0, 0]


def test_almost_a_zero_is_not_a_zero():
    w = 3.0
    n = S**2 + 9 + fmpq(1, 10**250)
    assert evaluate(n, ONE, np.array([w]))[0][0] == 1e-250
    # the zero of s^2 + 2 is next to the double, not on it
    value, bound = evaluate(S**2 + 2, ONE, np.array([math.sqrt(2)]))
    exact = 2 - Fraction(math.sqrt(2)) ** 2
    assert value[0] == float(exact) and bound[0] > 0


def test_misuse_is_refused():
    with pytest.raises(ZeroDivisionError):
        evaluate(ONE, polynomial([]), np.array([1.0]))
    with pytest.raises(ZeroDivisionError):
        difference(ONE, polynomial([]), ONE, ONE, np.array([1.0]))
    with pytest.raises(ValueError, match="not finite"):
        evaluate(ONE, S, np.array([math.inf]))


def test_values_of_any_size():
    huge = fmpq(10) ** 400
    value, bound = evaluate(huge * ONE, S + 1, np.array([1.0]))
    assert value[0] == complex(math.inf, -math.inf) and bound[0] == math.inf
    value, bound = evaluate(ONE / huge, S + 1, np.array([1.0]))
    assert value[0] == 0 and 0 < bound[0] < 1e-322
    mantissa, exponent = evaluate_scaled(huge * ONE, S + 1, np.array([1.0, 1e-300, 1e300]))
    for w, m, e in zip([1.0, 1e-300, 1e300], mantissa, exponent, strict=True):
        x, y = on_axis(huge * ONE, S + 1, w)
        assert m.real == pytest.approx(float(x / Fraction(2) ** int(e)), rel=1e-15)
        assert m.imag == pytest.approx(float(y / Fraction(2) ** int(e)), rel=1e-15)
        assert 0.5 <= max(abs(m.real), abs(m.imag)) <= 1
    mantissa, exponent = evaluate_scaled(S, S - 1, np.array([0.0]))
    assert (mantissa[0], exponent[0]) == (0, 0)


@pytest.mark.skipif(not HARD.exists(), reason="shared/data/hard-inputs.json is absent")
def test_hard_inputs():
    compared = 0
    for case in json.loads(HARD.read_text())["cases"]:
        given_, oracle = case["input"], case["oracle"]
        if "den" not in given_ or "w" not in oracle:
            continue
        value, _ = evaluate(doubles(given_["num"]), doubles(given_["den"]), np.array(oracle["w"]))
        exact = np.array(oracle["response"]["re"]) + 1j * np.array(oracle["response"]["im"])
        assert np.all(np.abs(value - exact) <= 2.3e-16 * np.abs(exact)), case["id"]
        compared += 1
    assert compared >= 5


def test_differences_far_below_the_rounding():
    w = np.array([0.0, 1.0, 10.0])
    moved = S + 1 + fmpq(1, 10**200)
    found = difference(ONE, S + 1, ONE, moved, w)
    expected = 1e-200 / (1 + w**2)
    assert found.value == pytest.approx(expected, rel=1e-14, abs=0)
    assert np.all(found.upper >= found.value) and found.upper == pytest.approx(expected, rel=1e-10, abs=0)
    assert found.reference == pytest.approx(1 / np.sqrt(1 + w**2), rel=1e-14)
    assert np.all(found.reference_lower <= found.reference)
    assert found.relative == pytest.approx(1e-200 / np.sqrt(1 + w**2), rel=1e-14, abs=0)
    assert np.all(found.relative_upper >= found.relative)


def test_differences_at_the_edges():
    w = np.array([0.0, 2.0])
    same = difference(S, S + 1, 2 * S, 2 * S + 2, w)
    assert list(same.value) == list(same.upper) == [0, 0] and list(same.relative) == [0, 0]
    # a zero of the first that the second lacks: infinite relative error
    found = difference(S**2 + 4, (S + 1) ** 2, S**2 + 4 + fmpq(1, 2**30), (S + 1) ** 2, w)
    assert found.relative[1] == found.relative_upper[1] == math.inf
    assert found.value[1] == pytest.approx(2.0**-30 / 5, rel=1e-14)
    # from nothing
    found = difference(polynomial([]), ONE, ONE, S + 1, w)
    assert list(found.relative) == [math.inf, math.inf] and list(found.reference) == [0, 0]
    # both sizes far below the range of doubles, the relative difference is not
    far = fmpq(1, 10**1000)
    found = difference(far * ONE, S + 1, far * 2 * ONE, S + 1, w)
    assert list(found.value) == [0, 0] and np.all(found.upper > 0)
    assert found.relative == pytest.approx([1, 1], rel=1e-12) and np.all(found.relative_upper >= 1)


def test_difference_on_the_circle():
    period = fmpq(1, 1000)
    w = np.array([0.0, 1.0, 3141.0])
    found = difference(S, S - fmpq(1, 2), S, S - fmpq(1, 2) - fmpq(1, 10**30), w, period)
    z = np.exp(1j * w / 1000)
    assert found.value == pytest.approx(1e-30 * np.abs(z / (z - 0.5) ** 2), rel=1e-12, abs=0)


def test_the_precision_is_restored_and_wilkinson_resolved():
    d = from_roots([(-k, 1) for k in range(1, 31)])
    w = np.logspace(-3, 4, 50)
    value, _ = evaluate(ONE, d, w)
    expected = np.prod([1 / (1j * w + k) for k in range(1, 31)], axis=0)
    assert np.all(np.abs(value - expected) <= 1e-14 * np.abs(expected))
    assert flint.ctx.prec == 53
