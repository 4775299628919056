"""Worked examples of the SLICOT library (example programs and their printed results), to the digits printed there."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import scipy.linalg

from realize.kernels.response import state_response
from realize.reduction import Loop, Request, reduce_states
from realize.reduction.frequency_weighted import weighted_factors
from realize.reduction.prepare import prepare

EXAMPLES = Path(__file__).parents[2] / ".." / "shared" / "data" / "slicot-examples"
PRINTED = 6e-5


def example(name: str) -> tuple[dict[str, Any], dict[str, Any]]:
    path = EXAMPLES / f"{name}.json"
    if not path.exists():
        pytest.skip(f"{name} is not in ../shared/data")
    record = json.loads(path.read_text())
    return record["input"], record["expected"]


def matrices(record: dict[str, Any], names: str = "ABCD", suffix: str = "") -> tuple[np.ndarray, ...]:
    A, B, C = (np.array(record[name + suffix], dtype=float) for name in names[:3])
    D = np.array(record.get("D" + suffix, np.zeros((C.shape[0], B.shape[1]))), dtype=float)
    return A, B, C, D


def responses_agree(one: Any, two: Any, tolerance: float) -> None:
    w = 1j * np.geomspace(0.05, 50, 60)
    first, second = (state_response(*model, None, w) for model in (one, two))
    assert np.abs(first - second).max() <= tolerance * np.abs(second).max()


@pytest.mark.parametrize(("name", "method"), [("AB09AD", "balanced-truncation"), ("AB09BD", "singular-perturbation")])
def test_balancing(name: str, method: str) -> None:
    given, printed = example(name)
    model = matrices(given)
    small = reduce_states(*model, sampled=False, order=printed["order"], method=method)
    assert small.order == printed["order"]
    assert np.abs(small.hankel_singular_values - printed["hsv"]).max() <= PRINTED
    responses_agree((small.A, small.B, small.C, small.D), matrices(printed), 3e-4)


def test_given_partition() -> None:
    """AB09DD: the first five states kept, the others at rest; the matrices themselves agree."""
    given, printed = example("AB09DD")
    model = matrices(given)
    count = given["NR"]
    small = reduce_states(*model, sampled=False, order=count, keep_states=tuple(range(count)))
    for own, theirs in zip((small.A, small.B, small.C, small.D), matrices(printed), strict=True):
        assert np.abs(own - theirs).max() <= PRINTED


def test_part_left_of_a_line() -> None:
    """AB09MD: poles right of alpha are split off and kept."""
    given, printed = example("AB09MD")
    A, B, C, D = matrices(given)
    T, Q, count = scipy.linalg.schur(A, sort=lambda re, im: re < given["ALPHA"], output="real")
    Y = scipy.linalg.solve_sylvester(T[:count, :count], -T[count:, count:], -T[:count, count:])
    left = Q[:, :count].T - Y @ Q[:, count:].T
    rest = A.shape[0] - count
    small = reduce_states(
        T[:count, :count], left @ B, C @ Q[:, :count], D, sampled=False, order=printed["order"] - rest
    )
    assert np.abs(small.hankel_singular_values - printed["hsv"]).max() <= PRINTED
    right = Q[:, :count] @ Y + Q[:, count:]
    whole = (
        scipy.linalg.block_diag(T[count:, count:], small.A),
        np.vstack([Q[:, count:].T @ B, small.B]),
        np.hstack([C @ right, small.C]),
        small.D,
    )
    responses_agree(whole, matrices(printed), 1e-3)


def test_controller_in_its_loop() -> None:
    """SB16AD: weighted at the side of the plant; the library's loop is u = K y, so that the plant changes sign."""
    given, printed = example("SB16AD")
    controller = matrices(given, suffix="C")
    A, B, C, D = matrices(given)
    prepared = prepare(*controller, sampled=False)
    assert prepared.kept_order == 1
    loop = Loop(A, B, -C, -D, controller=False)
    L, R = weighted_factors(prepared, loop, inputs=False)
    values = np.linalg.svd(R @ L)[1]
    assert np.abs(values - printed["hsv"]).max() <= PRINTED
    small = reduce_states(*controller, sampled=False, order=printed["order"], loop=loop)
    assert small.order == 2 and small.kept_poles.real == pytest.approx([printed["A"][0][0]], abs=PRINTED)
    closed = np.block([[A + B @ small.D @ C, B @ small.C], [small.B @ C, small.A]])
    assert np.linalg.eigvals(closed).real.max() < 0
    assert Request(order=2, loop=loop).by_bound is False
