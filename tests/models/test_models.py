"""Models: friendly input in, read-only arrays out, exact decimals, dead time, evaluation at any size."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from realize.errors import InputError, Refused
from realize.models import (
    DeadTime,
    FrequencyResponse,
    Offset,
    PoleResidue,
    Ports,
    Sections,
    Signal,
    StateSpace,
    TimeBase,
    TransferFunction,
    ZeroPoleGain,
    digest,
)


@pytest.mark.parametrize("wrap", [list, tuple, np.array])
def test_ragged_channels_of_any_nesting(wrap: Any) -> None:
    numerator = [[wrap([1.0]), wrap([2.0, 1.0])], [wrap([0.0]), wrap([3.0])]]
    denominator = [[wrap([1.0, 1.0]), wrap([1.0, 2.0, 5.0])], [wrap([1.0]), wrap([1.0, 1.0])]]
    model = TransferFunction(numerator=numerator, denominator=tuple(denominator))
    assert model.shape == (2, 2)
    assert model.evaluate(0.0)[0, 1] == pytest.approx(0.2)
    assert model.evaluate(0.0)[1, 1] == pytest.approx(3.0)


def test_one_denominator_serves_all() -> None:
    model = TransferFunction(numerator=[[[1.0], [2.0]]], denominator=[1.0, 1.0])
    assert model.shape == (1, 2) and model.order == 1
    assert model.evaluate(1.0)[0].tolist() == [0.5, 1.0]


BAD: list[tuple[Any, str]] = [
    (lambda: TransferFunction(numerator=[1.0, float("nan")], denominator=[1.0]), "numerator[0][0][1]"),
    (lambda: TransferFunction(numerator=[1.0], denominator=[0.0, 0.0]), "denominator[0][0]"),
    (lambda: TransferFunction(numerator=[[[1.0], [2.0]], [[3.0]]], denominator=[1.0]), "numerator[1]"),
    (lambda: TransferFunction(numerator=["a"], denominator=[1.0]), "numerator[0][0]"),
    (lambda: TransferFunction(numerator=[True], denominator=[1.0]), "numerator[0][0]"),
    (lambda: ZeroPoleGain(zeros=[], poles=[1j], gain=1.0), "poles[0][0][0]"),
    (lambda: ZeroPoleGain(zeros=[], poles=[], gain=float("inf")), "gain[0][0]"),
    (lambda: PoleResidue(poles=[-1.0], residues=[[[1j]]]), "residues[0]"),
    (lambda: PoleResidue(poles=[-1.0, -1.0], residues=[[[1.0]], [[1.0]]]), "poles[1]"),
    (lambda: PoleResidue(poles=[-1.0], residues=[[[1.0]]], powers=[0]), "powers[0]"),
    (lambda: Sections(sections=[[[1, 2, 3], [0, 0, 0]]]), "sections[0].denominator"),
    (lambda: StateSpace(A=[[1.0, 2.0]], B=[[1.0]], C=[[1.0]]), "A"),
    (lambda: StateSpace(A=[[1.0]], B=[[1.0]], C=[[1.0]], D=[[1.0, 2.0]]), "D"),
    (lambda: StateSpace(A=[[1.0]], B=[[1.0]], C=[[1.0]], inputs=(Signal("a"), Signal("b"))), "inputs"),
    (lambda: StateSpace(A=[[1.0]], B=[[1.0]], C=[[1.0]], offset=Offset(states=(1.0, 2.0))), "offset.states"),
    (lambda: StateSpace(A=[[1.0]], B=[[1.0]], C=[[1.0], [2.0]], ports=Ports("impedance")), "ports"),
    (lambda: StateSpace(A=[[1.0]], B=[[1.0]], C=[[1.0]], ports=Ports("scattering")), "ports.reference"),
    (lambda: TimeBase("sampled"), "time"),
    (lambda: TimeBase("sampled", period=-1.0), "time.period"),
    (lambda: TimeBase("sampled", period=1.0, rate=1.0), "time"),
    (lambda: TimeBase("continuous", period=1.0), "time.period"),
    (lambda: FrequencyResponse(frequency=[2, 1], frequency_unit="Hz", response=[[[1]], [[1]]]), "frequency[1]"),
    (lambda: FrequencyResponse(frequency=[1], frequency_unit="kHz", response=[[[1]]]), "frequency_unit"),
    (
        lambda: TransferFunction(
            numerator=[1.0],
            denominator=[1.0],
            time=TimeBase("sampled", period=0.5),
            dead_time=DeadTime((0.3,), (0.0,), ((0.0,),)),
        ),
        "dead_time",
    ),
]


@pytest.mark.parametrize("k", range(len(BAD)))
def test_what_is_wrong_is_named(k: int) -> None:
    make, field = BAD[k]
    with pytest.raises(InputError) as caught:
        make()
    assert caught.value.field == field


def test_decimals_are_exact_and_leading_zeros_take_them_along() -> None:
    model = TransferFunction(numerator=[0.0, 0.1], denominator=[1.0, 0.3], decimals={"numerator": {(0, 0, 1): "0.1"}})
    assert model.exact("numerator") == [[[(1, 10)]]]
    assert model.exact("denominator")[0][0][1] == (0.3).as_integer_ratio()


def test_dead_time_adds_up_and_turns_the_phase() -> None:
    model = TransferFunction(numerator=[2.0], denominator=[1.0], dead_time=DeadTime((0.1,), (0.2,), ((0.3,),)))
    assert model.evaluate(1j)[0, 0] == pytest.approx(2 * np.exp(-0.6j))
    sampled = TransferFunction(
        numerator=[2.0],
        denominator=[1.0],
        time=TimeBase("sampled", period=0.1),
        dead_time=DeadTime((0.3,), (0.0,), ((0.0,),)),
    )
    assert sampled.evaluate(2.0)[0, 0] == pytest.approx(2 * 2.0**-3)


@pytest.mark.parametrize("size", [1e-300, 1e-150, 1.0, 1e150, 1e300])
def test_evaluation_at_any_size(size: float) -> None:
    """size/(s + size) at s = j size is 1/(1 + j)."""
    expected = 1 / (1 + 1j)
    models = [
        TransferFunction(numerator=[size], denominator=[1.0, size]),
        ZeroPoleGain(zeros=[], poles=[-size], gain=size),
        PoleResidue(poles=[-size], residues=[[[size]]]),
        Sections(sections=[[[0, 0, size], [0, 1, size]]]),
        StateSpace(A=[[-size]], B=[[size]], C=[[1.0]]),
    ]
    for model in models:
        assert model.evaluate(1j * size)[0, 0] == pytest.approx(expected, rel=1e-15), model.kind


def test_a_pole_is_infinite_without_a_warning() -> None:
    for model in (
        TransferFunction(numerator=[1.0], denominator=[1.0, 1.0]),
        ZeroPoleGain(zeros=[], poles=[-1.0], gain=1.0),
        PoleResidue(poles=[-1.0], residues=[[[1.0]]]),
        StateSpace(A=[[-1.0]], B=[[1.0]], C=[[1.0]]),
    ):
        assert np.isinf(model.evaluate(-1.0)[0, 0]), model.kind
        assert model.evaluate([[0.0, -1.0]]).shape == (1, 2, 1, 1)


def test_data_have_no_value_between_their_lines() -> None:
    data = FrequencyResponse(frequency=[1.0], frequency_unit="Hz", response=[[[1.0]]])
    with pytest.raises(Refused):
        data.evaluate(1j)


def test_arrays_are_copied_and_read_only() -> None:
    A = np.array([[-1.0]])
    model = StateSpace(A=A, B=[[1.0]], C=[[1.0]])
    A[0, 0] = 5.0
    assert model.A[0, 0] == -1.0
    with pytest.raises(ValueError, match="read-only"):
        model.A[0, 0] = 2.0


def test_digests() -> None:
    first = TransferFunction(numerator=[1.0, 0.0], denominator=[1.0, 1.0])
    assert digest(first) == digest(TransferFunction(numerator=[1.0, -0.0], denominator=[1.0, 1.0]))
    assert digest(first) == digest(TransferFunction(numerator=[0.0, 1.0, 0.0], denominator=[1.0, 1.0]))
    for other in (
        TransferFunction(numerator=[1.0, 1e-300], denominator=[1.0, 1.0]),
        first.with_(inputs=(Signal("u"),)),
        first.with_(time=TimeBase("sampled", period=1.0)),
        first.with_(dead_time=DeadTime((1.0,), (0.0,), ((0.0,),))),
        first.with_(decimals={"numerator": {(0, 0, 0): "1.0000000000000000000001"}}),
    ):
        assert digest(other) != digest(first)
