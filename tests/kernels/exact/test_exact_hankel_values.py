"""Hankel singular values in ball arithmetic against closed forms and against Gramians in high precision."""

from __future__ import annotations

import flint
import numpy as np
import pytest
from flint import arb, fmpq, fmpq_poly

from realize.kernels.exact.graphs import continuous
from realize.kernels.exact.hankel_values import NotStable, common_parts, hankel_values
from realize.kernels.exact.numbers import precision
from realize.kernels.exact.states import transfer_matrix
from realize.testing.gramians import gramian_product, misplaced, rational

S = fmpq_poly([0, 1])


def fractions_of(A, B, C):
    A, B, C = rational(A), rational(B), rational(C)
    numerators, d = transfer_matrix(A, B, C, [[fmpq(0)] * len(B[0]) for _ in C])
    return [[(n, d) for n in row] for row in numerators]


def doubles(found):
    values = [float(ball.mid()) for ball in found.balls]
    with precision(256):
        errors = [
            float((ball - arb(value)).abs_upper()) * (1 + 1e-12)
            for ball, value in zip(found.balls, values, strict=True)
        ]
    return values, errors


def ladder(n):
    """Denominator of n equal RC sections: voltage over the last capacitor from the source."""
    voltage, current = fmpq_poly([1]), fmpq_poly([])
    for _ in range(n):
        current = current + S * voltage
        voltage = voltage + current
    return [[(fmpq_poly([1]), voltage)]]


def ladder_states(n):
    A = -2 * np.eye(n) + np.diag(np.ones(n - 1), 1) + np.diag(np.ones(n - 1), -1)
    A[-1, -1] = -1
    return A, np.eye(n)[:, :1], np.eye(n)[-1:]


def modes(rng, count, damping, inputs=1, outputs=1):
    w = 10 ** rng.uniform(0, 2, count)
    A = np.zeros((2 * count, 2 * count))
    for k in range(count):
        A[2 * k : 2 * k + 2, 2 * k : 2 * k + 2] = [[0, 1], [-(w[k] ** 2), -2 * damping * w[k]]]
    B, C = np.zeros((2 * count, inputs)), np.zeros((outputs, 2 * count))
    B[1::2], C[:, ::2] = rng.standard_normal((count, inputs)), rng.standard_normal((outputs, count))
    return A, B, C


def dense(rng, n, inputs=1, outputs=1):
    A = rng.standard_normal((n, n))
    A -= (np.linalg.eigvals(A).real.max() + 0.3) * np.eye(n)
    return A, rng.standard_normal((n, inputs)), rng.standard_normal((outputs, n))


def test_first_order_lag_and_double_pole_have_closed_forms():
    (one,) = hankel_values([[(fmpq_poly([3]), fmpq_poly([4, 2]))]], 1).balls
    assert one.contains(arb(fmpq(3, 8)))
    first, second = hankel_values([[(fmpq_poly([1]), (S + 1) ** 2)]], 2).balls
    with precision(128):
        root = arb(2).sqrt()
        assert first.contains((1 + root) / 4) and second.contains((root - 1) / 4)


def test_all_values_of_an_all_pass_are_one():
    d = fmpq_poly([12, 6, 1]) * fmpq_poly([5, 1]) * fmpq_poly([101, 2, 1])
    mirrored = fmpq_poly([c if k % 2 == 0 else -c for k, c in enumerate(d.coeffs())])
    found = hankel_values([[(mirrored, d)]], 5)
    assert len(found.balls) == 5 and all(ball.contains(1) for ball in found.balls)
    assert found.relative < 1e-13


@pytest.mark.parametrize("n", [5, 12, 24])
def test_ladder_against_high_precision_gramians(n):
    found = hankel_values(ladder(n), n)
    values, errors = doubles(found)
    assert found.relative < 1e-13
    A, B, C = ladder_states(n)
    square = gramian_product(rational(A), rational(B), rational(C), 1000)
    assert misplaced(square, values, errors, 1000, range(0, n, 4)) == []
    # the check can fail
    assert misplaced(square, [v * (1 + 1e-12) for v in values], errors, 1000, [n - 1]) == [n - 1]


def test_sixty_sections_keep_their_digits():
    found = hankel_values(ladder(60), 60)
    assert found.relative < 1e-13
    assert 1e-72 < float(found.balls[-1].mid()) < 1e-70
    sizes = [float(ball.mid()) for ball in found.balls]
    assert sizes == sorted(sizes, reverse=True) and len(sizes) == 60


@pytest.mark.parametrize(
    "make",
    [
        lambda rng: modes(rng, 6, 1e-3),
        lambda rng: modes(rng, 5, 1e-9, 2, 2),
        lambda rng: dense(rng, 12),
        lambda rng: dense(rng, 8, 2, 3),
        lambda rng: dense(rng, 8, 3, 1),
        lambda rng: (np.diag(-(10 ** rng.uniform(-4, 4, 8))), rng.standard_normal((8, 1)), rng.standard_normal((1, 8))),
        # a triple pole, coupled and seen in two channels
        lambda rng: (-np.eye(3) + np.diag([1.0, 1.0], 1), rng.standard_normal((3, 2)), rng.standard_normal((2, 3))),
    ],
)
def test_states_against_high_precision_gramians(make):
    A, B, C = make(np.random.default_rng(5))
    found = hankel_values(fractions_of(A, B, C), A.shape[0])
    values, errors = doubles(found)
    assert found.relative < 1e-13
    square = gramian_product(rational(A), rational(B), rational(C), 700)
    assert misplaced(square, values, errors, 700) == []


def test_sampled_against_high_precision_gramians():
    A, B, C = dense(np.random.default_rng(9), 7, 2, 2)
    A /= 1.05 * np.abs(np.linalg.eigvals(A)).max()
    found = hankel_values(continuous(fractions_of(A, B, C)), 7)
    values, errors = doubles(found)
    square = gramian_product(rational(A), rational(B), rational(C), 700, sampled=True)
    assert misplaced(square, values, errors, 700) == []


def test_poles_at_the_origin_of_z_have_markov_parameters_for_values():
    # h = 1, 2 at lags 1, 2: singular values of [[1, 2], [2, 0]]
    found = hankel_values(continuous([[(fmpq_poly([2, 1]), fmpq_poly([0, 0, 1]))]]), 2)
    with precision(128):
        root = arb(17).sqrt()
        assert found.balls[0].contains((root + 1) / 2) and found.balls[1].contains((root - 1) / 2)


def test_nearly_cancelling_pair_is_resolved_far_below_rounding():
    gap = fmpq(1, 2**80)
    n, d = S + 1 + gap, (S + 1) * (S + 2)
    found = hankel_values([[(n, d)]], 2)
    with precision(256):
        r1, r2 = arb(gap), arb(1 - gap)
        # residues times the determinant of the Cauchy matrix 1 / (p_i + p_j) is the product of the values
        product = abs(r1 * r2) * (arb(1) / 8 - arb(1) / 9)
        assert (found.balls[0] * found.balls[1]).overlaps(product)
    assert found.relative < 1e-13


def test_hidden_part_of_a_matrix_is_left_out():
    # [[1, 1], [1, 1]] / (s + 1): order 1, value 2 / 2
    one = (fmpq_poly([1]), S + 1)
    found = hankel_values([[one, one], [one, one]], 1)
    assert len(found.balls) == 1 and found.balls[0].contains(1)
    # an order that is too large is never believed
    assert hankel_values([[one, one], [one, one]], 2, most_bits=600) is None


def test_order_that_is_too_small_is_noticed():
    assert hankel_values([[(fmpq_poly([1]), (S + 1) * (S + 3))]], 1, most_bits=600) is None


def test_far_units_and_time_scales():
    d = (S + fmpq(1, 10**300)) * (S + 1)
    found = hankel_values([[(fmpq_poly([1]), d)]], 2)
    assert found.relative < 1e-13
    # 10^300 (1/(s + 1e-300) - 1/(s + 1)) to 300 digits: residues over twice the poles
    assert abs(float((found.balls[0] / arb(10) ** 300).mid()) * 2 - 1) < 1e-13
    assert abs(float(found.balls[1].mid()) - 0.5) < 1e-13


def test_not_stable_is_refused():
    for d in (S * S + 1, S, (S - 1) * (S + 2), (S + 1) * (S * S - S + 4)):
        with pytest.raises(NotStable):
            hankel_values([[(fmpq_poly([1]), d)]], d.degree())


def test_nothing_and_order_zero():
    assert hankel_values([[(fmpq_poly([]), fmpq_poly([1]))]], 0).balls == []
    assert common_parts([[(fmpq_poly([5, 3]), fmpq_poly([2]))]])[1] == fmpq_poly([1])


def test_precision_is_restored():
    before = flint.ctx.prec
    hankel_values(ladder(5), 5)
    assert flint.ctx.prec == before
