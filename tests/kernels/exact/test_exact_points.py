"""Exact values at complex points against the rational arithmetic of Python."""

from __future__ import annotations

import math
from fractions import Fraction
from typing import Any

import flint
import numpy as np
import pytest
from flint import fmpq, fmpq_poly
from hypothesis import given, settings
from hypothesis import strategies as st

from realize.kernels.exact.points import partial_fractions_at, products_at
from realize.kernels.trust import POINT_BUDGET, corrected

NUMBERS = st.integers(-9, 9)
POINTS = st.builds(complex, st.integers(-6, 6).map(lambda k: k / 2), st.integers(-6, 6).map(lambda k: k / 2))


def gauss(a: tuple[Fraction, Fraction], b: tuple[Fraction, Fraction]) -> tuple[Fraction, Fraction]:
    return a[0] * b[0] - a[1] * b[1], a[0] * b[1] + a[1] * b[0]


def horner(ascending: list[int], point: complex) -> tuple[Fraction, Fraction]:
    s, value = (Fraction(point.real), Fraction(point.imag)), (Fraction(0), Fraction(0))
    for c in reversed(ascending):
        value = gauss(value, s)
        value = value[0] + c, value[1]
    return value


@settings(max_examples=150, deadline=None)
@given(st.lists(NUMBERS, min_size=1, max_size=5), st.lists(NUMBERS, min_size=1, max_size=5), POINTS)
def test_quotients(above: list[int], below: list[int], point: complex) -> None:
    if not any(below):
        return
    value = complex(products_at(fmpq(1), [fmpq_poly(above)], [fmpq_poly(below)], np.array([point]))[0])
    top, bottom = horner(above, point), horner(below, point)
    size = bottom[0] ** 2 + bottom[1] ** 2
    if size:
        re, im = gauss(top, (bottom[0], -bottom[1]))
        wanted = complex(float(re / size), float(im / size))
        assert abs(value - wanted) <= 2**-51 * abs(wanted)
    elif top != (0, 0):
        assert math.isinf(value.real)
    else:
        # a common factor: the limit is the value of the reduced fraction
        near = products_at(fmpq(1), [fmpq_poly(above)], [fmpq_poly(below)], np.array([point + 1e-9]))[0]
        assert (math.isinf(value.real) and abs(near) > 1e3) or abs(value - near) <= 1e-4 * max(1.0, abs(near))


def test_factors_and_gain_beyond_doubles() -> None:
    s = np.array([1e200j, 3.0 + 1e-200j])
    values = products_at(fmpq(10) ** 500, [], [fmpq_poly([1, 1])] * 2, s)
    assert values[0].real == -1e100 and math.isinf(values[1].real)
    assert products_at(fmpq(0), [], [fmpq_poly([1, 1])], s).tolist() == [0, 0]
    assert flint.ctx.prec == 53


def test_deep_cancellation() -> None:
    n = fmpq_poly([1])
    for k in range(1, 31):
        n *= fmpq_poly([k, 1])
    point = -15.0 - 2.0**-45
    wanted = Fraction(1)
    for k in range(1, 31):
        wanted *= Fraction(point) + k
    assert products_at(fmpq(1), [n], [], np.array([complex(point)]))[0] == float(wanted)


def zero() -> tuple[fmpq, fmpq]:
    return fmpq(0), fmpq(0)


def test_partial_fractions_cancel_to_nothing() -> None:
    # 1/(s + 1) - 1/(s + 2) - 1/((s + 1)(s + 2)) is zero everywhere, by parts
    poles = [(fmpq(-1), fmpq(0)), (fmpq(-2), fmpq(0))]
    residues: Any = [[[(fmpq(1), fmpq(0)), zero()]], [[(fmpq(-1), fmpq(0)), (fmpq(1), fmpq(0))]]]
    direct = [[[fmpq(0), fmpq(0)]]]
    points = np.array([1e30j, -1.0, -2.0, 0.5])
    values = partial_fractions_at(poles, residues, [1, 1], direct, points)
    assert values[0, 0, 0].real == pytest.approx(-1e-60, rel=1e-15)
    assert math.isinf(values[1, 0, 0].real) and values[1, 0, 1] == 1.0
    assert math.isinf(values[2, 0, 1].real)
    balanced = partial_fractions_at(
        [*poles, (fmpq(-3), fmpq(0))],
        [[[(fmpq(k), fmpq(0))]] for k in (1, -2, 1)],
        [1, 1, 1],
        [[[fmpq(-1, 3)]]],
        np.array([0j, 1.0]),
    )
    assert balanced[0, 0, 0] == 0.0  # 1 - 1 + 1/3 - 1/3
    assert balanced[1, 0, 0].real == pytest.approx(0.5 - 2 / 3 + 0.25 - 1 / 3, rel=1e-13)


def test_the_worst_points_are_corrected_first() -> None:
    values, bound = np.zeros(4, dtype=complex), np.array([1e-14, 1e-3, np.inf, 1e-9])
    points = np.array([1.0, 2.0, 3.0, complex(np.nan, 0)])
    both = corrected(values, bound, points, 1.0, lambda s: s)
    assert both.tolist() == [0, 2, 3, 0]
    one = corrected(values, bound, points, POINT_BUDGET, lambda s: s)
    assert one.tolist() == [0, 0, 3, 0]
