"""Hessenberg, staircase and Kalman coordinates: exact zeros, dimensions, what the receipt says."""

from __future__ import annotations

from itertools import pairwise
from typing import Any

import numpy as np
import pytest

import realize
from realize.forms.coordinates import Setting
from realize.forms.registry import TABLE
from realize.models import StateSpace, TimeBase

SAMPLED = TimeBase("sampled", period=0.5)


def form(name: str, A: Any, B: Any, C: Any, period: float | None = None) -> Any:
    A, B, C = (np.array(matrix, dtype=float) for matrix in (A, B, C))
    return TABLE[name].apply(A, B, C, np.zeros((C.shape[0], B.shape[1])), Setting(period))


def rotated(rng: np.random.Generator, *matrices: np.ndarray) -> tuple[np.ndarray, ...]:
    """The model in other coordinates, rounded, in odd units."""
    A, B, C = matrices
    n = A.shape[0]
    T = np.linalg.qr(rng.standard_normal((n, n)))[0] @ np.diag(rng.uniform(0.5, 2.0, n))
    T = np.ldexp(T, rng.integers(-20, 21, n)[:, None])
    S = np.linalg.inv(T)
    inputs, outputs = np.ldexp(1.0, rng.integers(-20, 21, B.shape[1])), np.ldexp(1.0, rng.integers(-20, 21, C.shape[0]))
    return T @ A @ S, T @ B * inputs, C @ S * outputs[:, None]


def four_parts(
    sizes: tuple[int, int, int, int], m: int, p: int, seed: int
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """A model in Kalman's pattern with well separated poles; -1, -2, ... from the first part to the last."""
    rng = np.random.default_rng(seed)
    n = sum(sizes)
    part = np.repeat(np.arange(4), sizes)
    A = rng.uniform(0.5, 1.0, (n, n)) * rng.choice([-1.0, 1.0], (n, n))
    allowed = np.array([[1, 0, 1, 0], [1, 1, 1, 1], [0, 0, 1, 0], [0, 0, 1, 1]], dtype=bool)
    A[~allowed[part[:, None], part[None, :]]] = 0.0
    A[part[:, None] == part[None, :]] *= 0.3
    A[np.arange(n), np.arange(n)] = -np.arange(1.0, n + 1)
    B, C = rng.uniform(0.5, 1.0, (n, m)), rng.uniform(0.5, 1.0, (p, n))
    B[part >= 2], C[:, part % 2 == 1] = 0.0, 0.0
    return A, B, C


@pytest.mark.parametrize(("m", "p"), [(1, 1), (2, 3), (3, 1), (7, 7)])
def test_hessenberg_zeros(m: int, p: int) -> None:
    A, B, C = rotated(np.random.default_rng(m), *four_parts((3, 0, 2, 0), m, p, 1))
    new = form("controller-hessenberg", A, B, C)
    assert not np.any(np.tril(new.A, -m - 1)) and not np.any(np.tril(new.B, -1))
    assert new.details["subdiagonals"] == min(m, 4)
    new = form("observer-hessenberg", A, B, C)
    assert not np.any(np.tril(new.A, -p - 1))
    # C is zero left of the triangle in its last columns
    assert not np.any(new.C[:, ::-1][np.arange(p)[:, None] < np.arange(5)[None, :]])


@pytest.mark.parametrize("name", ["reachable-staircase", "observable-staircase"])
@pytest.mark.parametrize(("n", "hidden", "m"), [(5, 0, 1), (6, 2, 1), (6, 2, 2), (7, 3, 3), (1, 1, 2)])
def test_staircases_set_apart_what_is_hidden(name: str, n: int, hidden: int, m: int) -> None:
    reach = name.startswith("reach")
    sizes = (n - hidden, 0, hidden, 0) if reach else (n - hidden, hidden, 0, 0)
    A, B, C = rotated(np.random.default_rng(n), *four_parts(sizes, m, m, n))
    new = form(name, A, B, C)
    r = n - hidden
    H, b = (new.A, new.B) if reach else (new.A.T, new.C.T)
    assert not np.any(H[r:, :r])
    steps = new.details["sizes"]
    assert sum(steps) == r and all(one >= two for one, two in pairwise(steps))
    edges = np.cumsum([0, *steps])
    assert not np.any(b[edges[1] if steps else 0 :])
    for k in range(len(steps) - 1):
        assert not np.any(H[edges[k + 2] :, edges[k] : edges[k + 1]])
        assert np.linalg.matrix_rank(H[edges[k + 1] : edges[k + 2], edges[k] : edges[k + 1]]) == steps[k + 1]
    word = "reachable" if reach else "observable"
    assert new.details[word] == r and new.details[f"un{word}"] == hidden
    indices = new.details["controllability_indices" if reach else "observability_indices"]
    assert len(indices) == m and sum(indices) == r
    assert sum(1 if row["im"] == 0 else 2 for row in new.details["removed"]) == hidden
    truth = np.linalg.eigvals(four_parts(sizes, m, m, n)[0][r:, r:])
    assert np.allclose(
        sorted(row["re"] for row in new.details["removed"]), sorted(truth.real[truth.imag >= 0]), rtol=1e-9
    )
    assert all(row["why"] == f"un{word}" for row in new.details["removed"])
    _ambiguous_only_by_rounding(new, new.details["decisions"])
    if hidden and n > hidden and new.details["decided"] != "exactly":
        assert new.details["decisions"]["gap"] > 1e3


def _ambiguous_only_by_rounding(new: Any, *decisions: Any) -> None:
    """The arithmetic that made the plant left some roundings where zeros were: then, and only then, it is said."""
    doubtful = any((told["largest_dropped"] or 0) > 1 for told in decisions)
    assert doubtful == any(told["ambiguous"] for told in decisions) == bool(new.cautions)
    assert all((told["largest_dropped"] or 0) < 20 for told in decisions)


SIZES = [(2, 1, 1, 1), (3, 0, 0, 2), (1, 2, 2, 0), (2, 2, 0, 2), (0, 2, 2, 0), (0, 0, 0, 2), (4, 0, 0, 0), (1, 0, 3, 2)]


@pytest.mark.parametrize("sizes", SIZES, ids=str)
@pytest.mark.parametrize(("m", "p"), [(1, 1), (2, 3)])
def test_kalman_finds_the_four_parts(sizes: tuple[int, int, int, int], m: int, p: int) -> None:
    plain = four_parts(sizes, m, p, 3)
    A, B, C = rotated(np.random.default_rng(9), *plain)
    new = form("kalman", A, B, C)
    assert tuple(new.details["dimensions"].values()) == sizes
    part = np.repeat(np.arange(4), sizes)
    zero = np.array([[0, 1, 0, 1], [0, 0, 0, 0], [1, 1, 0, 1], [1, 1, 0, 0]], dtype=bool)
    assert not np.any(new.A[zero[part[:, None], part[None, :]]])
    assert not np.any(new.B[part >= 2]) and not np.any(new.C[:, part % 2 == 1])
    why = {1: "unobservable", 2: "unreachable", 3: "unreachable and unobservable"}
    for k, words in why.items():
        truth = np.linalg.eigvals(plain[0][np.ix_(part == k, part == k)])
        found = [row for row in new.details["removed"] if row["why"] == words]
        assert sum(1 if row["im"] == 0 else 2 for row in found) == sizes[k]
        for row in found:
            assert np.min(np.abs(truth - complex(row["re"], row["im"]))) <= 1e-8 * abs(complex(row["re"], row["im"]))
            assert row["frequency"] == pytest.approx(np.hypot(row["re"], row["im"]), rel=1e-9)
    assert new.condition >= 1
    _ambiguous_only_by_rounding(new, *new.details["decisions"].values())


def test_kalman_through_convert_keeps_the_response_and_says_what_is_hidden() -> None:
    """x2 is driven by nothing and seen through x1 and by itself; x3 is driven and unseen."""
    plant = StateSpace(
        A=[[-1.0, 1.0, 0.0], [0.0, -2.0, 0.0], [0.5, 0.0, -3.0]], B=[[1.0], [0.0], [1.0]], C=[[1.0, 2.0, 0.0]]
    )
    done = realize.convert(plant, "state-space", form="kalman").require()
    record = done.receipt.details["coordinates"]
    assert tuple(record["dimensions"].values()) == (1, 1, 1, 0)
    assert {(round(row["re"], 9), row["why"]) for row in record["removed"]} == {
        (-3.0, "unobservable"),
        (-2.0, "unreachable"),
    }
    assert done.receipt.claim("peak-error").value <= 1e-15
    # the first part alone has the response
    model = done.model
    assert model.C[0, 0] * model.B[0, 0] == pytest.approx(1.0) and model.A[0, 0] == pytest.approx(-1.0)


def test_a_mode_hidden_behind_a_reachable_one_takes_a_shear() -> None:
    """w (pole -2, not driven) is cancelled at the output by what it makes of x1: unseen as x1 = X w with X = -1e3."""
    plant = StateSpace(A=[[-1.0, 1e3], [0.0, -2.0]], B=[[1.0], [0.0]], C=[[1.0, 1e3]])
    new = form("kalman", plant.A, plant.B, plant.C)
    assert tuple(new.details["dimensions"].values()) == (1, 0, 0, 1)
    assert new.A[0, 1] == 0 and new.C[0, 1] == 0 and new.condition > 1.1


def test_sampled_modes_count_by_their_logarithm() -> None:
    new = form("kalman", np.diag([0.5, 0.25, 0.0]), [[1.0], [0.0], [0.0]], [[1.0, 1.0, 1.0]], period=0.5)
    first, second = sorted(new.details["removed"], key=lambda row: row["re"])
    assert first["frequency"] is None and first["damping"] == 1.0
    assert second["frequency"] == pytest.approx(np.log(4) / 0.5) and second["damping"] == 1.0


def test_a_decision_near_its_threshold_is_called_ambiguous() -> None:
    """The inputs are off by some hundred times 4 n eps from leaving the last mode alone."""
    A, B, C = rotated(np.random.default_rng(2), *four_parts((3, 0, 1, 0), 1, 1, 5))
    w = np.linalg.eig(A.T)
    away = w[1][:, [int(np.argmin(np.abs(w[0] + 4)))]].real
    B = B + away / np.abs(away) * np.abs(B) * 1e-12
    for name in ("reachable-staircase", "kalman"):
        new = form(name, A, B, C)
        told = new.details["decisions"]
        told = told["reachable"] if name == "kalman" else told
        assert told["ambiguous"] and "ambiguous" in new.cautions[0]
        assert told["smallest_kept"] < 1e3 and told["hidden"] == 0


def test_small_numbers_of_a_plant_are_no_rounding() -> None:
    """One entry of 1e-13 is all that joins the last states to the input: no rounding of it makes it zero."""
    A = np.diag([1.0, 1e-13, 1.0], -1) + np.diag([1.0, 1.0, 1.0], 1) - np.diag([1.0, 2.0, 3.0, 4.0])
    for name in ("reachable-staircase", "kalman"):
        new = form(name, A, np.eye(4)[:, :1], np.ones((1, 4)))
        assert not new.details["removed"] and new.details["decided"] == "exactly"


@pytest.mark.parametrize("n", [70, 120])
def test_modes_of_larger_plants_are_tried_all_at_once(n: int) -> None:
    """Hidden states behind chains of many steps, where no step sees the end of the reachable states."""
    rng = np.random.default_rng(n)
    A, B, C = rng.standard_normal((n, n)), rng.standard_normal((n, 2)), rng.standard_normal((1, n))
    part = np.repeat(np.arange(4), (n - 18, 7, 6, 5))
    pattern = np.array([[1, 0, 1, 0], [1, 1, 1, 1], [0, 0, 1, 0], [0, 0, 1, 1]], dtype=bool)
    A[~pattern[part[:, None], part[None, :]]] = 0.0
    B[part >= 2], C[:, part % 2 == 1] = 0.0, 0.0
    Q = np.linalg.qr(rng.standard_normal((n, n)))[0]
    A, B, C = Q @ A @ Q.T, Q @ B, C @ Q.T
    new = form("kalman", A, B, C)
    assert tuple(new.details["dimensions"].values()) == (n - 18, 7, 6, 5)
    assert not new.cautions
    assert new.details["cleared"] < 1e-13
    assert np.abs(new.transform @ new.A - A @ new.transform).max() < 1e-12 * np.abs(A).max() * new.condition
    assert form("reachable-staircase", A, B, C).details["unreachable"] == 11
    assert form("observable-staircase", A, B, C).details["unobservable"] == 12


def test_equal_poles_of_a_larger_plant_are_said_to_be_undecided() -> None:
    A = np.kron(np.eye(40), np.array([[-1.0, 1.0], [0.0, -1.0]]))
    rng = np.random.default_rng(1)
    T = np.linalg.qr(rng.standard_normal((80, 80)))[0]
    new = form("kalman", T @ A @ T.T, T @ np.ones((80, 1)), np.ones((1, 80)) @ T.T)
    assert any("ambiguous" in words for words in new.cautions)


def exact_dimensions(A: np.ndarray, B: np.ndarray, C: np.ndarray) -> tuple[int, ...]:
    """The four dimensions from exact ranks of the controllability and observability matrices."""
    import flint

    def exact(matrix: np.ndarray) -> Any:
        ratios = [flint.fmpq(*float(x).as_integer_ratio()) for x in matrix.reshape(-1)]
        return flint.fmpq_mat(*matrix.shape, ratios)

    n, m, p = A.shape[0], B.shape[1], C.shape[0]
    a, reach, see = exact(A), [exact(B)], [exact(C)]
    for _ in range(n - 1):
        reach.append(a * reach[-1])
        see.append(see[-1] * a)
    K = flint.fmpq_mat(n, n * m, [reach[j // m][i, j % m] for i in range(n) for j in range(n * m)])
    Ob = flint.fmpq_mat(n * p, n, [see[i // p][i % p, j] for i in range(n * p) for j in range(n)])
    r, o, both = K.rank(), Ob.rank(), (Ob * K).rank()
    return both, r - both, o - both, n - r - o + both


@pytest.mark.parametrize("seed", range(6))
def test_kalman_finds_what_shears_and_units_hide(seed: int) -> None:
    """Integers in Kalman's pattern, sheared by integers to a condition of 1e5 and given odd units: all of it exact."""
    rng = np.random.default_rng(seed)
    sizes = tuple(int(k) for k in rng.integers(1, 4, 4))
    m, p = (int(k) for k in rng.integers(1, 3, 2))
    A, B, C = (np.rint(3 * matrix) for matrix in four_parts(sizes, m, p, seed))  # type: ignore[arg-type]
    n = A.shape[0]
    T = np.eye(n)
    while np.linalg.cond(T) < 1e5:
        i, j = rng.permutation(n)[:2]
        factor = float(rng.integers(-2, 3))
        A[i] += factor * A[j]
        A[:, j] -= factor * A[:, i]
        B[i] += factor * B[j]
        C[:, j] -= factor * C[:, i]
        T[i] += factor * T[j]
    assert np.abs(A).max() < 2.0**50
    truth = exact_dimensions(A, B, C)
    units = np.ldexp(1.0, rng.integers(-20, 21, n))
    new = form("kalman", 1024.0 * A * units[:, None] / units, B * units[:, None], C / units)
    assert tuple(new.details["dimensions"].values()) == truth
    if truth != (n, 0, 0, 0):
        assert new.details["decided"] == "exactly"
        assert all(row["elementwise_change"] == 0 for row in new.details["removed"])
    assert all(told["largest_dropped"] == 0 for told in new.details["decisions"].values())


@pytest.mark.parametrize("seed", range(4))
def test_rounded_numbers_hide_the_same(seed: int) -> None:
    """Right, or called ambiguous."""
    rng = np.random.default_rng(seed)
    sizes = tuple(int(k) for k in rng.integers(1, 4, 4))
    A, B, C = four_parts(sizes, 2, 1, seed)  # type: ignore[arg-type]
    T = np.linalg.qr(rng.standard_normal((len(A), len(A))))[0] * 10.0 ** rng.uniform(-2, 2, len(A))
    new = form("kalman", T @ A @ np.linalg.inv(T), T @ B, C @ np.linalg.inv(T))
    found = tuple(new.details["dimensions"].values())
    assert found == sizes or any("ambiguous" in words for words in new.cautions)
