"""Companion, controllability, observability, multi-input companion and Jordan form against rational arithmetic."""

from __future__ import annotations

from collections.abc import Callable
from fractions import Fraction
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import realize
from realize.errors import Refused
from realize.forms.coordinates import NoTransform, Setting
from realize.forms.registry import TABLE
from realize.models import StateSpace, TimeBase
from realize.schema import STRUCTURED

Rational = list[list[Fraction]]
ONE_INPUT = ("controllable-companion", "controllability", "multi-input-companion")
ONE_OUTPUT = ("observable-companion", "observability")


def rational(matrix: Any) -> Rational:
    return [[Fraction(x) for x in row] for row in np.asarray(matrix, dtype=float).tolist()]


def times(left: Rational, right: Rational) -> Rational:
    return [
        [sum((a * b for a, b in zip(row, column, strict=True)), Fraction(0)) for column in zip(*right, strict=True)]
        for row in left
    ]


def apply(form: str, A: Any, B: Any, C: Any, D: Any = None, **setting: Any) -> Any:
    A, B, C = (np.asarray(x, dtype=float) for x in (A, B, C))
    D = np.zeros((C.shape[0], B.shape[1])) if D is None else np.asarray(D, dtype=float)
    return TABLE[form].apply(A, B, C, D, Setting(**setting))


def integers(n: int, m: int, p: int, seed: int = 0) -> tuple[Any, Any, Any]:
    rng = np.random.default_rng(100 * n + 10 * m + p + seed)
    return rng.integers(-3, 4, (n, n)), rng.integers(-2, 3, (n, m)), rng.integers(-2, 3, (p, n))


def shears(n: int, seed: int) -> tuple[Any, Any]:
    """An integer matrix and its integer inverse."""
    rng = np.random.default_rng(seed)
    M, inverse = np.eye(n), np.eye(n)
    for _ in range(3 * n):
        i, j = rng.choice(n, 2, replace=False)
        step = float(rng.integers(-1, 2))
        M[i] += step * M[j]
        inverse[:, j] -= step * inverse[:, i]
    assert np.array_equal(M @ inverse, np.eye(n))
    return M, inverse


@pytest.mark.parametrize("n", [1, 2, 5, 8])
@pytest.mark.parametrize("form", [*ONE_INPUT, *ONE_OUTPUT])
def test_entries_are_the_exact_ones_rounded_once(form: str, n: int) -> None:
    """T is formed here anew, in Python's fractions: A T = T A_new to the last bit for integers."""
    A, B, C = integers(n, 1, 2) if form in ONE_INPUT else integers(n, 2, 1)
    new = apply(form, A, B, C)
    b = rational(B) if form in ONE_INPUT else [list(row) for row in zip(*rational(C), strict=True)]
    a = rational(A) if form in ONE_INPUT else [list(row) for row in zip(*rational(A), strict=True)]
    chain = [b]
    while len(chain) < n:
        chain.append(times(a, chain[-1]))
    a_new, b_new, T = (new.A, new.B, new.transform) if form in ONE_INPUT else (new.A.T, new.C.T, new.back.T)
    if form in ("controllability", "observability"):
        # integers of this size are doubles: the transform is the Krylov matrix itself
        expected = [[float(v[i][0]) for v in chain] for i in range(n)]
        assert np.array_equal(T, expected)
        assert np.array_equal(a_new[:, :-1], np.eye(n)[:, 1:])
    else:
        assert np.array_equal(a_new[1:], np.eye(n)[:-1])
    assert np.array_equal(b_new[:, 0], np.eye(n)[0])
    assert times(a, rational(T)) == times(rational(T), rational(a_new)), "integers: nothing is rounded at all"
    product = np.array(times(rational(new.transform), rational(new.back)), dtype=float)
    assert np.allclose(product, np.eye(n), atol=1e-12 * new.condition)


def test_markov_parameters_stand_in_the_form() -> None:
    A, B, C = integers(6, 1, 3)
    new = apply("controllability", A, B, C)
    assert np.array_equal(new.C, np.hstack([C @ np.linalg.matrix_power(A, k) @ B for k in range(6)]))
    A, B, C = integers(6, 3, 1)
    new = apply("observability", A, B, C)
    assert np.array_equal(new.B, np.vstack([C @ np.linalg.matrix_power(A, k) @ B for k in range(6)]))


@pytest.mark.parametrize(("n", "m", "expected"), [(7, 3, [3, 2, 2]), (6, 2, [3, 3]), (5, 4, [2, 1, 1, 1])])
def test_generic_structure_indices(n: int, m: int, expected: list[int]) -> None:
    rng = np.random.default_rng(n)
    new = apply("multi-input-companion", rng.standard_normal((n, n)), rng.standard_normal((n, m)), np.eye(n))
    assert new.details["controllability_indices"] == expected
    first = np.cumsum([0, *expected[:-1]])
    others = np.setdiff1d(np.arange(n), first)
    assert np.array_equal(new.A[others], np.eye(n)[others - 1]) and not np.any(new.B[others])
    assert np.array_equal(np.triu(new.B[first]), new.B[first]) and np.array_equal(
        np.diag(new.B[first][:, : len(first)]), np.ones(m)
    )


def test_indices_of_a_plant_that_was_made_from_them() -> None:
    """Chains of 4, 0, 1 and 3 states behind feedback and a change of coordinates keep their lengths."""
    lengths = [4, 0, 1, 3]
    n, rng = 8, np.random.default_rng(4)
    A, B = np.zeros((n, n)), np.zeros((n, 4))
    end = 0
    for j, k in enumerate(lengths):
        A[end : end + k, end : end + k] = np.eye(k, k=1)
        end += k
        if k:
            B[end - 1, j] = 1
    # an input without a chain of its own acts through the others
    B[:, 1] = B[:, 0] + 2 * B[:, 3]
    order = [0, 3, 1, 2]
    B = B[:, order]
    A = A + B @ rng.integers(-2, 3, (4, n))
    M, inverse = shears(n, 1)
    plant = StateSpace(A=M @ A @ inverse, B=M @ B, C=rng.integers(-2, 3, (2, n)) @ inverse)
    done = realize.convert(plant, "state-space", form="multi-input-companion").require()
    assert done.receipt.details["coordinates"]["controllability_indices"] == [4, 3, 0, 1]


def test_one_input_gives_the_controllable_companion_form() -> None:
    A, B, C = integers(6, 1, 2)
    one, two = apply("controllable-companion", A, B, C), apply("multi-input-companion", A, B, C)
    for name in ("A", "B", "C", "D", "transform", "back"):
        assert np.array_equal(getattr(one, name), getattr(two, name))


def test_decimals_count_as_typed() -> None:
    """0.1, 0.2 and 0.3 = 0.1 + 0.2 only as decimals: the uncontrollable mode is there exactly, or not at all."""
    matrices: dict[str, Any] = {"A": [[-0.1, 0.0], [0.0, -0.3]], "B": [[1.0], [1.0]], "C": [[1.0, 1.0]]}
    plant = StateSpace(**matrices, decimals={"A": {(0, 0): "-0.1", (1, 1): "-0.3"}})
    new = realize.convert(plant, "state-space", form="controllability").model
    assert new.A[0, 1] == float(-Fraction("0.03")) and new.A[1, 1] == float(-Fraction("0.4"))
    doubles = realize.convert(StateSpace(**matrices), "state-space", form="controllability").model
    assert doubles.A[0, 1] == float(-Fraction(0.1) * Fraction(0.3))


@pytest.mark.parametrize("form", [*ONE_INPUT, *ONE_OUTPUT])
def test_without_a_transform_the_response_still_has_the_form(form: str) -> None:
    plant = StateSpace(A=np.diag([-1.0, -2.0]), B=[[1.0], [0.0]], C=[[1.0, 0.0]])
    with pytest.raises(NoTransform, match="1 of its 2 states"):
        apply(form, plant.A, plant.B, plant.C)
    done = realize.convert(plant, "state-space", form=form).require()
    record = done.receipt.details["coordinates"]
    assert record["condition"] is None and "transform" not in record and "there is no transform" in record["note"]
    assert any("without a transform" in note for note in done.receipt.cautions)
    assert np.allclose(done.model.evaluate([1j]), 1 / (1j + 1))


def test_a_ruined_form_is_refused_and_can_be_forced(run: Callable[..., Any], tmp_path: Path) -> None:
    poles = -np.geomspace(1.0, 3e3, 9)
    plant = StateSpace(A=np.diag(poles), B=np.ones((9, 1)), C=np.ones((1, 9)))
    file, out = tmp_path / "plant.json", tmp_path / "out.json"
    realize.write(plant, file)
    arguments = ["convert", file, "--to", "state-space", "--form", "controllability", "-o", out, "--no-second-opinion"]
    done = run(*arguments)
    assert done.status == 5 and "condition number" in done.err and "--form cascade" in done.err and not out.exists()
    done = run(*arguments, "--force", "--json")
    assert done.status == 4 and done.record["details"]["coordinates"]["condition"] > 1e12
    assert run(*arguments[:5], "cascade", *arguments[6:]).status == 0


def test_beyond_the_budget_it_says_so() -> None:
    rng = np.random.default_rng(0)
    n = 180
    plant = StateSpace(A=rng.standard_normal((n, n)) - 20 * np.eye(n), B=np.ones((n, 1)), C=np.ones((1, n)))
    for form in ("controllability", "jordan"):
        with pytest.raises(Refused, match=r"beyond what exact arithmetic can do"):
            realize.convert(plant, "state-space", form=form)


# --- Jordan ---------------------------------------------------------------------------------------------------------


def blocks_of(new: Any) -> list[tuple[float, float, int]]:
    return [(block["re"], block["im"], block["chain"]) for block in new.details["blocks"]]


def test_eight_times_one_eigenvalue_in_one_chain() -> None:
    J = -np.eye(8) + np.eye(8, k=1)
    M, inverse = shears(8, 3)
    rng = np.random.default_rng(1)
    B, C = rng.integers(-3, 4, (8, 2)), rng.integers(-3, 4, (3, 8))
    plant = StateSpace(A=M @ J @ inverse, B=B, C=C)
    done = realize.convert(plant, "state-space", form="jordan").require()
    assert np.array_equal(done.model.A, J)
    record = done.receipt.details["coordinates"]
    T = np.array(record["transform"])
    assert np.allclose(plant.A @ T, T @ J, rtol=0, atol=1e-14 * np.max(np.abs(plant.A)) * np.max(np.abs(T)) * 8)
    assert next(c for c in done.receipt.claims if c.name == "peak-error").value < 1e-13


@pytest.mark.parametrize("defective", [True, False])
def test_a_double_lightly_damped_pair(defective: bool) -> None:
    own = np.array([[-(2.0**-7), -100.0], [100.0, -(2.0**-7)]])
    A = np.kron(np.eye(2), own) + (np.kron(np.eye(2, k=1), np.eye(2)) if defective else 0)
    M, inverse = shears(4, 2)
    plant = StateSpace(
        A=M @ A @ inverse, B=[[1.0], [2.0], [0.0], [-1.0]], C=[[1.0, 0.0, 1.0, 1.0], [0.0, 1.0, 0.0, 3.0]]
    )
    done = realize.convert(plant, "state-space", form="jordan").require()
    assert np.array_equal(done.model.A, A)
    found = done.receipt.details["coordinates"]["blocks"]
    assert [block["chain"] for block in found] == ([2] if defective else [1, 1])
    assert found[0]["frequency"] == pytest.approx(100.0, rel=1e-6)
    assert found[0]["damping"] == pytest.approx(2.0**-7 / 100, rel=1e-6)


def test_chains_of_every_length_side_by_side() -> None:
    """Two irreducible factors of one multiplicity with different chains, and integrators."""
    sizes = [(-2.0, 3), (-2.0, 2), (-2.0, 1), (-3.0, 1), (0.0, 2), (-5.0, 3), (-5.0, 3)]
    n = sum(size for _, size in sizes)
    J = np.zeros((n, n))
    at = 0
    for value, size in sizes:
        J[at : at + size, at : at + size] = value * np.eye(size) + np.eye(size, k=1)
        at += size
    M, inverse = shears(n, 7)
    rng = np.random.default_rng(2)
    new = apply("jordan", M @ J @ inverse, rng.integers(-3, 4, (n, 2)), rng.integers(-3, 4, (2, n)))
    assert sorted(blocks_of(new)) == sorted((value, 0.0, size) for value, size in sizes)
    assert np.allclose(new.transform @ new.back, np.eye(n), atol=1e-12)


def test_irrational_roots_share_their_structure() -> None:
    """(s^2 + 2 s - 1)^2 with one chain, s^3 - 2 without: sqrt(2) and cube roots, each correctly rounded."""
    companion = np.array([[-2.0, 1.0], [1.0, 0.0]])
    A = np.zeros((7, 7))
    A[:4, :4] = np.kron(np.eye(2), companion) + np.kron(np.eye(2, k=1), np.eye(2))
    A[4:, 4:] = [[0, 0, 2], [1, 0, 0], [0, 1, 0]]
    M, inverse = shears(7, 5)
    new = apply("jordan", M @ A @ inverse, np.ones((7, 1)), np.ones((1, 7)))
    root, cube = 2**0.5, 2 ** (1 / 3)
    expected = [(root - 1, 0.0, 2), (-1 - root, 0.0, 2), (cube, 0.0, 1), (-cube / 2, cube * 3**0.5 / 2, 1)]
    for one, two in zip(sorted(blocks_of(new)), sorted(expected), strict=True):
        assert one == pytest.approx(two, rel=1e-14)


def test_decimals_keep_a_multiple_eigenvalue() -> None:
    """A = [[0.1, 1], [-0.01, 0.3]] has 0.2 twice as typed; its doubles have two different eigenvalues."""
    matrices: dict[str, Any] = {"A": [[-0.1, 1.0], [-0.01, -0.3]], "B": [[0.0], [1.0]], "C": [[1.0, 0.0]]}
    typed = StateSpace(**matrices, decimals={"A": {(0, 0): "-0.1", (1, 0): "-0.01", (1, 1): "-0.3"}})
    done = realize.convert(typed, "state-space", form="jordan").require()
    assert np.array_equal(done.model.A, [[-0.2, 1.0], [0.0, -0.2]])
    doubles = apply("jordan", **matrices)
    assert [block["chain"] for block in doubles.details["blocks"]] in ([1], [1, 1])
    assert doubles.condition > 1e7, "two eigenvectors that nearly coincide"


def test_hidden_modes_stay_and_the_signs_are_fixed() -> None:
    """An uncontrollable mode and an unobservable one have zero rows and columns, exactly."""
    M, inverse = shears(3, 9)
    A, B, C = np.diag([-1.0, -2.0, -3.0]), np.array([[-2.0], [0.0], [5.0]]), np.array([[3.0, 1.0, 0.0]])
    new = apply("jordan", M @ A @ inverse, M @ B, C @ inverse)
    assert np.array_equal(new.A, A)
    assert new.B[0] > 0 and new.B[1] == 0 and new.B[2] > 0
    assert new.C[0, 1] > 0 and new.C[0, 2] == 0 and new.C[0, 0] * new.B[0, 0] == -6


def test_range_of_doubles() -> None:
    for scale in (1e-250, 1e250):
        new = apply("jordan", np.array([[0.0, 1.0], [-2.0, -3.0]]) * scale, [[0.0], [scale]], [[1.0, 0.0]])
        assert np.allclose(np.diag(new.A) / scale, [-1.0, -2.0], rtol=1e-15)


@pytest.mark.parametrize("sampled", [False, True])
@pytest.mark.parametrize("form", ["jordan", "multi-input-companion"])
def test_several_channels_become_minimal(form: str, sampled: bool) -> None:
    """[1/(s+1), 1/(s+1); 1/(s+1), 1/(s+1)] has one state; [1/(s+1), 0; 0, 1/(s+1)] has two in chains of one."""
    time = TimeBase("sampled", period=0.1) if sampled else TimeBase()
    d = [1, -0.5] if sampled else [1, 1]
    full = realize.TransferFunction(numerator=[[[1], [1]], [[1], [1]]], denominator=[[d, d], [d, d]], time=time)
    assert realize.convert(full, "state-space", form=form).require().model.order == 1
    apart = realize.TransferFunction(numerator=[[[1], [0]], [[0], [1]]], denominator=[[d, [1]], [[1], d]], time=time)
    assert realize.convert(apart, "state-space", form=form).require().model.order == 2


def test_companions_stay_structured_and_dense_forms_do_not() -> None:
    assert "controllable-companion" in STRUCTURED
    assert not {"jordan", "controllability", "balanced"} & set(STRUCTURED)


@pytest.mark.parametrize("form", ["schur", "observability", "controllable-companion", "multi-input-companion"])
def test_poles_six_hundred_decades_apart_are_an_answer_or_a_refusal(form: str) -> None:
    plant = StateSpace(A=[[-1e300, 1.0], [0.0, -1e-300]], B=[[1.0], [1.0]], C=[[1.0, 1.0]])
    try:
        done = realize.convert(plant, "state-space", form=form)
    except Refused as refusal:
        assert "use --form" in str(refusal) or "scale" in str(refusal)
    else:
        assert all(np.all(np.isfinite(getattr(done.model, name))) for name in "ABCD")
