"""Certified roots: hard inputs, closed forms, ties, axes, clusters, far scales."""

import json
import math
from itertools import pairwise
from pathlib import Path

import flint
import numpy as np
import pytest
from flint import acb, acb_poly, arb, fmpq
from hypothesis import given, settings
from hypothesis import strategies as st

from realize.kernels.exact.numbers import nearest, precision
from realize.kernels.exact.polynomials import from_roots, polynomial, quadratic, reduce_fraction
from realize.kernels.exact.roots import inside_left_half_plane, inside_unit_circle, roots, unit_circle

HARD = Path(__file__).parents[4] / "shared" / "data" / "hard-inputs.json"
S = polynomial([1, 0])


def doubles(values):
    return polynomial([float(x).as_integer_ratio() for x in values])


def check(p, found):
    """Hold the defining properties of the list."""
    assert sum(root.multiplicity for root in found) == p.degree()
    for k, root in enumerate(found):
        with precision(400):
            assert acb_poly(p)(root.ball).contains(0)
        assert root.ball.is_zero() or root.ball.rel_accuracy_bits() >= 100
        assert root.real == (root.ball.imag.is_zero())
        assert root.on_axis == root.ball.real.is_zero()
        if not root.real:
            partner = found[k + 1] if root.value.imag > 0 else found[k - 1]
            assert partner.value == root.value.conjugate() and partner.multiplicity == root.multiplicity
        if root.exact is not None:
            assert p(root.exact) == 0 and root.value == nearest(root.exact)
    for k, a in enumerate(found):
        for b in found[k + 1 :]:
            assert not a.ball.overlaps(b.ball)
    sizes = [abs(root.value) for root in found]
    assert all(a <= b * (1 + 1e-15) for a, b in pairwise(sizes))
    assert flint.ctx.prec == 53


@pytest.mark.skipif(not HARD.exists(), reason="shared/data/hard-inputs.json is absent")
def test_hard_inputs():
    compared = 0
    for case in json.loads(HARD.read_text())["cases"]:
        given_, oracle = case["input"], case["oracle"]
        if "den" not in given_:
            continue
        for key, which in (("zeros_re_im_mult", 0), ("poles_re_im_mult", 1)):
            if oracle.get(key) is None:
                continue
            found = roots(reduce_fraction(doubles(given_["num"]), doubles(given_["den"]))[which])
            mine = sorted((r.value.real, r.value.imag, r.multiplicity) for r in found)
            assert mine == sorted(tuple(row) for row in oracle[key]), case["id"]
            compared += 1
    assert compared >= 10


def test_degree_zero_and_the_zero_polynomial():
    assert roots(polynomial([5])) == []
    with pytest.raises(ValueError, match="zero polynomial"):
        roots(polynomial([]))
    with pytest.raises(ValueError, match="zero polynomial"):
        inside_unit_circle(polynomial([]))
    assert inside_left_half_plane(polynomial([5])) == inside_unit_circle(polynomial([5])) == 0


def test_multiplicities_axis_and_rational_roots():
    p = S**3 * (S**2 + 4) ** 2 * (S**2 - 2) * (3 * S + 1) * (S**2 + S + 1)
    found = roots(p)
    check(p, found)
    assert [(r.value, r.multiplicity, r.on_axis, r.real, r.exact) for r in found] == [
        (0, 3, True, True, 0),
        (-1 / 3, 1, False, True, fmpq(-1, 3)),
        (complex(-0.5, math.sqrt(0.75)), 1, False, False, None),
        (complex(-0.5, -math.sqrt(0.75)), 1, False, False, None),
        (-math.sqrt(2), 1, False, True, None),
        (math.sqrt(2), 1, False, True, None),
        (2j, 2, True, False, None),
        (-2j, 2, True, False, None),
    ]
    assert inside_left_half_plane(p) == 4


def test_quadruples_are_not_taken_for_the_axis():
    # s^4 + 1 has only roots that come with their negatives, none on the axis
    found = roots(S**4 + 1)
    assert [r.on_axis for r in found] == [False] * 4
    half = math.sqrt(0.5)
    assert [r.value for r in found] == [
        complex(-half, half),
        complex(-half, -half),
        complex(half, half),
        complex(half, -half),
    ]
    assert inside_left_half_plane(S**4 + 1) == 2


@pytest.mark.parametrize("distance", [1, -1])
def test_a_damping_far_below_the_rounding_is_seen(distance):
    p = S**2 + fmpq(distance, 10**4000) * S + 1
    found = roots(p)
    assert [r.on_axis for r in found] == [False, False]
    assert found[0].value == 1j
    assert inside_left_half_plane(p) == (2 if distance > 0 else 0)
    assert found[0].scaled[0][1] < -13000


HALF = 1 + fmpq(1, 2**53)


@pytest.mark.parametrize(
    ("p", "value"),
    [
        (quadratic(HALF, fmpq(3)), 1 + 3j),
        (quadratic(HALF, fmpq(0)) + 3, complex(1, math.sqrt(3))),
        (quadratic(fmpq(1, 3), HALF), complex(1 / 3, 1)),
        (quadratic(fmpq(3), HALF) * (S**4 + S + 7), 3 + 1j),
        (S**2 + HALF**2, 1j),
        ((S - HALF) * (S**2 + 2), 1),
        ((S - HALF - fmpq(1, 2**52)) * (S**2 + 2), 1 + 2**-51),
        (quadratic(HALF + fmpq(1, 2**52), fmpq(0)) + 3, complex(1 + 2**-51, math.sqrt(3))),
        ((S**2 - 2 * S * fmpq(1, 3) + fmpq(1, 9) + HALF**2) * (S**2 + S + 5) ** 2, complex(1 / 3, 1)),
    ],
)
def test_exact_ties_round_half_to_even(p, value):
    found = roots(p)
    check(p, found)
    assert value in [r.value for r in found]


def test_just_beside_a_tie_is_no_tie():
    for side, expected in ((1, 1 + 2.0**-52), (-1, 1.0)):
        p = quadratic(HALF + fmpq(side, 2**700), fmpq(0)) + 3
        assert roots(p)[0].value.real == expected


def test_subnormal_and_overflowing_roots():
    tiny, huge = fmpq(1, 10**400), fmpq(10) ** 400
    found = roots((S + tiny) * (S - 1) * (S - huge))
    assert [r.value for r in found] == [0, 1, math.inf]
    assert found[2].scaled[0][1] == 1329 and 0.5 <= found[2].scaled[0][0] < 1
    half_smallest = 1 / fmpq(2) ** 1075
    assert roots(S - half_smallest)[0].value == 0.0
    assert roots(S - 3 * half_smallest)[0].value == 1e-323
    found = roots(S**2 + S * huge + 3 * huge**2)
    assert found[0].value == complex(-math.inf, math.inf)


@pytest.mark.parametrize("scale", [1e-300, 1e-150, 1e150, 1e300])
def test_far_units(scale):
    unit = fmpq(*scale.as_integer_ratio())
    p = (S**2 + S * unit + unit**2) * (S + unit)
    found = roots(p)
    assert found[0].value.real == -scale / 2 if not found[0].real else found[0].value == -scale
    assert {r.exact for r in found if r.real} == {-unit}
    wide = roots((S + fmpq(1, 10**300)) * (S + fmpq(10) ** 300) * (S**2 + S + 1))
    assert [r.value for r in wide if r.real] == [-1e-300, -1e300]


@pytest.mark.parametrize("n", [20, 30])
def test_wilkinson(n):
    p = from_roots([(k, 1) for k in range(1, n + 1)])
    assert [r.exact for r in roots(p)] == list(range(1, n + 1))
    # Wilkinson's perturbation of the second coefficient by 2^-23 sends roots off the axis
    moved = p - fmpq(1, 2**23) * S ** (n - 1)
    found = roots(moved)
    check(moved, found)
    if n == 20:
        # published: J. H. Wilkinson, Rounding Errors in Algebraic Processes, 1963 (from memory): 10 real, 5 pairs
        assert sum(r.real for r in found) == 10
        assert any(abs(r.value - (16.730737466 + 2.812624894j)) < 1e-8 for r in found)


def test_clusters():
    near = [fmpq(1), 1 + fmpq(1, 10**12), 1 + fmpq(2, 10**12)]
    p = from_roots(near) * quadratic(fmpq(1), fmpq(1, 10**12))
    found = roots(p)
    check(p, found)
    assert [r.exact for r in found if r.real] == near
    # the same five roots moved apart by a perturbation that leaves no multiplicity
    q = (S + 1) ** 5 + fmpq(1, 10**60)
    found = roots(q)
    check(q, found)
    assert all(abs(r.value + 1) <= 1.001e-12 for r in found) and len(found) == 5
    assert [r.multiplicity for r in roots((S + 1) ** 5)] == [5]


def test_balls_of_different_multiplicity_do_not_meet():
    p = (S**2 - 2) * (S**2 - 2 - fmpq(1, 10**60)) ** 2 * (S - 1) ** 3 * (S - 1 - fmpq(1, 10**70))
    found = roots(p)
    check(p, found)
    assert sorted(r.multiplicity for r in found) == [1, 1, 1, 2, 2, 3]


def test_twenty_equal_poles():
    found = roots((S + fmpq(1, 3)) ** 20)
    assert [(r.value, r.multiplicity, r.exact) for r in found] == [(-1 / 3, 20, fmpq(-1, 3))]


@settings(deadline=None, max_examples=40)
@given(st.lists(st.floats(-1e3, 1e3).filter(lambda x: x == 0 or abs(x) > 1e-300), min_size=2, max_size=12))
def test_random_polynomials(c):
    p = doubles(c)
    if p:
        check(p, roots(p))


@settings(deadline=None, max_examples=40)
@given(st.lists(st.tuples(st.integers(-6, 6), st.integers(0, 6)), min_size=1, max_size=6))
def test_counts_of_known_roots(upper):
    values = [(fmpq(x, 5), fmpq(y, 5)) for x, y in upper] + [(fmpq(x, 5), fmpq(-y, 5)) for x, y in upper if y]
    p = from_roots(values)
    assert inside_left_half_plane(p) == sum(x < 0 for x, _ in values)
    assert inside_unit_circle(p) == sum(x**2 + y**2 < 1 for x, y in values)
    found = roots(p)
    check(p, found)
    for root, flag in zip(found, unit_circle(p), strict=True):
        size = round(root.value.real * 5) ** 2 + round(root.value.imag * 5) ** 2
        assert flag == (size == 25)
    assert [r.on_axis for r in found] == [round(r.value.real * 5) == 0 for r in found]


def test_reciprocal_pairs_are_not_taken_for_the_circle():
    z = S
    p = (
        (z**2 - fmpq(5, 2) * z + 1)
        * (z**2 - fmpq(6, 5) * z + 1)
        * (z**4 + z**3 * fmpq(9, 2) + 8 * z**2 + z * fmpq(9, 2) + 1)
    )
    flags = {r.value: f for r, f in zip(roots(p), unit_circle(p), strict=True)}
    assert sum(flags.values()) == 2 and flags[0.6 + 0.8j] and flags[0.6 - 0.8j]


def test_more_bits_on_demand():
    for root in roots((S**2 - 2) * (S**2 + S + 3) * (S**4 + 1)):
        ball = root.at(1000)
        assert ball.rel_accuracy_bits() >= 1000
        assert ball.overlaps(root.ball)
    with precision(1100):
        assert roots(S**2 - 2)[1].at(1000).overlaps(acb(arb(2).sqrt()))


def test_order_one_hundred_is_usable():
    rng = np.random.default_rng(0)
    p = doubles(rng.standard_normal(101))
    found = roots(p)
    assert len(found) == 100
    check(p, found)
