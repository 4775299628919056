"""Exact polynomials from roots, sections and partial fractions, by evaluation in complex rationals."""

from fractions import Fraction

import pytest
from flint import fmpq, fmpq_poly
from hypothesis import given, settings
from hypothesis import strategies as st

from realize.kernels.exact.polynomials import (
    bilinear_image,
    coefficients,
    even_odd,
    from_partial_fractions,
    from_roots,
    from_sections,
    in_square,
    polynomial,
    reduce_fraction,
    squarefree,
    stretched,
)

small = st.fractions(min_value=-9, max_value=9, max_denominator=7)


class Number:
    """Complex rational, written out."""

    def __init__(self, re, im=0):
        self.re, self.im = Fraction(re), Fraction(im)

    def __add__(self, other):
        return Number(self.re + other.re, self.im + other.im)

    def __sub__(self, other):
        return Number(self.re - other.re, self.im - other.im)

    def __mul__(self, other):
        return Number(self.re * other.re - self.im * other.im, self.re * other.im + self.im * other.re)

    def __truediv__(self, other):
        size = other.re**2 + other.im**2
        return self * Number(other.re / size, -other.im / size)

    def __eq__(self, other):
        return (self.re, self.im) == (other.re, other.im)


def value(p, z):
    total = Number(0)
    for c in coefficients(p):
        total = total * z + Number(Fraction(int(c.p), int(c.q)))
    return total


def ratio(x):
    return x.numerator, x.denominator


def test_order_of_coefficients_and_the_zero_polynomial():
    p = polynomial([(1, 1), (0, 1), (-1, 3)])
    assert p == fmpq_poly([fmpq(-1, 3), 0, 1])
    assert coefficients(p) == [1, 0, fmpq(-1, 3)]
    assert coefficients(polynomial([(0, 1), (2, 1)])) == [2]
    assert coefficients(polynomial([])) == [0]


def test_reduce_fraction_cancels_and_normalises():
    n, d = reduce_fraction(polynomial([2, 2]), polynomial([2, 6, 4]))
    assert (n, d) == (polynomial([1]), polynomial([1, 2]))
    assert reduce_fraction(polynomial([0]), polynomial([3, 1])) == (polynomial([]), polynomial([1]))
    with pytest.raises(ZeroDivisionError):
        reduce_fraction(polynomial([1]), polynomial([]))


def test_a_notch_off_by_1e_10_is_not_cancelled():
    close = fmpq(1) + fmpq(1, 10**10)
    n, d = reduce_fraction(polynomial([1, 0, 1]), polynomial([1, 0, close]))
    assert (n.degree(), d.degree()) == (2, 2)


def test_squarefree_gives_exact_multiplicities():
    s = polynomial([1, 0])
    p = 6 * s**3 * (s + 1) ** 2 * (s - 5) * (s + 7) * (s**2 + 2) ** 3
    found = squarefree(p)
    assert [m for _, m in found] == [1, 2, 3]
    assert found[2][0] == s * (s**2 + 2)
    assert squarefree(polynomial([5])) == []


@settings(deadline=None, max_examples=40)
@given(st.lists(st.tuples(small, small), max_size=5), small, small)
def test_from_roots_vanishes_at_its_roots_only(upper, x, y):
    roots = [(re, im) for re, im in upper] + [(re, -im) for re, im in upper if im]
    p = from_roots([(ratio(re), ratio(im)) for re, im in roots])
    assert p.degree() == len(roots) and p.leading_coefficient() == 1
    product = Number(1)
    for re, im in roots:
        product = product * (Number(x, y) - Number(re, im))
    assert value(p, Number(x, y)) == product


def test_from_roots_wants_conjugates():
    with pytest.raises(ValueError, match="root 0 lacks its conjugate"):
        from_roots([((1, 1), (1, 1))])
    with pytest.raises(ValueError, match="root 1 lacks its conjugate"):
        from_roots([((1, 1), (0, 1)), ((1, 1), (-1, 1))])


def test_sections_multiply_out():
    sections = [
        ([(0, 1), (1, 1), (2, 1)], [(1, 1), (3, 1), (2, 1)]),
        ([(0, 1), (0, 1), (1, 1)], [(0, 1), (1, 1), (1, 2)]),
    ]
    n, d = from_sections(sections, (3, 1))
    s = polynomial([1, 0])
    assert n == 3 * (s + 2)
    assert d == (s**2 + 3 * s + 2) * (s + fmpq(1, 2))


@settings(deadline=None, max_examples=40)
@given(
    st.lists(st.tuples(small, small, small, small, st.integers(1, 3)), max_size=4),
    st.lists(small, max_size=3),
)
def test_partial_fractions_add_up(terms, direct):
    poles, residues, powers = [], [], []
    for x, y, u, v, k in terms:
        if y:
            poles += [(ratio(x), ratio(y)), (ratio(x), ratio(-y))]
            residues += [(ratio(u), ratio(v)), (ratio(u), ratio(-v))]
            powers += [k, k]
        else:
            poles.append((ratio(x), (0, 1)))
            residues.append((ratio(u), (0, 1)))
            powers.append(k)
    n, d = from_partial_fractions(poles, residues, powers, [ratio(c) for c in direct])
    z = Number(Fraction(101, 11), Fraction(13, 17))
    total = value(polynomial([ratio(c) for c in direct]), z)
    for (x, y), (u, v), k in zip(poles, residues, powers, strict=True):
        term = Number(Fraction(*u), Fraction(*v))
        for _ in range(k):
            term = term / (z - Number(Fraction(*x), Fraction(*y)))
        total = total + term
    assert value(n, z) / value(d, z) == total
    assert n.gcd(d).degree() <= 0


def test_partial_fractions_want_conjugate_residues():
    with pytest.raises(ValueError, match="lacks its conjugate"):
        from_partial_fractions([((1, 1), (1, 1)), ((1, 1), (-1, 1))], [((1, 1), (1, 1))] * 2, [1, 1], [])


@settings(deadline=None, max_examples=40)
@given(st.lists(small, min_size=1, max_size=6), small.filter(lambda x: x != 1))
def test_identities_of_the_helpers(c, x):
    p = polynomial([ratio(entry) for entry in c])
    e, o = even_odd(p)
    s = polynomial([1, 0])
    assert in_square(e) + s * in_square(o) == p
    at = fmpq(x.numerator, x.denominator)
    n = len(c) - 1
    assert bilinear_image(p, n)(at) == p((1 + at) / (1 - at)) * (1 - at) ** n
    assert stretched(p, fmpq(3, 2))(at) == p(fmpq(3, 2) * at)
