"""Balanced coordinates against examples of the literature."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import realize
from realize.models import StateSpace

DATA = Path(__file__).parents[2] / ".." / "shared" / "data"


def data(name: str) -> Any:
    path = DATA / name
    if not path.exists():
        pytest.skip(f"{path} is not there")
    return json.loads(path.read_text(encoding="utf-8"))


def test_moore_1981() -> None:
    """(s + 4) / ((s + 1)(s + 3)(s + 5)(s + 10)): Hankel singular values and the two leading states, to three digits.

    B. C. Moore, IEEE Trans. Automat. Control 26 (1981) 17-32, section VI; the example and its figures from memory.
    """
    A = [[0, 0, 0, -150], [1, 0, 0, -245], [0, 1, 0, -113], [0, 0, 1, -19]]
    plant = StateSpace(A=A, B=[[4], [1], [0], [0]], C=[[0, 0, 0, 1]])
    done = realize.convert(plant, "state-space", form="balanced").require()
    s = done.receipt.details["coordinates"]["hankel_singular_values"]
    assert s == pytest.approx([0.0159, 0.00272, 0.000127, 8e-6], rel=4e-3)
    new = done.model
    assert np.diagonal(new.A)[:2] == pytest.approx([-0.4378, -3.135], rel=1e-3)
    assert new.B[:2, 0] == pytest.approx([0.1181, 0.1307], rel=1e-3)
    assert np.trace(new.A) == pytest.approx(-19, rel=1e-13)


def test_hankel_singular_values_of_moore_in_many_digits() -> None:
    known = data("papers/moore1981.json")
    plant = StateSpace(A=known["A"], B=known["B"], C=known["C"])
    for form in ("balanced", "input-normal", "output-normal"):
        record = realize.convert(plant, "state-space", form=form).require().receipt.details["coordinates"]
        values = known["verified"]["hsv_50digit_arithmetic"]
        assert np.allclose(record["hankel_singular_values"], values, rtol=1e-10, atol=0)


def test_slicot_example_of_balancing() -> None:
    """AB09AD: seven states, Hankel singular values as printed (SLICOT library, BSD-3, The SLICOT Team)."""
    known = data("slicot-examples/AB09AD.json")
    plant = StateSpace(**{name: known["input"][name] for name in "ABC"})
    done = realize.convert(plant, "state-space", form="balanced").require()
    values = done.receipt.details["coordinates"]["hankel_singular_values"]
    assert np.allclose(values, known["expected"]["hsv"], rtol=0, atol=5.1e-5)
    # the five states that the example keeps are the leading ones: the same poles and Markov parameters
    ours = (done.model.A[:5, :5], done.model.B[:5], done.model.C[:, :5])
    theirs = tuple(np.array(known["expected"][name]) for name in "ABC")
    assert np.allclose(np.poly(ours[0]), np.poly(theirs[0]), rtol=1e-3)
    for k in range(3):
        one, two = (c @ np.linalg.matrix_power(a, k) @ b for a, b, c in (ours, theirs))
        assert np.allclose(one, two, rtol=0, atol=2e-3 * np.max(np.abs(two)))


def test_linear_quadratic_values_of_the_double_integrator() -> None:
    """1/s^2: both Riccati solutions are [[r, 1], [1, r]] with r = sqrt(2) (by hand), so the values are r + 1, r - 1."""
    plant = StateSpace(A=[[0, 1], [0, 0]], B=[[0], [1]], C=[[1, 0]])
    done = realize.convert(plant, "state-space", form="linear-quadratic-balanced").require()
    r = np.sqrt(2)
    assert done.receipt.details["coordinates"]["characteristic_values"] == pytest.approx([r + 1, r - 1], rel=1e-13)
