"""Balanced truncation: measured errors between the bounds, choice of order, units, kept poles, refusals."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.linalg import block_diag

from realize.errors import InputError, Refused, UsageError
from realize.kernels.norms import peak_gain
from realize.kernels.response import state_response
from realize.reduction import methods, reduce_states


def random_model(n, m, p, seed, sampled):
    rng = np.random.default_rng(seed)
    A = rng.standard_normal((n, n))
    poles = np.linalg.eigvals(A)
    A = A / np.abs(poles).max() * 0.95 if sampled else A - (poles.real.max() + 0.1) * np.eye(n)
    return A, rng.standard_normal((n, m)), rng.standard_normal((p, n)), rng.standard_normal((p, m))


def difference(model, small, sampled):
    A, B, C, D = model
    return peak_gain(
        block_diag(A, small.A),
        np.vstack([B, small.B]),
        np.hstack([C, -small.C]),
        D - small.D,
        sampled=sampled,
        tolerance=1e-8,
    ).value


PLAIN = np.diag([-1.0, -2.0, -5.0]), np.ones((3, 1)), np.ones((1, 3)), np.zeros((1, 1))


@settings(max_examples=40, deadline=None)
@given(
    n=st.integers(1, 10),
    shape=st.sampled_from([(1, 1), (1, 3), (3, 1), (2, 2)]),
    seed=st.integers(0, 10**6),
    sampled=st.booleans(),
    data=st.data(),
)
def test_every_method_keeps_its_claim(n, shape, seed, sampled, data):
    model = random_model(n, shape[1], shape[0], seed, sampled)
    order = data.draw(st.integers(0, n))
    for method in methods():
        if not method.claim:
            continue
        small = reduce_states(*model, sampled=sampled, order=order, method=method.name)
        error = difference(model, small, sampled)
        assert small.lower_bound * (1 - 1e-9) - small.rounding <= error <= small.bound
        assert small.bound == small.tail_bound + small.rounding
        assert small.order <= order or small.notes
        poles = np.linalg.eigvals(small.A)
        assert np.all(np.abs(poles) < 1) if sampled else np.all(poles.real < 0)
        if small.order:
            assert np.abs(small.left.T @ small.right - np.eye(small.order)).max() <= 1e-6
            if method.keeps_steady_state:
                continue  # no projection: what is left out acts on at rest
            assert np.abs(small.left.T @ model[0] @ small.right - small.A).max() <= 1e-6 * np.abs(model[0]).max()


@settings(max_examples=20, deadline=None)
@given(n=st.integers(1, 8), seed=st.integers(0, 10**6), sampled=st.booleans(), exponent=st.integers(-8, 0))
def test_smallest_order_for_an_error(n, seed, sampled, exponent):
    model = random_model(n, 1, 2, seed, sampled)
    largest = peak_gain(*model, sampled=sampled, tolerance=1e-10).value
    relative = reduce_states(*model, sampled=sampled, relative_error=10.0**exponent)
    absolute = reduce_states(*model, sampled=sampled, absolute_error=10.0**exponent * largest)
    assert relative.order == absolute.order
    assert relative.largest_gain == pytest.approx(largest, rel=1e-8)
    assert relative.bound <= 10.0**exponent * largest * (1 + 1e-8)
    assert difference(model, relative, sampled) <= relative.bound
    if relative.order:
        smaller = reduce_states(*model, sampled=sampled, order=relative.order - 1)
        if smaller.order < relative.order:
            assert smaller.tail_bound > 10.0**exponent * largest * (1 - 1e-8) or smaller.bound > relative.bound


@pytest.mark.parametrize(
    "powers",
    [(500, 0, 0), (-500, 0, 0), (0, 501, -500), (0, 500, 400), (0, -500, -480), (900, 900, 0), (-1000, -500, -500)],
)
def test_units(powers):
    time, inputs, outputs = powers
    A, B, C, D = PLAIN
    base = reduce_states(*PLAIN, sampled=False, order=2)
    small = reduce_states(np.ldexp(A, time), np.ldexp(B, inputs), np.ldexp(C, outputs), D, sampled=False, order=2)
    gain = inputs + outputs - time
    assert np.array_equal(np.ldexp(small.A, -time), base.A)
    assert np.array_equal(np.ldexp(small.hankel_singular_values, -gain), base.hankel_singular_values)
    assert math.ldexp(small.bound, -gain) == pytest.approx(base.bound, rel=1e-12)
    # balanced in these units too: rows of B and columns of C of one state have the same length
    if (inputs + outputs) % 2 == 0:
        assert np.allclose(np.abs(small.B[:, 0] / small.C[0]), np.abs(base.B[:, 0] / base.C[0]), rtol=1e-12)


def test_units_no_double_can_hold():
    A, B, C, D = PLAIN
    for scale in (1e300, 1e-300):
        root = math.sqrt(scale)
        assert reduce_states(A * scale, B * root, C * root, D, sampled=False, order=2).order == 2
    with pytest.raises(Refused):
        reduce_states(A * 1e-300, B * 1e150, C, D, sampled=False, order=2)


@pytest.mark.parametrize("states", [0, 2])
def test_nothing_to_reduce(states):
    model = -np.eye(states), np.zeros((states, 1)), np.ones((2, states)), np.array([[1.0], [2.0]])
    for option in ({"order": 0}, {"order": 5}, {"relative_error": 0.1}, {"absolute_error": 0.0}):
        small = reduce_states(*model, sampled=False, **option)
        assert small.order == 0 and np.array_equal(small.D, model[3]) and small.bound == 0
        assert small.B.shape == (0, 1) and small.C.shape == (2, 0)


def test_integrators_and_unstable_poles_are_kept():
    A = block_diag([[0.0, 1.0], [0.0, 0.0]], [[0.5]], np.diag([-1.0, -2.0, -3.0]))
    V = np.random.default_rng(0).standard_normal((6, 6))
    A = V @ A @ np.linalg.inv(V)
    rng = np.random.default_rng(1)
    model = A, rng.standard_normal((6, 2)), rng.standard_normal((1, 6)), np.zeros((1, 2))
    small = reduce_states(*model, sampled=False, order=5)
    assert small.kept_order == 3 and np.count_nonzero(small.kept_poles == 0) == 2
    assert any("kept as they are" in note for note in small.notes)
    w = np.geomspace(1e-2, 1e2, 200)
    one = state_response(*model, None, 1j * w)
    two = state_response(small.A, small.B, small.C, small.D, None, 1j * w)
    assert np.linalg.norm(one - two, 2, axis=(1, 2)).max() <= small.bound + 1e-9 * np.abs(one).max()
    with pytest.raises(Refused, match="ask for 3 or more"):
        reduce_states(*model, sampled=False, order=2)
    relative = reduce_states(*model, sampled=False, relative_error=0.01)
    assert any("stable part" in note for note in relative.notes)


def test_sampled_integrator_is_kept():
    small = reduce_states(np.diag([1.0, 0.5, -0.5]), *PLAIN[1:], sampled=True, order=2)
    assert small.kept_order == 1 and small.A[1, 1] == 1.0


def test_equal_values_are_not_divided():
    """(s^2 - 3 s + 3) / (s^2 + 3 s + 3) is all-pass: both values are 1."""
    model = np.array([[-3.0, -3.0], [1.0, 0.0]]), np.array([[1.0], [0.0]]), np.array([[-6.0, 0.0]]), np.ones((1, 1))
    small = reduce_states(*model, sampled=False, order=1)
    assert small.order == 2 and any("equal Hankel singular values" in note for note in small.notes)
    assert small.hankel_singular_values == pytest.approx([1, 1], rel=1e-13)
    constant = reduce_states(*model, sampled=False, order=0)
    assert constant.tail_bound == pytest.approx(2, rel=1e-13)
    assert difference(model, constant, False) == pytest.approx(2, rel=1e-6)


def test_nearly_uncontrollable_states_are_left_out():
    A, _, C, D = PLAIN
    small = reduce_states(A, np.array([[1.0], [1e-9], [1e-170]]), C, D, sampled=False, order=3)
    assert small.order == 2 and any("rounding" in note for note in small.notes)
    whole = reduce_states(*PLAIN, sampled=False, order=7)
    assert whole.order == 3 and whole.tail_bound == 0 and any("nothing was cut" in note for note in whole.notes)


def test_table_of_candidates():
    model = random_model(40, 1, 1, 4, False)
    small = reduce_states(*model, sampled=False, order=7)
    orders = [candidate.order for candidate in small.candidates]
    assert len(orders) <= 20 and orders == sorted(set(orders)) and {0, 7} <= set(orders)
    bounds = [candidate.bound for candidate in small.candidates]
    assert bounds == sorted(bounds, reverse=True) and small.tail_bound in bounds


def test_errors_in_the_table_where_they_are_cheap_or_choose_the_order():
    few, many = random_model(30, 1, 1, 4, False), random_model(110, 1, 1, 4, False)
    small = reduce_states(*few, sampled=False, order=7)
    assert all(one.error is not None and one.error <= one.bound + small.rounding for one in small.candidates)
    large = reduce_states(*many, sampled=False, order=7)
    assert all(one.error is None and one.bound is not None for one in large.candidates)
    looked = reduce_states(*many, sampled=False, absolute_error=large.bound, measured=True)
    assert all(one.error is not None for one in looked.candidates) and looked.order <= 7


def test_two_runs_agree_bit_by_bit():
    model = random_model(12, 2, 2, 9, False)
    kept = [matrix.copy() for matrix in model]
    one, two = (reduce_states(*model, sampled=False, order=5) for _ in range(2))
    assert all(np.array_equal(getattr(one, name), getattr(two, name)) for name in ("A", "B", "C", "D", "left", "right"))
    assert all(np.array_equal(a, b) for a, b in zip(model, kept, strict=True))


def test_refusals():
    A, B, C, D = PLAIN
    with pytest.raises(Refused, match="rounding"):
        reduce_states(*PLAIN, sampled=False, relative_error=1e-20)
    for options in ({}, {"order": 1, "relative_error": 0.1}, {"order": -1}, {"absolute_error": -1.0}):
        with pytest.raises(UsageError):
            reduce_states(*PLAIN, sampled=False, **options)
    with pytest.raises(UsageError, match="balanced-truncation"):
        reduce_states(*PLAIN, sampled=False, order=1, method="none of them")
    with pytest.raises(UsageError):
        reduce_states(*PLAIN, sampled=False, absolute_error=math.nan)
    with pytest.raises(InputError):
        reduce_states(A * np.nan, B, C, D, sampled=False, order=1)
    with pytest.raises(InputError):
        reduce_states(A, B[:2], C, D, sampled=False, order=1)


def test_methods_name_their_sources():
    names = [method.name for method in methods()]
    assert "balanced-truncation" in names and len(set(names)) == len(names)
    assert all(method.source and method.says for method in methods())
