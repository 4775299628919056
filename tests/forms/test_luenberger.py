"""The multi-input companion form in doubles beside the exact one."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

import realize
from realize.errors import Refused
from realize.forms.controllability import multi_input_companion_form
from realize.forms.coordinates import Coordinates, Setting
from realize.forms.luenberger import luenberger_form
from realize.models import Offset, StateSpace


def plant(n: int, m: int, seed: int = 0) -> tuple[Any, Any, Any, Any]:
    rng = np.random.default_rng(seed)
    return 30 * rng.standard_normal((n, n)), rng.standard_normal((n, m)), rng.standard_normal((2, n)), np.zeros((2, m))


def agree(one: Coordinates, two: Coordinates) -> None:
    assert one.details["controllability_indices"] == two.details["controllability_indices"]
    for name in ("A", "B", "C", "transform", "back"):
        exact, double = getattr(one, name), getattr(two, name)
        size = np.max(np.abs(exact), axis=1, keepdims=True, initial=0.0)
        assert np.all(np.abs(exact - double) <= 1e-15 * one.condition * size + 1e-12 * size), name
    # what is zero or one by structure is so exactly
    assert np.array_equal(one.A == 0, two.A == 0) and np.array_equal(one.A == 1, two.A == 1)
    assert np.array_equal(one.B == 0, two.B == 0) and np.array_equal(one.B == 1, two.B == 1)


@pytest.mark.parametrize(("n", "m"), [(1, 1), (1, 2), (4, 2), (7, 2), (9, 4), (12, 3), (5, 7)])
def test_the_same_as_over_the_rationals(n: int, m: int) -> None:
    given = plant(n, m)
    agree(multi_input_companion_form(*given, Setting()), luenberger_form(*given, Setting()))


@pytest.mark.parametrize("n", [6, 9])
def test_dead_inputs_copies_and_units(n: int) -> None:
    """An input without effect and one that repeats another have no chain, whatever the units."""
    A, B, C, D = plant(n, 4, 5)
    B[:, 1], B[:, 2] = 0.0, 2 * B[:, 0]
    state, own = 2.0 ** np.arange(-3 * n, 3 * n, 6), 2.0 ** np.array([10, 0, -30, 5])
    scaled = 1024 * A * state / state[:, None], B * own / state[:, None], C * state, D
    one, two = multi_input_companion_form(*scaled, Setting()), luenberger_form(*scaled, Setting())
    assert one.details["controllability_indices"] == [(n + 1) // 2, 0, 0, n // 2]
    agree(one, two)


def test_uneven_chains() -> None:
    """Chains of 4, 1 and 2 states as they stand in a form with random coefficients, rotated."""
    rng = np.random.default_rng(7)
    A, B = np.zeros((7, 7)), np.zeros((7, 3))
    for start, length, j in ((0, 4, 0), (4, 1, 1), (5, 2, 2)):
        inner = np.arange(start + 1, start + length)
        A[inner, inner - 1], B[start, j] = 1.0, 1.0
        powers = np.concatenate([np.arange(size)[::-1] for size in (4, 1, 2)])
        A[start] = np.where(powers < length, rng.integers(1, 9, 7), 0.0)
    B[0, 1], B[0, 2] = 2.0, -3.0
    new = luenberger_form(A, B, np.eye(7), np.zeros((7, 3)), Setting())
    assert new.details["controllability_indices"] == [4, 1, 2]
    assert np.allclose(new.A, A, rtol=1e-13, atol=0) and np.allclose(new.B, B, rtol=1e-14, atol=0)
    Q = np.linalg.qr(rng.standard_normal((7, 7)))[0]
    new = luenberger_form(Q @ A @ Q.T, Q @ B, Q.T, np.zeros((7, 3)), Setting())
    assert np.allclose(new.A, A, rtol=1e-10, atol=0) and np.allclose(new.B, B, rtol=1e-12, atol=0)
    assert np.allclose(new.transform @ new.back, np.eye(7), atol=1e-12)


def test_uncontrollable_is_refused_with_words() -> None:
    A, B, C, D = plant(6, 2)
    A[4:, :4], B[4:] = 0.0, 0.0
    with pytest.raises(Refused, match=r"4 of its 6 states.*reachable-staircase"):
        luenberger_form(A, B, C, D, Setting())


def test_in_doubles_where_asked_for_with_the_operating_point() -> None:
    A, B, C, D = plant(8, 4)
    source = StateSpace(A=A, B=B, C=C, D=D, offset=Offset((0.0,) * 4, (0.0,) * 2, tuple(range(8))))
    done = realize.convert(source, "state-space", form="multi-input-companion", arithmetic="double").require()
    record = done.receipt.details["coordinates"]
    assert done.receipt.details["arithmetic"] == "double" and record["decided"] > 1e6
    assert done.receipt.method.startswith("double")
    assert done.model.offset is not None
    assert np.allclose(np.array(record["transform"]) @ done.model.offset.states, np.arange(8), atol=1e-11)


def test_beyond_the_budget_it_is_in_doubles() -> None:
    rng = np.random.default_rng(2)
    n, m = 96, 48
    given = rng.standard_normal((n, n)), rng.standard_normal((n, m)), rng.standard_normal((1, n)), np.zeros((1, m))
    new = luenberger_form(*given, Setting())
    assert new.details["controllability_indices"] == [2] * 48
    A, B = given[0], given[1]
    T, S = new.transform, new.back
    assert np.linalg.norm(A @ T - T @ new.A) <= 1e-12 * np.linalg.norm(A) * np.linalg.norm(T)
    assert np.linalg.norm(T @ new.B - B) <= 1e-12 * np.linalg.norm(T) * np.linalg.norm(new.B)
    assert np.linalg.norm(S @ T - np.eye(n)) <= 1e-13 * new.condition
