"""The zeros in the record of `inspect`: exact, in doubles, hidden modes, improper and singular matrices."""

from __future__ import annotations

import numpy as np
import pytest

from realize import StateSpace, TransferFunction, inspect
from realize.models import TimeBase


def test_one_channel_has_the_fields_too() -> None:
    record = inspect(TransferFunction(numerator=[1.0, 2.0], denominator=[1.0, 4.0, 3.0, 0.0]))
    assert record["transmission_zeros"] == record["zeros"] == [[-2.0, 0.0, 1]]
    assert record["zeros_at_infinity"] == [2]
    assert record["poles_at_infinity"] == []
    assert record["normal_rank"] == 1
    assert "decoupling_zeros" not in record


def test_zero_matrix_and_constant() -> None:
    record = inspect(TransferFunction(numerator=[[[0.0], [0.0]]], denominator=[[[1.0, 1.0], [1.0]]]))
    assert (record["normal_rank"], record["zeros"], record["poles"]) == (0, [], [])
    assert inspect(StateSpace(A=[], B=[], C=[], D=[[1.0, 0.0], [0.0, 0.0]]))["normal_rank"] == 1


def test_improper_matrix() -> None:
    s, one = [1.0, 0.0], [1.0]
    record = inspect(TransferFunction(numerator=[[s, one], [one, [0.0]]], denominator=[[one, one], [one, one]]))
    assert record["poles_at_infinity"] == [1]
    assert record["zeros_at_infinity"] == [1]
    assert record["minimal_order"] == 1


@pytest.mark.parametrize("sampled", [False, True])
def test_hidden_modes_and_invariant_zeros(sampled: bool) -> None:
    """Two channels on the diagonal, one mode that no input reaches, one that no output sees."""
    A = np.diag([0.5, 0.25, -0.75, -0.125])
    B = np.array([[1.0, 0.0], [0.0, 1.0], [0.0, 0.0], [1.0, 1.0]])
    C = np.array([[1.0, 0.0, 1.0, 0.0], [0.0, 1.0, 1.0, 0.0]])
    time = TimeBase("sampled", period=0.1) if sampled else TimeBase()
    record = inspect(StateSpace(A=A, B=B, C=C, D=np.eye(2), time=time))
    assert record["transmission_zeros"] == [[-0.5, 0.0, 1], [-0.75, 0.0, 1]]
    assert record["decoupling_zeros"] == {"input": [[-0.75, 0.0, 1]], "output": [[-0.125, 0.0, 1]], "input_output": []}
    assert sorted(record["invariant_zeros"]) == [[-0.75, 0.0, 2], [-0.5, 0.0, 1], [-0.125, 0.0, 1]]
    assert record["minimal_order"] == 2


def test_large_model_in_doubles() -> None:
    """150 states: known zeros of a diagonal plant in mixed coordinates, and a mode without any input."""
    rng = np.random.default_rng(0)
    n = 150
    T = np.eye(n)
    T[:-1, :-1], _ = np.linalg.qr(rng.standard_normal((n - 1, n - 1)))
    poles = -1.0 - np.arange(n) / 10
    B, C = np.zeros((n, 2)), np.zeros((2, n))
    B[:70, 0], B[70:149, 1], C[0, :70], C[1, 70:] = 1.0, 1.0, 1.0, 1.0
    record = inspect(StateSpace(A=T * poles @ T.T, B=T @ B, C=C @ T.T, D=np.zeros((2, 2))))
    assert record["normal_rank"] == 2
    assert record["zeros_at_infinity"] == [1, 1]
    assert len(record["transmission_zeros"]) == n - 1 - 2
    assert len(record["decoupling_zeros"]["input"]) == 1
    assert record["decoupling_zeros"]["input"][0][0] == pytest.approx(poles[-1], rel=1e-9)
    assert record["decoupling_zeros"]["output"] == []
    values = np.array([zero[0] for zero in record["transmission_zeros"]])
    # a sum of positive residues has one zero between each two poles
    expected = sorted(np.digitize(-values, -poles).tolist())
    assert expected == [k for k in range(1, n - 1) if k != 70]
