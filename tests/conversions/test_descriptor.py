"""Descriptor models: counts, the smallest E, the polynomial part by itself, and what is refused."""

from __future__ import annotations

from collections.abc import Callable
from fractions import Fraction
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from realize.kernels.exact.descriptor import structure
from realize.models import Offset, Signal, StateSpace, TransferFunction
from realize.steps import convert, inspect

DATA = Path(__file__).parents[3] / "shared" / "data" / "models"
W = [0.05, 0.3, 1.0, 1.7, 5.0, 40.0]


def constrained(n: int, index: int, links: int = 1) -> StateSpace:
    """A chain of n masses, springs and dampers with rigid links: states positions, velocities, Lagrange multipliers.

    The link G q = 0 itself gives index 3, its derivative G q' = 0 index 2, its second derivative index 1.
    """
    K = 2.0 * np.eye(n) - np.eye(n, k=1) - np.eye(n, k=-1)
    D = 0.125 * K
    G = np.zeros((links, n))
    for k in range(links):
        G[k, k], G[k, n - 1 - k] = 1.0, -0.5
    zero = np.zeros((links, n))
    last = {
        1: [-G @ K, -G @ D, G @ G.T],
        2: [zero, G, np.zeros((links, links))],
        3: [G, zero, np.zeros((links, links))],
    }
    size = 2 * n + links
    E = np.diag([1.0] * (2 * n) + [0.0] * links)
    A = np.vstack(
        [
            np.hstack([np.zeros((n, n)), np.eye(n), np.zeros((n, links))]),
            np.hstack([-K, -D, G.T]),
            np.hstack(last[index]),
        ]
    )
    B = np.zeros((size, 1))
    B[n + 1] = 1.0
    C = np.zeros((2, size))
    C[0, 1] = C[1, 2 * n] = 1.0
    return StateSpace(A=A, B=B, C=C, E=E)


#: index -> (finite, infinite, impulsive) of n masses with k links
COUNTS = {
    1: lambda n, k: (2 * n, k, 0),
    2: lambda n, k: (2 * n - k, 2 * k, k),
    3: lambda n, k: (2 * n - 2 * k, 3 * k, 2 * k),
}


@pytest.mark.parametrize("index", [1, 2, 3])
@pytest.mark.parametrize(("n", "links"), [(3, 1), (5, 2), (12, 3)])
def test_mechanical_constraints(index: int, n: int, links: int, oracle: Any) -> None:
    source = constrained(n, index, links)
    found = inspect(source)["descriptor"]
    finite, infinite, impulsive = COUNTS[index](n, links)
    assert found == {
        "regular": True,
        "index": index,
        "finite": finite,
        "infinite": infinite,
        "impulsive": impulsive,
    }
    made = convert(source, "state-space")
    if index == 2:
        # the link may stand anywhere: a pole at the origin that nothing moves, which a rounding would not leave there
        assert made.model.E is not None and made.receipt.claim("peak-error").value == 0.0
        assert any("keeps its E" in text for text in made.receipt.cautions)
        return
    # forces act on the accelerations: nothing is improper, and no E is left
    assert made.model.E is None and made.model.order == finite
    assert oracle.error(source, made.model, W) < 1e-13
    assert not made.receipt.failed and made.receipt.claim("peak-error").holds
    assert made.receipt.details["E"]["inverted"]


def test_algebraic_states_leave_and_the_others_keep_their_names(oracle: Any) -> None:
    source = StateSpace(
        A=[[-1.0, 2.0, 0.0], [1.0, 4.0, 0.0], [0.0, 3.0, -5.0]],
        B=[[1.0], [2.0], [0.0]],
        C=[[1.0, 1.0, 1.0]],
        E=np.diag([2.0, 0.0, 1.0]),
        states=(Signal("charge", "C"), Signal("current", "A"), Signal("heat", "J")),
        offset=Offset(states=(1.0, 2.0, 3.0)),
    )
    made = convert(source, "state-space").model
    assert isinstance(made, StateSpace)
    assert [signal.name for signal in made.states] == ["charge", "heat"]
    assert made.offset == Offset(states=(1.0, 3.0))
    # x2 = -(x1 + 2 u) / 4
    assert made.A.tolist() == [[-0.75, 0.0], [-0.75, -5.0]] and made.B.tolist() == [[0.0], [-1.5]]
    assert made.C.tolist() == [[0.75, 1.0]] and made.D.tolist() == [[-0.5]] and made.E is None


#: E, whether it may be divided out
NONSINGULAR = {
    "diagonal over twelve decades": (np.diag([1e-6, 1.0, 1e6]), True),
    "full": (np.array([[2.0, 1.0, 0.0], [1.0, 3.0, 1.0], [0.0, 1.0, 2.0]]), True),
    "nearly singular": (np.array([[1.0, 1.0, 0.0], [1.0, 1.0 + 1e-10, 0.0], [0.0, 0.0, 1.0]]), False),
}


@pytest.mark.parametrize("name", NONSINGULAR)
def test_e_is_divided_out_only_where_that_is_harmless(name: str, oracle: Any) -> None:
    E, harmless = NONSINGULAR[name]
    source = StateSpace(
        A=[[-1.0, 0.5, 0.0], [0.5, -2.0, 0.25], [0.0, 0.25, -3.0]], B=[[1.0], [0.0], [1.0]], C=[[1.0, 0.0, 1.0]], E=E
    )
    made = convert(source, "state-space")
    assert (made.model.E is None) == harmless == made.receipt.details["E"]["inverted"]
    assert oracle.error(source, made.model, W) < (1e-14 if harmless else 1e-300)
    assert not made.receipt.failed
    said = made.receipt.details["E"]["condition"]
    assert said < 1e3 if harmless else said > 1e9
    assert any("condition number" in text or "divided out" in text for text in made.receipt.cautions)


def test_controller_with_ideal_derivative(oracle: Any) -> None:
    """5/s + 2 + 0.3 s: one integrator and a chain of two states for the derivative."""
    source = TransferFunction(numerator=[0.3, 2.0, 5.0], denominator=[1.0, 0.0])
    made = convert(source, "state-space")
    assert made.model.order == 3 and np.linalg.matrix_rank(made.model.E) == 2
    assert inspect(made)["descriptor"] == {"regular": True, "index": 2, "finite": 1, "infinite": 2, "impulsive": 1}
    assert inspect(made)["minimal_order"] == 2
    assert oracle.error(source, made.model, W) < 1e-16 and not made.receipt.failed
    again = convert(made, "state-space")
    assert again.model.order == 3 and oracle.error(source, again.model, W) < 1e-15


def test_the_smallest_block_for_a_polynomial_part(oracle: Any) -> None:
    """[s, s^2] needs three states (s^2 u2 + s u1 = s (u1 + s u2)); one chain for each input would have five."""
    given = TransferFunction(numerator=[[[1.0, 0.0], [1.0, 0.0, 0.0]]], denominator=[[[1.0], [1.0]]])
    wide = convert(given, "state-space", form="modal")
    assert wide.model.order == 6
    made = convert(wide, "state-space")
    assert made.model.order == 3
    assert inspect(made)["descriptor"] == {"regular": True, "index": 3, "finite": 0, "infinite": 3, "impulsive": 2}
    assert oracle.error(given, made.model, W) < 1e-16
    assert made.receipt.details["descriptor"]["polynomial_degree"] == 2


def mixed(seed: int) -> tuple[StateSpace, dict[str, int]]:
    """Finite poles and nilpotent blocks behind random integer transforms of determinant one."""
    rng = np.random.default_rng(seed)
    finite = int(rng.integers(0, 4))
    blocks = [int(k) for k in rng.integers(1, 5, size=int(rng.integers(1, 4)))]
    n = finite + sum(blocks)
    A, E = np.eye(n), np.zeros((n, n))
    A[:finite, :finite] = np.diag(-rng.integers(1, 5, size=finite).astype(float))
    E[:finite, :finite] = np.eye(finite)
    start = finite
    for length in blocks:
        E[start : start + length, start : start + length] = np.eye(length, k=1)
        start += length
    left = np.tril(rng.integers(-2, 3, size=(n, n)), -1) + np.eye(n)
    right = np.triu(rng.integers(-2, 3, size=(n, n)), 1) + np.eye(n)
    counts = {
        "regular": True,
        "index": max(blocks),
        "finite": finite,
        "infinite": sum(blocks),
        "impulsive": sum(blocks) - len(blocks),
    }
    B, C = rng.integers(-3, 4, size=(n, 2)).astype(float), rng.integers(-3, 4, size=(2, n)).astype(float)
    return StateSpace(A=left @ A @ right, B=left @ B, C=C @ right, E=left @ E @ right), counts


@pytest.mark.parametrize("seed", range(30))
def test_counts_and_smallest_e_of_mixed_blocks(seed: int, oracle: Any) -> None:
    source, counts = mixed(seed)
    assert inspect(source)["descriptor"] == counts
    made = convert(source, "state-space")
    truth = oracle.error(source, made.model, W)
    response = made.receipt.claim("response-error")
    # the transforms have condition numbers up to a few thousand
    assert truth < 1e-10 and not made.receipt.failed
    assert truth <= response.value + response.uncertainty + 1e-16
    after = inspect(made)
    if any("keeps its E" in text for text in made.receipt.cautions):
        # transforms that lose more than ten digits: two of the thirty
        assert seed in (10, 28) and after["descriptor"] == counts
        return
    # the chains of what is left are those of the polynomial part: none is of length 1
    degree = made.receipt.details["descriptor"].get("polynomial_degree", 0)
    if degree:
        assert after["descriptor"]["index"] == degree + 1
    else:
        assert after.get("descriptor", {"index": 0})["index"] == 0
    assert made.model.order <= source.order


def test_a_singular_pencil_is_refused(run: Callable[..., Any], tmp_path: Path) -> None:
    (tmp_path / "plant.json").write_text(
        '{"realize": 1, "kind": "state-space", "A": [[1, 0], [0, 0]], "B": [[1], [1]], "C": [[1, 1]], '
        '"E": [[1, 0], [0, 0]]}'
    )
    for arguments in (["inspect"], ["convert", "--to", "state-space"]):
        done = run(arguments[0], tmp_path / "plant.json", *arguments[1:])
        assert done.status == 5 and "pencil" in done.err


def test_an_e_that_was_rounded_by_a_transform_is_left_alone(oracle: Any) -> None:
    """Exactly nonsingular, singular within rounding: no guess, and words."""
    rng = np.random.default_rng(1)
    Q, Z = (np.linalg.qr(rng.normal(size=(5, 5)))[0] for _ in range(2))
    A, E = Q @ np.diag([-1.0, -2.0, -3.0, 1.0, 1.0]) @ Z, Q @ np.diag([1.0, 1.0, 1.0, 0.0, 0.0]) @ Z
    source = StateSpace(A=A, B=Q @ np.ones((5, 1)), C=np.ones((1, 5)) @ Z, E=E)
    assert structure(source.exact("A"), source.exact("E")).finite > 3
    made = convert(source, "state-space")
    assert made.model.E is not None and oracle.error(source, made.model, W) == 0.0
    assert any("singular within their rounding" in text or "keeps its E" in text for text in made.receipt.cautions)


def test_sampled_descriptors_and_units_of_time(oracle: Any) -> None:
    for size in (1e-9, 1e9):
        source = constrained(3, 3)
        moved = StateSpace(A=source.A, B=source.B, C=source.C, E=np.asarray(source.E) * size)
        made = convert(moved, "state-space")
        assert made.model.order == 4 and made.model.E is None
        assert oracle.error(moved, made.model, [w / size for w in W]) < 1e-12


def test_a_polynomial_matrix_of_thirds(oracle: Any) -> None:
    """Coefficients that are no doubles exactly: each entry is rounded once."""
    from realize.kernels.exact.descriptor import smallest_nilpotent
    from realize.kernels.exact.numbers import fraction

    third = fraction((1, 3))
    found = smallest_nilpotent([[[third, third]], [[third, third]]])
    assert found.blocks == (3,)
    size = sum(found.blocks)
    N = [[Fraction(int(j == i + 1)) for j in range(size)] for i in range(size)]
    B = [[Fraction(int(x.p), int(x.q)) for x in row] for row in found.B]
    C = [[Fraction(int(x.p), int(x.q)) for x in row] for row in found.C]
    for power in (1, 2, 3):
        moved = B
        for _ in range(power):
            moved = [[sum(N[i][k] * moved[k][j] for k in range(size)) for j in range(2)] for i in range(size)]
        value = [sum(C[0][k] * moved[k][j] for k in range(size)) for j in range(2)]
        assert value == ([Fraction(-1, 3)] * 2 if power < 3 else [0, 0])


@pytest.mark.skipif(not DATA.exists(), reason="the large models are not part of the repository")
def test_network_equations_with_singular_e() -> None:
    """Chahlaoui & Van Dooren 2002, MNA_1: the rank of E against that of rational arithmetic."""
    given = np.load(DATA / "MNA_1.npz")

    def entries(name: str) -> list[list[tuple[int, int]]]:
        matrix = np.zeros(given[f"{name}_shape"])
        np.add.at(matrix, (given[f"{name}_row"], given[f"{name}_col"]), given[f"{name}_data"])
        return [[entry.as_integer_ratio() for entry in row] for row in matrix.tolist()]

    E = entries("E")
    found = structure(entries("A"), E)
    assert (found.size, found.index, found.finite, found.impulsive) == (578, 2, 289, 17)
    used = sum(any(entry[0] for entry in row) for row in E)
    assert used == 306 == found.ranks[1], "every row of E that is not zero counts"
