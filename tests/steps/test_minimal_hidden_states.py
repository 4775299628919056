"""Orders of models whose hidden modes are known by construction: exact, and rounded to doubles."""

from __future__ import annotations

import numpy as np
import pytest

import realize
from realize.forms.within_rounding import hidden_within
from realize.kernels.exact.order import minimal_order
from realize.models import StateSpace
from realize.testing.hidden_states import exact_model, hidden_states, rounded_model

EPS = 2.0**-52


@pytest.mark.parametrize("seed", range(40))
def test_exact_orders_under_shears_and_units(seed: int) -> None:
    known = hidden_states(seed)
    model = exact_model(known, seed, sampled=seed % 4 == 3)
    assert minimal_order(*(model.exact(name) for name in "ABC")).order == known.order


@pytest.mark.parametrize("seed", [3, 4, 8])
def test_the_exact_result_answers_as_the_source_does(seed: int) -> None:
    known = hidden_states(seed, (11, 16))
    source = exact_model(known, seed, sampled=seed % 4 == 3)
    made = realize.minimal(source, exact=True)
    assert made.model.order == made.receipt.details["order"] == known.order
    assert not made.receipt.failed
    assert made.receipt.claim("peak-error").basis == "proved"
    assert sum(row["states"] for row in made.receipt.details["removed"]) == len(known.A) - known.order


@pytest.mark.parametrize("repeated", [False, True])
@pytest.mark.parametrize("seed", range(1, 11))
def test_orders_of_the_rounded_model(seed: int, repeated: bool) -> None:
    known = hidden_states(seed, (11, 22), repeated=repeated)
    n = len(known.A)
    found = hidden_within(*rounded_model(known, seed), None, 4 * n * EPS, sampled=False)
    assert found.order == known.order
    assert found.kept > 4 * n * EPS


@pytest.mark.parametrize("seed", range(3))
def test_units_do_not_change_the_order_within_rounding(seed: int) -> None:
    known = hidden_states(20 + seed, (11, 14), 1e4)
    A, B, C = rounded_model(known, seed)
    draw = np.random.default_rng(seed)
    x, u, y = (2.0 ** draw.integers(-20, 21, k) for k in (A.shape[0], B.shape[1], C.shape[0]))
    made = realize.minimal(StateSpace(A=A * x[:, None] / x * 2.0**20, B=B * x[:, None] * u, C=C / x * y[:, None]))
    assert made.model.order == made.receipt.details["order"] == known.order
    assert not made.receipt.failed and not made.receipt.details["ambiguous"]


def test_what_scaling_would_lose_hides_nothing() -> None:
    model = StateSpace(A=[[-1e300, 1e300], [0.0, -2e300]], B=[[1e300], [1e-300]], C=[[1e-300, 1e300]], D=[[0.0]])
    made = realize.minimal(model)
    assert made.model.order == made.receipt.details["order"] == 2
    assert made.receipt.details["ambiguous"] and not made.receipt.failed
