"""The numbers of the ten worked examples in docs/methods/claims.rst."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from realize import DeadTime, StateSpace, TimeBase, TransferFunction, compare, reduce
from realize.schema import Claim
from realize.verification import Pair, View, conversion_claims, fragility


def claims(source: Any, result: Any) -> dict[str, Claim]:
    return {claim.name: claim for claim in conversion_claims(source, result, True)}


def about(value: float, rel: float = 0.02) -> Any:
    return pytest.approx(value, rel=rel, abs=0)


def test_1_roll_off_of_a_dense_form() -> None:
    plant = TransferFunction(numerator=[1.0], denominator=[1.0, 3.0, 3.0, 1.0])
    A = np.diag([-1.0, -1.0, -1.0]) + np.diag([1.0, 1.0], 1)
    c, s = np.cos(0.3), np.sin(0.3)
    Q = np.array([[c, -s, 0], [s, c, 0], [0, 0, 1]]) @ np.array([[1, 0, 0], [0, c, -s], [0, s, c]])
    B, C = np.array([[0.0], [0.0], [1.0]]), np.array([[1.0, 0.0, 0.0]])
    dense = StateSpace(A=Q @ A @ Q.T, B=Q @ B, C=C @ Q.T)
    found = claims(plant, dense)
    assert found["peak-error"].value is not None and found["peak-error"].value < 1e-15
    assert found["end-behaviour"].infinite
    # the last bits of the rotation are the machine's own; the growth with the square of the frequency is not
    difference, size = Pair(View(plant), View(dense)).sizes(np.array([1e4, 1e6, 1e8]))
    relative = (difference / size).reshape(-1)
    assert relative[1] / relative[0] == about(1e4)
    assert relative[2] / relative[1] == about(1e4)


def test_2_notch_on_the_axis() -> None:
    below = [1.0, 2.0, 1.0]
    found = claims(
        TransferFunction(numerator=[1.0, 0.0, 1.0], denominator=below),
        TransferFunction(numerator=[1.0, 0.0, 1.000002], denominator=below),
    )
    assert found["response-error"].value == about(0.01)
    assert found["response-error"].where["frequency"] == about(1.0)
    assert found["peak-error"].value == about(2e-6)


def test_3_integrator() -> None:
    found = claims(
        TransferFunction(numerator=[1.0], denominator=[1.0, 1.0, 0.0]),
        TransferFunction(numerator=[1.0], denominator=[1.0, 1.0, 1e-12]),
    )
    assert found["response-error"].value == about(1e-11)
    assert found["response-error"].where["frequency"] == about(0.1)
    assert found["end-behaviour"].infinite
    assert found["peak-error"].holds is False
    assert found["peak-error"].infinite or (found["peak-error"].value or 0) > 1e10


def test_4_a_channel_that_is_zero() -> None:
    below = [[[1.0, 1.0]], [[1.0, 1.0]]]
    found = claims(
        TransferFunction(numerator=[[[1.0]], [[0.0]]], denominator=below),
        TransferFunction(numerator=[[[1.0]], [[1e-12]]], denominator=below),
    )
    assert found["channel-error"].value == about(1e-12)
    assert found["end-behaviour"].infinite


def test_5_sampled_near_one() -> None:
    def plant(pole: float) -> StateSpace:
        return StateSpace(A=[[pole]], B=[[1e-6]], C=[[1.0]], D=[[0.0]], time=TimeBase("sampled", period=1e-3))

    source = plant(0.999999)
    found = claims(source, plant(float(np.nextafter(0.999999, 1))))
    assert found["response-error"].value == about(1.1e-10)
    assert found["peak-error"].value == about(1.1e-10)
    assert fragility(source, np.array([0.01])) == about(1.1e-11)


def test_6_dead_time() -> None:
    def plant(seconds: float) -> TransferFunction:
        dead = DeadTime((0.0,), (0.0,), ((seconds,),))
        return TransferFunction(numerator=[1.0], denominator=[1.0, 1.0], dead_time=dead)

    found = claims(plant(0.1), plant(0.11))
    for name in ("response-error", "peak-error", "end-behaviour"):
        assert found[name].infinite and "0.01 s" in found[name].note
    assert compare(plant(0.1), plant(0.11))["response-error"]["value"] == about(0.094, 0.1)


def test_7_an_invented_leading_coefficient() -> None:
    below = [1.0, 2.0, 1.0]
    found = claims(
        TransferFunction(numerator=[1.0], denominator=below),
        TransferFunction(numerator=[1e-14, 1.0], denominator=below),
    )
    assert found["response-error"].value == about(1e-13)
    assert found["peak-error"].value == about(5e-15)
    assert found["end-behaviour"].infinite


def test_8_a_small_channel_beside_a_large_one() -> None:
    below = [[[1.0, 1.0]], [[1.0, 1.0]]]
    found = claims(
        TransferFunction(numerator=[[[1.0]], [[1e-6]]], denominator=below),
        TransferFunction(numerator=[[[1.0]], [[2e-6]]], denominator=below),
    )
    assert found["response-error"].value == about(1e-6)
    assert found["peak-error"].value == about(1e-6)
    assert found["channel-error"].value == about(1.0)
    assert found["channel-error"].where["output"] == 1
    assert found["end-behaviour"].value == about(1.0)


def test_9_a_lightly_damped_mode() -> None:
    found = claims(
        TransferFunction(numerator=[1.0], denominator=[1.0, 2e-3, 1.0]),
        TransferFunction(numerator=[1.0], denominator=[1.0, 2e-3, 1.0000002]),
    )
    assert found["response-error"].value == about(1e-4)
    assert found["peak-error"].value == about(1e-4)
    assert found["response-error"].holds is False and found["peak-error"].holds is False


def test_10_a_reduction() -> None:
    plant = StateSpace(A=[[-1.0, 0.0], [0.0, -10.0]], B=[[1.0], [1.0]], C=[[1.0, 1.0]], D=[[0.0]])
    receipt = reduce(plant, order=1).receipt
    assert receipt.details["hankel_singular_values"] == [about(0.51767, 1e-4), about(0.03233, 1e-3)]
    assert receipt.claim("reduction-bound").value == about(0.0647, 1e-2)
    assert receipt.claim("reduction-error").value == about(0.0647, 1e-2)
    assert receipt.claim("steady-state-error").value == about(0.059)
    assert receipt.details["lower_bound"] == about(0.0323, 1e-2)
