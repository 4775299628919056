"""Suprema of exact curves: peaks that no sample sees, levels that are refuted, angles and norms from polynomials."""

from __future__ import annotations

import math

import numpy as np
import pytest
from flint import fmpq, fmpq_poly

from realize.kernels.exact.graphs import angles, gain_squares, minors_of
from realize.kernels.exact.positivity import Counterexample, examined, positive
from realize.kernels.exact.squared_norms import hankel_norm, hankel_polynomial, squared_h2
from realize.kernels.exact.suprema import Curve, supremum


def poly(*c: float) -> fmpq_poly:
    """Highest power first."""
    return fmpq_poly([fmpq(*float(value).as_integer_ratio()) for value in reversed(c)])


def test_examined_names_a_place() -> None:
    p = poly(1.0, -6.0, 8.9999)  # (x - 3)^2 - 1e-4
    found = examined(p, fmpq(0), None)
    assert isinstance(found, Counterexample) and found.x is not None and p(found.x) <= 0
    assert examined(poly(1.0, -6.0, 9.0001), fmpq(0), None) is True
    assert examined(p, fmpq(4), None) is True and examined(p, fmpq(0), fmpq(2)) is True
    assert isinstance(examined(poly(-1.0, 1e9), fmpq(0), None), Counterexample)
    assert examined(poly(1.0, -6.0, 9.0001), fmpq(0), None, most=2) is None
    assert not positive(p, fmpq(0), None)


class Blind(Curve):
    """A curve that does not say where to look."""

    def seeds(self) -> list[float]:
        return []


def test_a_peak_that_no_sample_sees() -> None:
    """Twelve light resonances; without seeds the refuted levels alone lead to the largest."""
    light = [(k, 1e-5 * (1 + (7 * k) % 11)) for k in range(1, 13)]
    d, n = fmpq_poly([1]), fmpq_poly([0])
    for k, damping in light:
        factor = poly(1.0, 2 * damping * k, float(k * k))
        n, d = n * factor + d * (k * k), d * factor
    squares = gain_squares(minors_of([[(n, d)]]))
    seeing, blind = supremum(Curve(squares)), supremum(Blind(squares))
    for found in (seeing, blind):
        assert found.bound is not None and found.square is not None
        assert 0 < float(found.bound / found.square - 1) < 1e-11
    assert blind.square is not None and seeing.square is not None
    assert float(blind.square / seeing.square) == pytest.approx(1.0, rel=1e-9)
    # the lightest one alone would have 1 / (2 zeta)
    assert math.sqrt(float(seeing.square)) == pytest.approx(1 / (2 * min(z for _, z in light)), rel=1e-2)


def test_intervals_bound_what_is_looked_at() -> None:
    squares = gain_squares(minors_of([[(poly(1.0), poly(1.0, 1.0))]]))
    found = supremum(Curve(squares), [(fmpq(3), fmpq(8)), (fmpq(99), None)])
    assert found.square is not None and float(found.square) == 0.25 and found.x == 3


def test_all_singular_values_are_below() -> None:
    """Between two equal singular values the polynomial is positive again: the level must still be refused."""
    one = (poly(4.0), poly(1.0, 1.0))
    curve = Curve(gain_squares(minors_of([[one, (poly(0.0), poly(1.0))], [(poly(0.0), poly(1.0)), one]])))
    assert curve.level(fmpq(1))(fmpq(0)) > 0
    assert not curve.below(fmpq(0), fmpq(1)) and curve.below(fmpq(0), fmpq(17))
    found = supremum(curve)
    assert float(found.square) == pytest.approx(16.0, rel=1e-12) and found.bound is not None and found.bound > 16


def test_pole_polynomial_counts_common_poles_of_a_minor() -> None:
    """diag(1/(s+1), 1/(s+1)) has order 2; a matrix of rank one with the same entries has order 1."""
    g, zero = (poly(1.0), poly(1.0, 1.0)), (poly(0.0), poly(1.0))
    assert minors_of([[g, zero], [zero, g]]).degree == 2
    assert minors_of([[g, g], [g, g]]).degree == 1
    assert minors_of([[(poly(1.0, 0.0), poly(1.0)), zero], [zero, g]]).degree == 2


def test_the_closed_loop_polynomial() -> None:
    """1/(s - 1) with k = 3: s + 2."""
    found = angles(minors_of([[(poly(1.0), poly(1.0, -1.0))]]), minors_of([[(poly(3.0), poly(1.0))]]), adjoint=False)
    assert found.degrees == (1, 0) and found.closed / found.closed[1] == poly(1.0, 2.0)


def test_h2_and_hankel_of_random_fractions() -> None:
    from scipy.linalg import solve_continuous_lyapunov
    from scipy.signal import tf2ss

    rng = np.random.default_rng(4)
    for n in range(1, 8):
        roots = -rng.uniform(0.2, 3, n) + 0j
        for k in range(0, n - 1, 2):
            roots[k : k + 2] = roots[k].real + 1j * rng.uniform(0.1, 4) * np.array([1, -1])
        den, num = np.poly(roots).real, rng.standard_normal(n)
        A, B, C, _ = tf2ss(num, den)
        P, Q = solve_continuous_lyapunov(A, -B @ B.T), solve_continuous_lyapunov(A.T, -C.T @ C)
        value = squared_h2([poly(*num)], poly(*den))
        assert value is not None and float(value) == pytest.approx((C @ P @ C.T).item(), rel=1e-7)
        largest = math.sqrt(np.abs(np.linalg.eigvals(P @ Q)).max())
        assert hankel_norm(poly(*num), poly(*den))[0] == pytest.approx(largest, rel=1e-6)
        assert hankel_polynomial(poly(*num), poly(*den)).degree() == n


@pytest.mark.parametrize("damping", [0.0, -1e-300, -1.0])
def test_the_recursion_knows_what_is_not_stable(damping: float) -> None:
    assert squared_h2([poly(1.0)], poly(1.0, damping, 1.0)) is None
    value = squared_h2([poly(1.0)], poly(1.0, 1e-300, 1.0))
    assert value is not None and float(value) == pytest.approx(5e299, rel=1e-14)
