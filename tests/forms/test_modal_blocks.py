"""Modal coordinates of state models: blocks, clusters, and the choice between states and partial fractions."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
import scipy.linalg

import realize
from realize.forms.coordinates import Setting
from realize.forms.registry import TABLE
from realize.kernels.block_diagonal import block_diagonal
from realize.models import StateSpace, TimeBase

PAIR = np.array([[-0.01, -100.0], [100.0, -0.01]])


def rotated(A: Any, seed: int = 0, m: int = 1, p: int = 1, **rest: Any) -> StateSpace:
    """A plant with these blocks in orthogonal coordinates that hide them."""
    n = A.shape[0]
    rng = np.random.default_rng(seed)
    Q, _ = np.linalg.qr(rng.standard_normal((n, n)))
    return StateSpace(A=Q @ A @ Q.T, B=rng.standard_normal((n, m)), C=rng.standard_normal((p, n)), **rest)


def flexible(count: int, sampled: bool) -> StateSpace:
    frequencies = np.geomspace(1.0, 100.0, count)
    blocks = [np.array([[-0.002 * w, -w], [w, -0.002 * w]]) for w in frequencies]
    A = scipy.linalg.block_diag(*blocks, [[-5.0]])
    if sampled:
        A = scipy.linalg.expm(0.02 * A)
    return rotated(A, 1, 2, 2, time=TimeBase("sampled", period=0.02) if sampled else TimeBase())


@pytest.mark.parametrize("sampled", [False, True])
def test_one_block_for_each_oscillation_with_frequency_and_damping(sampled: bool) -> None:
    plant = flexible(12, sampled)
    done = realize.convert(plant, "state-space", form="modal").require()
    record = done.receipt.details["coordinates"]
    modes = [block["modes"] for block in record["blocks"]]
    assert [len(m) for m in modes] == [1] * 13 and sorted(b["size"] for b in record["blocks"]) == [1] + [2] * 12
    pairs = [m[0] for m in modes if m[0]["im"] > 0]
    assert np.allclose([m["frequency"] for m in pairs], np.geomspace(1, 100, 12) * np.hypot(1, 0.002), rtol=1e-11)
    assert np.allclose([m["damping"] for m in pairs], 0.002 / np.hypot(1, 0.002), rtol=1e-8)
    A, at = done.model.A.copy(), 0
    for block in record["blocks"]:
        part = A[at : at + block["size"], at : at + block["size"]]
        if block["size"] == 2:
            assert part[0, 0] == part[1, 1] and part[0, 1] == -part[1, 0] < 0
        part[:] = 0
        at += block["size"]
    assert not np.any(A), "nothing beside the blocks"
    T, S = np.array(record["transform"]), np.array(record["back"])
    assert np.allclose(S @ plant.A @ T, done.model.A, atol=1e-11 * np.max(np.abs(plant.A)))
    assert np.allclose(T @ S, np.eye(25), atol=1e-12)


def test_an_eigenvalue_of_multiplicity_eight_stays_one_block() -> None:
    plant = rotated(scipy.linalg.block_diag(-np.eye(8) + np.eye(8, k=1), PAIR, [[-50.0]]), 2)
    done = realize.convert(plant, "state-space", form="modal").require()
    blocks = done.receipt.details["coordinates"]["blocks"]
    assert [block["size"] for block in blocks] == [8, 1, 2]
    assert 0 < blocks[0]["separation"] < 1e-10 and "separation" not in blocks[1]
    assert any("8 states" in note and "separation" in note for note in done.receipt.cautions)
    assert next(c for c in done.receipt.claims if c.name == "peak-error").value < 1e-10


@pytest.mark.parametrize("coupling", [0.0, 1.0])
def test_a_double_lightly_damped_pair(coupling: float) -> None:
    """Two equal pairs without coupling are two blocks; a chain of two is one."""
    A = np.kron(np.eye(2), PAIR) + coupling * np.kron(np.eye(2, k=1), np.eye(2))
    done = realize.convert(rotated(A, 3), "state-space", form="modal").require()
    sizes = [block["size"] for block in done.receipt.details["coordinates"]["blocks"]]
    assert sizes == ([4] if coupling else [2, 2])


def test_partial_fractions_where_they_are_better() -> None:
    """A companion matrix of twelve poles: no bounded transform splits it, its exact partial fractions do."""
    denominator = np.poly(-np.arange(1.0, 13.0))
    A = np.zeros((12, 12))
    A[0], A[1:, :-1] = -denominator[1:], np.eye(11)
    plant = StateSpace(A=A, B=np.eye(12)[:, :1], C=np.eye(12)[-1:] * denominator[-1])
    new = TABLE["modal"].apply(plant.A, plant.B, plant.C, plant.D, Setting())
    assert any("separation" in block for block in new.details["blocks"])
    done = realize.convert(plant, "state-space", form="modal").require()
    record = done.receipt.details["coordinates"]
    assert "partial fractions" in record["note"] and record["condition"] is None
    assert sorted(block["modes"][0]["re"] for block in record["blocks"]) == [-float(k) for k in range(12, 0, -1)]


def test_units_change_nothing_and_signs_are_fixed() -> None:
    plant = flexible(4, False)
    units = np.ldexp(1.0, [3, -20, 7, 11, 0, -5, 30, 2, -9])
    other = plant.with_(A=plant.A * units[:, None] / units, B=plant.B * units[:, None], C=plant.C / units)
    one, two = (realize.convert(x, "state-space", form="modal").model for x in (plant, other))
    for name in "ABC":
        assert np.allclose(
            getattr(one, name), getattr(two, name), rtol=0, atol=1e-8 * np.max(np.abs(getattr(one, name)))
        )
    done = realize.convert(plant, "state-space", form="modal")
    for block in done.receipt.details["coordinates"]["blocks"]:
        pair = one.B[block["first"] : block["first"] + block["size"]]
        size = np.hypot(*pair) if len(pair) == 2 else np.abs(pair[0])
        first = int(np.argmax(size >= 0.999 * size.max()))
        assert pair[0, first] > 0
        if len(pair) == 2:
            assert abs(pair[1, first]) <= 1e-14 * size.max()


def test_inputs_and_outputs_of_a_block_are_of_like_size() -> None:
    plant = flexible(5, False)
    new = realize.convert(plant.with_(B=plant.B * 1e9, C=plant.C * 1e-3), "state-space", form="modal").model
    for k in range(0, 10, 2):
        ratio = np.max(np.abs(new.B[k])) / np.max(np.abs(new.C[:, k : k + 2]))
        assert 1e-2 < ratio < 1e2


@pytest.mark.parametrize("n", [1, 2, 7, 60])
def test_the_kernel_gives_a_true_inverse_within_its_bound(n: int) -> None:
    rng = np.random.default_rng(n)
    A = rng.standard_normal((n, n))
    found = block_diagonal(A, 1e4)
    assert np.linalg.norm(found.right @ found.left - np.eye(n)) < 1e-11
    assert np.linalg.norm(found.right @ found.A @ found.left - A) < 1e-11 * np.linalg.norm(A)
    assert all(block.coupling <= 1e4 for block in found.blocks)
    assert sum(block.size for block in found.blocks) == n
