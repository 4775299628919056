"""Minimal realization: orders, kinds kept, what the receipt says."""

from __future__ import annotations

import random
from typing import Any

import numpy as np
import pytest

import realize
from realize.models import (
    DeadTime,
    Offset,
    PoleResidue,
    Sections,
    Signal,
    StateSpace,
    TimeBase,
    TransferFunction,
    ZeroPoleGain,
)

EPS = 2.0**-52


def details(model: Any, **options: Any) -> dict[str, Any]:
    return realize.minimal(model, **options).receipt.details


def sheared(
    seed: int, n: int, visible: int, m: int, p: int, shears: int, distinct: bool = True
) -> tuple[np.ndarray, np.ndarray, np.ndarray, float]:
    """An integer model with hidden states, after integer shears; last the condition number of the shears together."""
    draw = random.Random(seed)
    poles = draw.sample(range(1, 3 * n), n) if distinct else [draw.randint(1, 6) for _ in range(n)]
    middle = visible + (n - visible) // 2
    A = np.zeros((n, n), dtype=object)
    B = np.array([[draw.choice([-2, -1, 1, 2]) for _ in range(m)] for _ in range(n)], dtype=object)
    C = np.array([[draw.choice([-2, -1, 1, 2]) for _ in range(n)] for _ in range(p)], dtype=object)
    for i in range(n):
        A[i, i] = -poles[i]
        for j in range(n):
            if (i < visible <= j < middle) or (i >= middle and j < visible):
                A[i, j] = draw.randint(-1, 1)
    B[visible:middle] = 0
    C[:, middle:] = 0
    T = np.eye(n)
    for _ in range(shears):
        i, j = draw.sample(range(n), 2)
        factor = draw.choice([-1, 1])
        A[i] += factor * A[j]
        B[i] += factor * B[j]
        A[:, j] -= factor * A[:, i]
        C[:, j] -= factor * C[:, i]
        T[i] += factor * T[j]
    return A.astype(float), B.astype(float), C.astype(float), float(np.linalg.cond(T))


@pytest.mark.parametrize(("seed", "n", "visible", "m", "p"), [(1, 11, 6, 1, 1), (2, 13, 8, 2, 2), (3, 16, 9, 1, 3)])
def test_hidden_states_under_shears_and_units(seed: int, n: int, visible: int, m: int, p: int) -> None:
    A, B, C, _ = sheared(seed, n, visible, m, p, 2 * n)
    draw = np.random.default_rng(seed)
    states, inputs, outputs = (2.0 ** draw.integers(-20, 21, k) for k in (n, m, p))
    model = StateSpace(
        A=A * states[:, None] / states * 2.0**20, B=B * states[:, None] * inputs, C=C / states * outputs[:, None]
    )
    made = realize.minimal(model, exact=True)
    assert made.receipt.details["order"] == made.model.order == visible
    assert made.receipt.claim("order").basis == "proved"
    assert made.receipt.claim("peak-error").value < 1e-14
    assert made.receipt.claim("peak-error").basis == "proved"
    assert sum(row["states"] for row in made.receipt.details["removed"]) == n - visible
    assert not made.receipt.failed


@pytest.mark.parametrize("seed", range(6))
def test_the_same_rounded_to_doubles(seed: int) -> None:
    n, visible = 11, 7
    A, B, C, condition = sheared(seed, n, visible, 2, 2, n)
    assert condition < 1e6
    d = np.random.default_rng(seed).uniform(0.5, 2, n)
    model = StateSpace(A=0.1 * A * d[:, None] / d, B=0.3 * B * d[:, None], C=C / d / 7)
    assert details(model, exact=True)["order"] > visible
    made = realize.minimal(model)
    assert made.receipt.details["order"] == made.model.order == visible
    gap = made.receipt.details["gap"]
    assert gap["threshold"] == 4 * n * EPS
    assert gap["dropped"] <= gap["threshold"] < gap["kept"]
    assert not made.receipt.failed


def test_reasons_are_told_apart() -> None:
    A = np.diag([-1.0, -2.0, -3.0, -4.0])
    A[0, 1] = A[2, 0] = 1.0
    model = StateSpace(A=A, B=[[1.0], [0.0], [1.0], [0.0]], C=[[1.0, 1.0, 0.0, 0.0]])
    for options in ({"exact": True}, {}):
        rows = {row["pole"][0]: row["why"] for row in details(model, **options)["removed"]}
        assert rows == {-2.0: "unreachable", -3.0: "unobservable", -4.0: "unreachable and unobservable"}


def test_the_same_reasons_in_turned_axes() -> None:
    A, B, C = np.diag([-1.0, -2.0, -3.0, -4.0]), np.array([[1.0], [0], [1], [0]]), np.array([[1.0, 1, 0, 0]])
    T = np.array([[1.0, 2, 0, 1], [0, 1, 1, 0], [1, 2, 1, 1], [0, 1, 0, 1]])
    inverse = np.linalg.inv(T).round()
    assert np.array_equal(inverse @ T, np.eye(4))
    made = realize.minimal(StateSpace(A=T @ A @ inverse, B=T @ B, C=C @ inverse), exact=True)
    rows = {row["pole"][0]: row["why"] for row in made.receipt.details["removed"]}
    assert rows == {-2.0: "unreachable", -3.0: "unobservable", -4.0: "unreachable and unobservable"}
    assert made.model.order == 1


def test_a_structurally_hidden_state_leaves_all_other_numbers_alone() -> None:
    model = StateSpace(
        A=[[-0.1, 0.7], [0.0, -0.3]],
        B=[[0.9], [0.0]],
        C=[[1.1, 0.2]],
        states=[Signal("x", "m"), Signal("y")],
        offset=Offset(states=(3.0, 4.0)),
        decimals={"A": {(0, 0): "-0.1"}},
    )
    made = realize.minimal(model).model
    assert made.A.tolist() == [[-0.1]] and made.B.tolist() == [[0.9]] and made.C.tolist() == [[1.1]]
    assert made.states == (Signal("x", "m"),)
    assert made.offset == Offset(states=(3.0,))
    assert made.decimals["A"] == {(0, 0): "-0.1"}


def test_a_minimal_model_is_left_as_it_is() -> None:
    for model in (
        StateSpace(A=[[0.0, 1.0], [-4.0, -0.1]], B=[[0.0], [1.0]], C=[[1.0, 0.0]]),
        TransferFunction(numerator=[1.0, 2.0], denominator=[1.0, 3.0, 5.0]),
        ZeroPoleGain(zeros=[-1.0], poles=[-2.0, -3.0], gain=2.0),
        PoleResidue(poles=[-1.0, -2.0], residues=[[[1.0]], [[2.0]]]),
        Sections(sections=[[[0.0, 1.0, 2.0], [1.0, 3.0, 5.0]]]),
        StateSpace(A=np.zeros((0, 0)), B=np.zeros((0, 1)), C=np.zeros((1, 0)), D=[[2.0]]),
    ):
        for exact in (True, False):
            made = realize.minimal(model, exact=exact)
            for name, value in model.parameters().items():
                after = made.model.parameters()[name]
                assert repr(after) == repr(value)
            assert made.receipt.claim("peak-error").value == 0.0
            assert made.receipt.details["removed"] == []


def test_decimals_cancel_as_typed() -> None:
    text = {
        "numerator": {(0, 0, 1): "2.4", (0, 0, 2): "0.23"},
        "denominator": {(0, 0, 1): "6.1", (0, 0, 2): "9.11", (0, 0, 3): "0.851"},
    }
    # (s + 0.1)(s + 2.3) over (s + 0.1)(s + 2.3)(s + 3.7)
    model = TransferFunction(numerator=[1, 2.4, 0.23], denominator=[1, 6.1, 9.11, 0.851], decimals=text)
    made = realize.minimal(model, exact=True)
    assert made.model.numerator[0][0].tolist() == [1.0]
    assert made.model.exact("denominator")[0][0] == [(1, 1), (37, 10)]
    assert [row["pole"] for row in made.receipt.details["removed"]] == [[-0.1, 0.0], [-2.3, 0.0]]
    doubles = TransferFunction(numerator=[1, 2.4, 0.23], denominator=[1, 6.1, 9.11, 0.851])
    assert details(doubles, exact=True)["order"] == 3
    assert details(doubles)["order"] == 1


def test_notches_that_are_off_stay() -> None:
    near = 1 + 1e-10
    notch = ZeroPoleGain(zeros=[-1e-3 + 1j * near, -1e-3 - 1j * near], poles=[-1e-3 + 1j, -1e-3 - 1j, -3.0], gain=1.0)
    assert details(notch)["order"] == 3
    assert details(notch, exact=True)["order"] == 3
    zeros = [-1.0 * near, -2.0]
    coefficients = TransferFunction(numerator=np.poly(zeros), denominator=np.poly([-1.0, -3.0, -4.0]))
    assert details(coefficients, exact=True)["order"] == 3
    found = details(coefficients)
    assert found["order"] == 3 and not found["ambiguous"]
    closer = TransferFunction(numerator=np.poly([-1.0 - 1e-13, -2.0]), denominator=np.poly([-1.0, -3.0, -4.0]))
    assert details(closer)["ambiguous"]


def test_equal_pairs_of_zeros_and_poles_go_and_the_rest_stays() -> None:
    model = ZeroPoleGain(
        zeros=[-1 + 2j, -1 - 2j, -0.1, -5.0], poles=[-3.0, -1 + 2j, -1 - 2j, -0.1, -1 + 2j, -1 - 2j], gain=0.7
    )
    made = realize.minimal(model, exact=True).model
    assert made.poles[0][0].tolist() == [-3.0, -1 + 2j, -1 - 2j]
    assert made.zeros[0][0].tolist() == [-5.0]
    assert made.gain[0, 0] == 0.7


def test_residues_that_are_zero_and_poles_that_meet() -> None:
    model = PoleResidue(
        poles=[-1.0, -2.0, -2.0, -5.0], powers=[1, 1, 2, 1], residues=[[[1.0]], [[3.0]], [[0.0]], [[0.0]]]
    )
    made = realize.minimal(model, exact=True)
    assert made.model.poles.tolist() == [-1.0, -2.0] and made.receipt.details["order"] == 2
    twin = PoleResidue(poles=[-0.3, -0.1 - 0.2, -4.0], residues=[[[1.0]], [[2.0]], [[1.0]]])
    assert twin.poles[0] != twin.poles[1]
    assert details(twin, exact=True)["order"] == 3
    merged = realize.minimal(twin)
    assert merged.model.residues[:, 0, 0].real.tolist() == [3.0, 1.0]
    assert merged.receipt.claim("peak-error").value < 1e-14


def test_factors_cancel_across_sections() -> None:
    model = Sections(sections=[[[1, 3, 2], [1, 4, 3]], [[1, 9, 20.0], [1, 7, 10]], [[0, 1, 2], [0, 1, 4]]], gain=3.0)
    made = realize.minimal(model, exact=True)
    assert made.model.order == 1
    s = np.array([0.3j, 2.0 + 1j])
    np.testing.assert_allclose(made.model.evaluate(s)[:, 0, 0], 3 * (s + 2) / (s + 3), rtol=1e-14)


def test_channels_keep_their_place() -> None:
    model = TransferFunction(
        numerator=[[[1.0, 1.0], [1.0]], [[0.0], [2.0, 6.0]]],
        denominator=[[[1.0, 3.0, 2.0], [1.0, 2.0]], [[1.0, 5.0], [1.0, 7.0, 12.0]]],
    )
    made = realize.minimal(model, exact=True)
    assert [[d.tolist() for d in row] for row in made.model.denominator] == [[[1, 2], [1, 2]], [[1], [1, 4]]]
    places = {(row["output"], row["input"], row["pole"][0]) for row in made.receipt.details["removed"]}
    assert places == {(0, 0, -1.0), (1, 0, -5.0), (1, 1, -3.0)}
    # 1/(s + 2) twice in one row is one state
    assert made.receipt.details["order"] == 2


def test_series_and_parallel_connections_cancel_exactly() -> None:
    # (s + z)/(s + p) in series with (s + p)/(s + z), then 1/(s + 0.3) added and taken away again, 1/(s + 4) added
    z, p = 0.125, 0.75
    A = np.diag([-p, -z, -0.3, -0.3, -4.0])
    A[1, 0] = z - p
    B = np.ones((5, 1))
    C = np.array([[z - p, p - z, 1.0, -1.0, 1.0]])
    made = realize.minimal(StateSpace(A=A, B=B, C=C, D=[[1.0]]), exact=True)
    assert made.model.order == made.receipt.details["order"] == 1
    removed = [row["pole"][0] for row in made.receipt.details["removed"] for _ in range(row["states"])]
    assert sorted(removed) == sorted([-z, -0.3, -0.3, -p])
    s = np.array([1j])
    np.testing.assert_allclose(made.model.evaluate(s)[0, 0, 0], 1 + 1 / (1j + 4), rtol=1e-15)


def test_a_badly_scaled_companion_form_keeps_its_order() -> None:
    poles = 2000 * np.pi * np.exp(1j * np.pi * (0.5 + (2 * np.arange(12) + 1) / 24))
    denominator = np.poly(poles).real
    A = np.diag(np.ones(11), 1)
    A[-1] = -denominator[:0:-1]
    B, C = np.zeros((12, 1)), np.zeros((1, 12))
    B[-1], C[0, 0] = 1.0, denominator[-1]
    for options in ({}, {"exact": True}):
        found = details(StateSpace(A=A, B=B, C=C), **options)
        assert found["order"] == 12 and not found["ambiguous"]


def test_lightly_coupled_states_are_no_hidden_ones() -> None:
    for coupling in (1e-9, 1e-30, 1e-200):
        model = StateSpace(A=[[-1.0, coupling], [0.0, -2.0]], B=[[1.0], [1.0]], C=[[1.0, 0.0]])
        assert details(model)["order"] == 2
        assert details(model, exact=True)["order"] == 2


def test_what_belongs_to_the_signals_travels() -> None:
    model = StateSpace(
        A=[[-1.0, 0.0], [0.0, -1.0]],
        B=[[1.0], [1.0]],
        C=[[1.0, 1.0]],
        inputs=[Signal("u", "V")],
        outputs=[Signal("y", "m")],
        dead_time=DeadTime((0.25,), (0.0,), ((0.0,),)),
        offset=Offset((1.0,), (2.0,), (3.0, 4.0)),
    )
    made = realize.minimal(model)
    assert made.model.order == 1
    assert made.model.inputs == model.inputs and made.model.outputs == model.outputs
    assert made.model.dead_time == model.dead_time
    assert made.model.offset == Offset((1.0,), (2.0,))
    assert made.receipt.step == "minimal" and made.model.receipts[-1] == made.receipt


@pytest.mark.parametrize("exact", [True, False])
def test_sampled_unstable_and_integrating_plants(exact: bool) -> None:
    T = np.array([[1.0, 1, 0, 2], [0, 1, 1, 0], [0, 0, 1, 1], [0, 0, 0, 1]])
    inverse = np.linalg.inv(T).round()
    for poles, time in (
        ([1.0, 0.5, 0.25, -0.75], TimeBase("sampled", period=0.5)),
        ([2.0, -1.0, 0.0, -3.0], TimeBase()),
    ):
        A = np.diag(poles)
        B, C = np.array([[1.0, 0], [0, 1], [0, 0], [1, 1]]), np.array([[1.0, 1, 1, 0], [1, 0, 0, 0]])
        made = realize.minimal(StateSpace(A=T @ A @ inverse, B=T @ B, C=C @ inverse, time=time), exact=exact)
        assert made.receipt.details["order"] == made.model.order == 2
        assert made.receipt.claim("peak-error").value < 1e-13
        removed = {row["pole"][0]: row for row in made.receipt.details["removed"]}
        assert set(removed) == set(poles[2:])
        assert removed[poles[3]]["why"] == "unobservable"


def test_nothing_left() -> None:
    model = StateSpace(A=[[-1.0, 1.0], [0.0, -2.0]], B=[[1.0], [-1.0]], C=[[1.0, 1.0]], D=[[0.5]])
    made = realize.minimal(model, exact=True)
    assert made.model.order == 0 and made.model.D.tolist() == [[0.5]]
    assert made.receipt.details["order"] == 0 and made.receipt.details["runner_up"] is None


def test_descriptor_models() -> None:
    regular = StateSpace(A=[[-2.0, 1.0], [0.0, -6.0]], B=[[1.0], [0.0]], C=[[1.0, 1.0]], E=[[2.0, 1.0], [0.0, 3.0]])
    made = realize.minimal(regular, exact=True)
    assert made.model.order == 1 and made.model.E is None
    assert made.receipt.claim("peak-error").value < 1e-15
    # an algebraic state: y = x1 + (u - x1) / 2
    algebraic = StateSpace(A=[[-1.0, 0.0], [-1.0, -2.0]], B=[[1.0], [1.0]], C=[[1.0, 1.0]], E=[[1.0, 0.0], [0.0, 0.0]])
    made = realize.minimal(algebraic)
    assert made.model.order == 1
    s = np.array([0.5j])
    np.testing.assert_allclose(made.model.evaluate(s), algebraic.evaluate(s), rtol=1e-14)


def test_an_unstable_hidden_mode_is_a_caution() -> None:
    model = TransferFunction(numerator=[1.0, -1.0], denominator=[1.0, 1.0, -2.0])
    made = realize.minimal(model)
    assert made.receipt.details["order"] == 1
    assert any("run away" in caution for caution in made.receipt.cautions)


def test_runner_up_is_no_nearer_than_its_cost() -> None:
    plant = StateSpace(A=np.diag([-1.0, -10.0]), B=[[1.0], [1.0]], C=[[1.0, 1.0]])
    found = details(plant)
    assert found["runner_up"] == 1
    assert found["runner_up_cost"] == pytest.approx(0.03233 / 1.1, rel=1e-3)
    reduced = realize.reduce(plant, order=1).receipt.claim("reduction-error")
    assert reduced.relative >= found["runner_up_cost"]


def test_data_is_refused() -> None:
    data = realize.FrequencyResponse(frequency=[1.0], frequency_unit="Hz", response=[[[1.0 + 0j]]])
    with pytest.raises(realize.Refused, match="fit"):
        realize.minimal(data)


def test_the_second_opinion_names_the_order_it_found() -> None:
    pytest.importorskip("slycot")
    A, B, C, _ = sheared(1, 6, 4, 1, 1, 6)
    second = realize.minimal(StateSpace(A=A, B=B, C=C), second_opinion=True).receipt.second_opinion
    assert second.by == "slycot TB01PD (order 4)" and second.status == "agrees"
    plant = TransferFunction(numerator=[1.0, 3.0, 2.0], denominator=[1.0, 6.0, 11.0, 6.0])
    second = realize.minimal(plant, second_opinion=True).receipt.second_opinion
    assert second.by == "control minreal (order 1)" and second.status == "agrees"


@pytest.mark.parametrize("seed", range(12))
def test_orders_within_rounding_of_larger_models(seed: int) -> None:
    from realize.forms.within_rounding import hidden_within

    n, visible = 14 + seed, 9 + seed // 2
    A, B, C, condition = sheared(100 + seed, n, visible, 1 + seed % 3, 1 + seed % 2, 2 * n)
    exact = realize.minimal(StateSpace(A=A, B=B, C=C), exact=True).receipt.details["order"]
    d = np.random.default_rng(seed).uniform(0.5, 2, n)
    found = hidden_within(0.1 * A * d[:, None] / d, 0.3 * B * d[:, None], C / d / 7, None, 4 * n * EPS, sampled=False)
    assert condition < 1e6
    assert found.order == exact
