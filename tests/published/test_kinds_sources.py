"""Descriptor models, matrix fractions and tables of responses against sources outside the project.

SLICOT examples: SLICOT-Reference 5.9.1, BSD-3, The SLICOT Team, printed to four decimals. Kailath 1980: from memory.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from realize.models import MatrixFraction, StateSpace, TransferFunction
from realize.steps import convert, inspect


def test_tg01fd_ranks_of_a_descriptor(oracle: Any) -> None:
    """rank(E) = 3 and rank(A22) = 1 of four states: index 1, three finite modes."""
    source = StateSpace(
        A=[[-1.0, 0.0, 0.0, 3.0], [0.0, 0.0, 1.0, 2.0], [1.0, 1.0, 0.0, 4.0], [0.0, 0.0, 0.0, 0.0]],
        E=[[1.0, 2.0, 0.0, 0.0], [0.0, 1.0, 0.0, 1.0], [3.0, 9.0, 6.0, 3.0], [0.0, 0.0, 2.0, 0.0]],
        B=[[1.0, 0.0], [0.0, 0.0], [0.0, 1.0], [1.0, 1.0]],
        C=[[-1.0, 0.0, 1.0, 0.0], [0.0, 1.0, -1.0, 1.0]],
    )
    assert inspect(source)["descriptor"] == {"regular": True, "index": 1, "finite": 3, "infinite": 1, "impulsive": 0}
    made = convert(source, "state-space")
    assert made.model.order == 3 and oracle.error(source, made.model, [0.1, 1.0, 7.0]) < 1e-13


def test_tb04ad_index_of_a_fraction() -> None:
    """Order 3, controllability index 2 in blocks of 2 and 1; row denominators of degrees 2 and 3."""
    source = StateSpace(
        A=np.diag([-1.0, -2.0, -3.0]),
        B=[[0.0, 1.0], [1.0, 1.0], [-1.0, 0.0]],
        C=[[0.0, 1.0, 1.0], [1.0, 1.0, 1.0]],
        D=np.eye(2),
    )
    made = convert(source, "matrix-fraction")
    shown = made.receipt.details["matrix_fraction"]
    assert shown["degree"] == 3 and sorted(shown["controllability_indices"]) == [1, 2]
    # channel 1, 1: (s^2 + 5 s + 7)/(s^2 + 5 s + 6)
    channels = convert(made, "transfer-function").model
    assert isinstance(channels, TransferFunction)
    assert channels.numerator[0][0] == pytest.approx([1.0, 5.0, 7.0], rel=1e-13)
    assert channels.denominator[0][0] == pytest.approx([1.0, 5.0, 6.0], rel=1e-13)
    # channel 2, 2: (s^3 + 8 s^2 + 20 s + 15)/(s^3 + 6 s^2 + 11 s + 6), the factor s + 3 of the printed form kept
    above, below = channels.numerator[1][1], channels.denominator[1][1]
    assert np.polymul(above, [1.0, 6.0, 11.0, 6.0]) == pytest.approx(
        np.polymul([1.0, 8.0, 20.0, 15.0], below), rel=1e-13
    )


def test_tc01od_dual_of_a_fraction() -> None:
    """The dual of a left fraction is the right fraction of the transposed matrices: G becomes its transpose."""
    P = np.array([[[2.0, 3.0, 1.0], [4.0, -1.0, -1.0]], [[5.0, 7.0, -6.0], [3.0, 2.0, 2.0]]])
    Q = np.array([[[6.0, -1.0, 5.0], [1.0, 7.0, 5.0]], [[1.0, 1.0, 1.0], [4.0, 1.0, -1.0]]])
    left = MatrixFraction(side="left", numerator=np.moveaxis(Q, 2, 0), denominator=np.moveaxis(P, 2, 0))
    dual_denominator = np.array([[[2.0, 3.0, 1.0], [5.0, 7.0, -6.0]], [[4.0, -1.0, -1.0], [3.0, 2.0, 2.0]]])
    dual_numerator = np.array([[[6.0, -1.0, 5.0], [1.0, 1.0, 1.0]], [[1.0, 7.0, 5.0], [4.0, 1.0, -1.0]]])
    right = MatrixFraction(
        side="right", numerator=np.moveaxis(dual_numerator, 2, 0), denominator=np.moveaxis(dual_denominator, 2, 0)
    )
    points = np.array([0.3j, 1.0 + 2.0j, -4.0])
    assert np.allclose(left.evaluate(points), np.swapaxes(right.evaluate(points), 1, 2), rtol=1e-14, atol=0)


def test_td05ad_value_at_a_frequency() -> None:
    """G(j) = 0.8462 - 0.2308 j."""
    source = TransferFunction(numerator=[1.0, 3.0, 2.0, 6.0], denominator=[1.0, 2.0, 0.0, 0.0, 1.0, 1.0])
    made = convert(source, "frequency-response", frequencies=[1.0])
    assert made.model.response[0, 0, 0] == pytest.approx(0.8462 - 0.2308j, abs=6e-5)


def test_kailath_section_6_5() -> None:
    """McMillan form diag(s / ((s + 1)^2 (s + 2)^2), s^2 / (s + 2)): det D has degree 5 on either side."""
    below = np.poly([-1.0, -1.0, -2.0, -2.0])
    over, near = [1.0, 0.0], [1.0, 2.0, 1.0, 0.0]
    source = TransferFunction(
        numerator=[[over, near], [[-c for c in near], [-c for c in near]]], denominator=[[below] * 2] * 2
    )
    for side in ("left", "right"):
        made = convert(source, "matrix-fraction", side=side)
        assert made.model.order == made.receipt.details["matrix_fraction"]["degree"] == 5
        poles = sorted((round(re), count) for re, _, count in inspect(made)["poles"])
        assert poles == [(-2, 3), (-1, 2)]
