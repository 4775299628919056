"""Companion, Jordan and modal forms against worked examples."""

from __future__ import annotations

import json
from fractions import Fraction
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import realize
from realize.forms.coordinates import Setting
from realize.forms.registry import TABLE
from realize.models import StateSpace

DATA = Path(__file__).parents[2] / ".." / "shared" / "data"


def data(name: str) -> Any:
    path = DATA / name
    if not path.exists():
        pytest.skip(f"{path} is not there")
    return json.loads(path.read_text(encoding="utf-8"))


def in_form(form: str, plant: Any) -> Any:
    return realize.convert(plant, "state-space", form=form).require()


def test_four_canonical_forms_of_one_transfer_function() -> None:
    """(b1 s^2 + b2 s + b3)/(s^3 + a1 s^2 + a2 s + a3): T. Kailath, Linear Systems, 1980, sections 2.1 and 2.3.

    From memory: controller and observer form hold the b, controllability and observability form the Markov parameters
    h1 = b1, h2 = b2 - a1 b1, h3 = b3 - a1 b2 + (a1^2 - a2) b1.
    """
    (a1, a2, a3), (b1, b2, b3) = (7.0, 14.0, 8.0), (1.0, 5.0, 6.0)
    h = [b1, b2 - a1 * b1, b3 - a1 * b2 + (a1**2 - a2) * b1]
    plant = realize.TransferFunction(numerator=[b1, b2, b3], denominator=[1.0, a1, a2, a3])
    controller = in_form("controllable-companion", plant).model
    assert np.array_equal(controller.A, [[-a1, -a2, -a3], [1, 0, 0], [0, 1, 0]])
    assert np.array_equal(controller.C, [[b1, b2, b3]])
    controllability = in_form("controllability", plant).model
    assert np.array_equal(controllability.A, [[0, 0, -a3], [1, 0, -a2], [0, 1, -a1]])
    assert np.array_equal(controllability.B, [[1], [0], [0]]) and np.array_equal(controllability.C, [h])
    observability = in_form("observability", plant).model
    assert np.array_equal(observability.A, [[0, 1, 0], [0, 0, 1], [-a3, -a2, -a1]])
    assert np.array_equal(observability.C, [[1, 0, 0]]) and np.array_equal(observability.B[:, 0], h)


def test_satellite_in_multi_input_companion_form() -> None:
    """Orbit equations with radial and tangential thrust, w = 1: indices 2 and 2, A and B already in chains.

    R. W. Brockett, Finite Dimensional Linear Systems, 1970, example of section 2 (from memory). By hand: with states
    in the order (r', r, theta', theta) the companion form is the model itself.
    """
    A = [[0, 1, 0, 0], [3, 0, 0, 2], [0, 0, 0, 1], [0, -2, 0, 0]]
    B = [[0, 0], [1, 0], [0, 0], [0, 1]]
    plant = StateSpace(A=A, B=B, C=[[1, 0, 0, 0], [0, 0, 1, 0]])
    done = in_form("multi-input-companion", plant)
    assert done.receipt.details["coordinates"]["controllability_indices"] == [2, 2]
    order = [1, 0, 3, 2]
    assert np.array_equal(done.model.A, np.array(A)[np.ix_(order, order)])
    assert np.array_equal(done.model.B, np.array(B)[order])
    assert np.array_equal(done.receipt.details["coordinates"]["transform"], np.eye(4)[:, order])


def test_jordan_form_of_a_textbook_matrix() -> None:
    """[[5, 4, 2, 1], [0, 1, -1, -1], [-1, -1, 3, 0], [1, 1, -1, 2]] has the Jordan blocks 1, 2 and a chain of two of 4.

    Much used example of linear algebra texts, from memory; the characteristic polynomial (s-1)(s-2)(s-4)^2 and the rank
    3 of A - 4 I are checked here.
    """
    A = np.array([[5, 4, 2, 1], [0, 1, -1, -1], [-1, -1, 3, 0], [1, 1, -1, 2]], dtype=float)
    assert np.allclose(np.poly(A), np.poly([1, 2, 4, 4])) and np.linalg.matrix_rank(A - 4 * np.eye(4)) == 3
    plant = StateSpace(A=A, B=[[1], [0], [2], [1]], C=[[1, 1, 0, 1]])
    done = in_form("jordan", plant)
    assert np.array_equal(done.model.A, [[1, 0, 0, 0], [0, 2, 0, 0], [0, 0, 4, 1], [0, 0, 0, 4]])


def test_mcmillan_degrees_of_published_transfer_matrices() -> None:
    """Jordan and multi-input companion forms of transfer matrices are minimal: the published McMillan degrees."""
    cases = data("papers/mimo_minimal_zeros.json")["cases"]
    assert len(cases) >= 7
    for name, case in cases.items():
        parts = {key: [[entry[key[:3]] for entry in row] for row in case["tf"]] for key in ("numerator", "denominator")}
        plant = realize.TransferFunction(**parts)
        for form in ("jordan", "multi-input-companion"):
            assert in_form(form, plant).model.order == case["minimal_order"], name


def test_minimal_part_of_slicot_tb01pd() -> None:
    """TB01PD: the printed order of the minimal realization is the sum of the controllability indices.

    SLICOT library (BSD-3, The SLICOT Team).
    """
    known = data("slicot-examples/TB01PD.json")
    matrices = {name: known["input"][name] for name in "ABC"}
    plant = StateSpace(**matrices)
    done = in_form("multi-input-companion", plant)
    expected = known["expected"]
    order = next(value for key, value in expected.items() if "order" in key.lower() or key.lower() == "nr")
    record = done.receipt.details["coordinates"]
    assert sum(record["controllability_indices"]) == order == done.model.order


def test_correctly_rounded_coefficients_of_a_state_model() -> None:
    """Companion entries of SLICOT's TB01TD model against a Faddeev-LeVerrier recursion in fractions."""
    known = data("slicot-examples/TB01TD.json")
    A = np.array(known["input"]["A"], dtype=float)
    n = A.shape[0]
    rng = np.random.default_rng(0)
    new = TABLE["controllable-companion"].apply(
        A, rng.integers(1, 4, (n, 1)).astype(float), np.ones((1, n)), np.zeros((1, 1)), Setting()
    )
    a = [[Fraction(x) for x in row] for row in A.tolist()]
    M = [[Fraction(int(i == j)) for j in range(n)] for i in range(n)]
    for k in range(1, n + 1):
        AM = [[sum(a[i][q] * M[q][j] for q in range(n)) for j in range(n)] for i in range(n)]
        c = -sum(AM[i][i] for i in range(n)) / k
        assert new.A[0, k - 1] == float(-c)
        M = [[AM[i][j] + (c if i == j else 0) for j in range(n)] for i in range(n)]
