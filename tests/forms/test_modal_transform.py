"""The transform by eigenvectors to the modal form of partial fractions."""

from __future__ import annotations

import numpy as np
import pytest

import realize
from realize.forms.coordinates import Setting
from realize.forms.modal_transform import ModalTransform, modal_transform
from realize.models import Offset, StateSpace


@pytest.mark.parametrize(("n", "m", "p"), [(0, 1, 1), (1, 1, 1), (5, 1, 1), (6, 2, 3)])
def test_partial_fractions_follow_from_the_states(n: int, m: int, p: int) -> None:
    rng = np.random.default_rng(n)
    unit = 2.0 ** rng.integers(-30, 30, n)
    A = 100 * rng.standard_normal((n, n)) * unit / unit[:, None]
    B, C = rng.standard_normal((n, m)) / unit[:, None], rng.standard_normal((p, n)) * unit
    source = StateSpace(A=A, B=B, C=C, D=np.zeros((p, m)))
    residues = realize.convert(source, "pole-residue")
    modal = realize.convert(residues, "state-space", form="modal").model
    assert isinstance(modal, StateSpace)
    found = modal_transform(A, B, C, (modal.A, modal.B, modal.C), Setting())
    assert isinstance(found, ModalTransform)
    T, S = found.transform, found.back
    assert found.residual < 1e-13 and found.condition < 1e3
    assert np.allclose(S @ T, np.eye(n), rtol=0, atol=1e-13)
    assert np.allclose(S @ A @ T, modal.A, rtol=0, atol=1e-10)
    assert np.allclose(S @ B, modal.B, rtol=0, atol=1e-12 * np.max(np.abs(modal.B), initial=0.0))
    assert np.allclose(C @ T, modal.C, rtol=0, atol=1e-12 * np.max(np.abs(modal.C), initial=0.0))


def test_the_receipt_has_transform_residual_and_operating_point() -> None:
    """Poles 1e-4 apart: partial fractions are better than a block of both, and the states follow."""
    offset = Offset((0.0,), (0.0,), (3.0, -2.0))
    source = StateSpace(A=[[-1.0, 1.0], [0.0, -1.0001]], B=[[1.0], [1.0]], C=[[1.0, 1.0]], offset=offset)
    done = realize.convert(source, "state-space", form="modal").require()
    record = done.receipt.details["coordinates"]
    assert record["against"] == "states of the source" and record["transform_residual"] < 1e-10
    T, S = np.array(record["transform"]), np.array(record["back"])
    assert np.allclose(S @ source.A @ T, done.model.A, rtol=0, atol=1e-7)
    assert done.model.offset is not None and done.model.offset.states is not None
    assert np.allclose(T @ done.model.offset.states, offset.states, rtol=1e-7)
    assert not any("left behind" in caution for caution in done.receipt.cautions)


def test_where_there_is_none_the_receipt_says_why() -> None:
    rng = np.random.default_rng(3)
    A, B, C = np.diag([-1.0, -2.0]), rng.standard_normal((2, 1)), rng.standard_normal((1, 2))
    one = (np.array([[-1.0]]), np.ones((1, 1)), np.ones((1, 1)))
    assert "modes that cancel" in str(modal_transform(A, B, C, one, Setting()))
    twice = (-np.eye(2), np.ones((2, 1)), np.ones((1, 2)))
    assert "repeats" in str(modal_transform(A, B, C, twice, Setting()))
    wrong = (np.diag([-1.0, -3.0]), np.ones((2, 1)), np.ones((1, 2)))
    assert "satisfy" in str(modal_transform(A, B, C, wrong, Setting()))
    J = -np.eye(8) + np.eye(8, k=1)
    done = realize.convert(StateSpace(A=J, B=np.ones((8, 1)), C=np.ones((1, 8))), "state-space", form="modal")
    record = done.receipt.details["coordinates"]
    assert "transform" in record or "nor does one follow" in record["note"]
