"""Degree, poles and zeros of transfer matrices from textbooks and from the examples of a library's documentation."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from realize import StateSpace, TransferFunction, convert, inspect

DATA = Path(__file__).parents[3] / "shared" / "data"
TEXTBOOKS = DATA / "papers" / "mimo_minimal_zeros.json"
EXAMPLES = DATA / "slicot-examples"

pytestmark = pytest.mark.skipif(not DATA.is_dir(), reason="the shared data are not here")


def textbook_cases() -> list[Any]:
    if not TEXTBOOKS.is_file():
        return []
    cases = json.loads(TEXTBOOKS.read_text(encoding="utf-8"))["cases"]
    return [pytest.param(case, id=name) for name, case in cases.items()]


def matrix_of(case: dict[str, Any]) -> TransferFunction:
    return TransferFunction(
        numerator=[[entry["num"] for entry in row] for row in case["tf"]],
        denominator=[[entry["den"] for entry in row] for row in case["tf"]],
    )


def repeated(rows: list[list[float]]) -> list[complex]:
    return sorted(
        (complex(re, im) for re, im, count in rows for _ in range(int(count))), key=lambda z: (z.real, z.imag)
    )


@pytest.mark.parametrize("case", textbook_cases())
def test_textbook_matrices(case: dict[str, Any]) -> None:
    """Gilbert 1963; Chen; Maciejowski 1989; Skogestad & Postlethwaite (examples from memory, numbers recomputed)."""
    record = inspect(matrix_of(case))
    assert record["minimal_order"] == case["minimal_order"]
    assert np.allclose(repeated(record["poles"]), sorted(case["poles"]), rtol=1e-15, atol=0)
    assert np.allclose(repeated(record["zeros"]), sorted(case["invariant_zeros"]), rtol=1e-15, atol=0)


def example(name: str) -> dict[str, Any]:
    return json.loads((EXAMPLES / f"{name}.json").read_text(encoding="utf-8"))


def test_zeros_of_the_ab08nd_example() -> None:
    """SLICOT's example program TAB08ND: finite zeros, orders at infinity, decoupling zeros."""
    given, expected = (example("AB08ND")[key] for key in ("input", "expected"))
    record = inspect(StateSpace(**{name: given[name] for name in "ABCD"}))
    assert repeated(record["invariant_zeros"]) == sorted(row[0] for row in expected["finite_zeros"])
    assert [record["zeros_at_infinity"]] == expected["the_orders_of_the_infinite_zeros_are"]
    hidden = record["decoupling_zeros"]
    for side in ("input", "output"):
        key = next(key for key in expected if key.startswith(f"the_{side}_decoupling"))
        assert repeated(hidden[side]) == [row[0] for row in expected[key]]
    assert record["normal_rank"] == 2


def test_order_of_the_td04ad_example() -> None:
    given, expected = (example("TD04AD")[key] for key in ("input", "expected"))
    numerator, denominator = given["UCOEFF"], [[row, row] for row in given["DCOEFF"]]
    assert inspect(TransferFunction(numerator=numerator, denominator=denominator))["minimal_order"] == expected["order"]


@pytest.mark.parametrize("seed", range(6))
def test_slycot_finds_the_same_zeros(seed: int) -> None:
    """ab08nd of slycot (SLICOT), random integer models of 3 to 8 states."""
    slycot = pytest.importorskip("slycot")
    rng = np.random.default_rng(seed)
    n, m, p = int(rng.integers(3, 9)), int(rng.integers(1, 4)), int(rng.integers(1, 4))
    A, B, C = (rng.integers(-5, 6, shape).astype(float) for shape in ((n, n), (n, m), (p, n)))
    D = rng.integers(-1, 2, (p, m)).astype(float) * (seed % 2)
    found = slycot.ab08nd(n, m, p, A, B, C, D)
    count, rank, af, bf = found[0], found[1], found[8], found[9]
    record = inspect(StateSpace(A=A, B=B, C=C, D=D))
    assert record["normal_rank"] == rank
    own = np.array(repeated(record["invariant_zeros"]))
    assert own.size == count
    if count:
        import scipy.linalg

        theirs = scipy.linalg.eigvals(af[:count, :count], bf[:count, :count])
        gap = np.abs(own[:, None] - theirs[None, :]).min(axis=1)
        assert np.all(gap <= 1e-8 * np.maximum(np.abs(own), 1))


@pytest.mark.parametrize("case", textbook_cases())
def test_textbook_matrices_as_states(case: dict[str, Any]) -> None:
    made = convert(matrix_of(case), "state-space")
    assert made.model.order == case["minimal_order"] == made.receipt.details["mcmillan_degree"]
    assert made.receipt.claim("peak-error").value <= 1e-15
    poles = np.linalg.eigvals(made.model.A)
    assert np.allclose(np.sort(poles.real), sorted(case["poles"]), rtol=1e-14)


def test_states_of_the_td04ad_example() -> None:
    """The printed matrices (4 decimals) and ours have the same response."""
    given, expected = (example("TD04AD")[key] for key in ("input", "expected"))
    numerator, denominator = given["UCOEFF"], [[row, row] for row in given["DCOEFF"]]
    made = convert(TransferFunction(numerator=numerator, denominator=denominator), "state-space")
    printed = StateSpace(**{name: expected[name] for name in "ABCD"})
    points = 1j * np.array([0.1, 1.0, 3.0, 10.0])
    assert made.model.order == expected["order"]
    assert np.abs(made.model.evaluate(points) - printed.evaluate(points)).max() < 2e-3


def test_coefficients_of_the_tb04ad_example() -> None:
    given, expected = (example("TB04AD")[key] for key in ("input", "expected"))
    made = convert(StateSpace(**{name: given[name] for name in "ABCD"}), "transfer-function").model
    for name, entry in expected["transfer"].items():
        i, j = (int(part) - 1 for part in name.split(","))
        n, d = np.trim_zeros(entry["num_desc"], "b"), np.trim_zeros(entry["den_desc"], "b")
        points = np.array([0.5, 2.0, 7.0])
        theirs = np.polyval(entry["num_desc"], points) / np.polyval(entry["den_desc"], points)
        own = np.polyval(made.numerator[i][j], points) / np.polyval(made.denominator[i][j], points)
        assert np.allclose(own, theirs, rtol=1e-14), (n, d)
        assert len(made.denominator[i][j]) <= len(d)
