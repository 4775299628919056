"""Staircases, balancing and ordered Schur forms against the printed results of the SLICOT example programs.

Invariants are compared (block sizes, indices, poles, responses), never coordinates, which are free up to rotations.
"""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import realize
from realize.models import StateSpace

EXAMPLES = Path(__file__).parents[2] / ".." / "shared" / "data" / "slicot-examples"
#: Digits that the programs print: four decimals.
PRINTED = 6e-5


def example(name: str) -> tuple[Any, Any]:
    """Input and printed results of an example program."""
    path = EXAMPLES / f"{name}.json"
    if not path.exists():
        pytest.skip("../shared/data/slicot-examples is not here")
    record = json.loads(path.read_text(encoding="utf-8"))
    return record["input"], record["expected"]


def plant(given: Any) -> StateSpace:
    """The model of an example; a missing C sees every state."""
    A = np.array(given["A"], dtype=float)
    B = np.array(given["B"], dtype=float).reshape(A.shape[0], -1)
    return StateSpace(A=A, B=B, C=given.get("C", np.eye(A.shape[0])))


def coordinates(model: StateSpace, form: str, **options: Any) -> tuple[StateSpace, Any]:
    done = realize.convert(model, "state-space", form=form, **options).require()
    return done.model, done.receipt.details["coordinates"]


def sizes_of(value: Any) -> list[int]:
    return list(np.atleast_1d(value))


@pytest.mark.parametrize("name", ["AB01ND", "TB01UD"])
def test_controllable_part_of_two_inputs(name: str) -> None:
    """Order 2 of 3, one block of 2, controllability index 1; the part left over has the pole -2."""
    given, printed = example(name)
    model = plant(given)
    new, record = coordinates(model, "reachable-staircase")
    order = printed["order"]
    assert record["reachable"] == order and record["sizes"] == sizes_of(printed["block_dims"])
    assert max(record["controllability_indices"]) == printed["controllability_index"]
    ours = np.sort_complex(np.linalg.eigvals(new.A[:order, :order]))
    theirs = np.sort_complex(np.linalg.eigvals(np.array(printed["A"])))
    assert np.allclose(ours, theirs, atol=PRINTED)
    removed = set(np.round(np.linalg.eigvals(model.A), 6)) - set(np.round(ours, 6))
    assert [row["re"] for row in record["removed"]] == pytest.approx(sorted(z.real for z in removed))
    if "C" in printed:
        part = StateSpace(A=printed["A"], B=printed["B"], C=printed["C"])
        s = 1j * np.array([0.1, 1.0, 10.0])
        assert np.allclose(new.evaluate(s), part.evaluate(s), atol=10 * PRINTED)


def test_staircase_of_a_controllable_pair() -> None:
    given, printed = example("AB01OD")
    new, record = coordinates(plant(given), "reachable-staircase")
    assert record["sizes"] == printed["block_dims"] == [2, 2, 1]
    assert len(record["sizes"]) == printed["the_number_of_stairs_in_the_staircase_form"]
    assert record["controllability_indices"] == [3, 2] and record["unreachable"] == 0
    theirs = np.array(printed["A"])
    # singular values of the blocks beside the diagonal do not depend on the rotations within a step
    for rows, columns in ((slice(2, 4), slice(0, 2)), (slice(4, 5), slice(2, 4))):
        mine, other = np.array(new.A)[rows, columns], theirs[rows, columns]
        scale = np.linalg.norm(new.A) / np.linalg.norm(theirs)
        assert scale == pytest.approx(1.0, rel=1e-4)
        assert np.allclose(
            np.linalg.svd(mine, compute_uv=False), np.linalg.svd(other, compute_uv=False), rtol=1e-4, atol=PRINTED
        )


def test_single_input_pair() -> None:
    """Hessenberg with its first state driven; the product of the subdiagonal is free of the rotation's signs."""
    given, printed = example("TB01ZD")
    model = plant(given)
    new, record = coordinates(model, "reachable-staircase")
    assert record["reachable"] == printed["order"] == 3 and record["controllability_indices"] == [3]
    hessenberg, _ = coordinates(model, "controller-hessenberg")
    # det [B, A B, A A B] = product of b1^3 a21^2 a32 up to the determinant of the transform, which is a power of two
    theirs = np.abs(np.array([printed["B"][0][0] ** 3, printed["A"][1][0] ** 2, printed["A"][2][1]])).prod()
    for one in (new, hessenberg):
        ours = abs(one.B[0, 0] ** 3 * one.A[1, 0] ** 2 * one.A[2, 1])
        assert np.log2(ours / theirs) == pytest.approx(round(np.log2(ours / theirs)), abs=1e-3)
        assert not np.any(one.B[1:]) and one.A[2, 0] == 0
    part = StateSpace(A=printed["A"], B=printed["B"], C=printed["C"])
    s = 1j * np.array([0.1, 1.0, 10.0])
    assert np.allclose(new.evaluate(s), part.evaluate(s), atol=10 * PRINTED)


def test_scaling_reduces_the_norm_as_much() -> None:
    """An aircraft model whose entries span 27 decades; the program scales to a 1-norm 3.5e9 times smaller."""
    given, printed = example("TB01ID")
    model = plant(given)
    new, record = coordinates(model, "scaled")

    def norm(A: Any, B: Any, C: Any) -> float:
        system = np.block([[A, B], [C, np.zeros((C.shape[0], B.shape[1]))]])
        return float(np.abs(system).sum(axis=0).max())

    before = norm(model.A, model.B, model.C)
    theirs = norm(*(np.array(printed[name]) for name in "ABC"))
    assert before / theirs > 1e8
    assert norm(new.A, new.B, new.C) < 30 * theirs
    assert record["spread"]["after"] < 1e-6 * record["spread"]["before"]
    # exactly the same plant
    factor = np.ldexp(1.0, record["exponents"])
    assert np.array_equal(new.A * factor[:, None] / factor, model.A)


@pytest.mark.parametrize("name", ["TB01LD", "TB01WD"])
def test_real_schur_form_of_a_power_system(name: str) -> None:
    """Poles -0.7483 +- 2.994i, -1.6858 +- 2.0311i, -1.8751; the program with a domain puts the first pair first."""
    given, printed = example(name)
    new, record = coordinates(plant(given), "schur", ordering="damping")
    found = [complex(row["re"], row["im"]) for row in record["blocks"]]
    theirs = [complex(*z) for z in printed["eigenvalues"] if z[1] >= 0]
    assert np.allclose(found, theirs, atol=PRINTED)
    s = 1j * np.array([0.1, 1.0, 10.0])
    part = StateSpace(A=printed["A"], B=printed["B"], C=printed["C"])
    assert np.allclose(new.evaluate(s), part.evaluate(s), atol=20 * PRINTED)


def test_kalman_says_minimal_where_the_program_does() -> None:
    given, printed = example("TB01PD")
    _, record = coordinates(plant(given), "kalman")
    assert list(record["dimensions"].values()) == [printed["order"], 0, 0, 0]


def test_kalman_of_a_controllable_part() -> None:
    """The plant of TB01UD: three states, one unreachable at -2, all seen."""
    given, _ = example("TB01UD")
    _, record = coordinates(plant(given), "kalman")
    model = plant(given)
    # the observability of each mode by hand: rank [A - s I; C] at the three poles
    seen = [
        np.linalg.matrix_rank(np.vstack([model.A - pole * np.eye(3), model.C])) == 3
        for pole in np.linalg.eigvals(model.A)
    ]
    reached = [
        np.linalg.matrix_rank(np.hstack([model.A - pole * np.eye(3), model.B])) == 3
        for pole in np.linalg.eigvals(model.A)
    ]
    both = list(zip(reached, seen, strict=True))
    expected = [both.count(pair) for pair in ((True, True), (True, False), (False, True), (False, False))]
    assert list(record["dimensions"].values()) == expected
