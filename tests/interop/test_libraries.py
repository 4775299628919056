"""Objects of other libraries go in and out without loss."""

from __future__ import annotations

import copy
import pickle
from typing import Any

import numpy as np
import pytest

import realize
from realize import DeadTime, Offset, Signal, TimeBase
from realize.errors import InputError, Refused, UsageError
from realize.models import mark
from realize.testing.catalogue import CATALOGUE

control = pytest.importorskip("control")
signal = pytest.importorskip("scipy.signal")

COMMON: dict[str, Any] = {
    "time": TimeBase("sampled", rate="44100"),
    "inputs": (Signal("torque", "N*m"),),
    "outputs": (Signal("", "rad"),),
    "offset": Offset(inputs=(1.0,), outputs=(2.0,)),
    "ports": realize.Ports("admittance"),
}
STATES = realize.StateSpace(
    A=[[0.1, 0.2], [0.3, -0.4]], B=[[1], [2]], C=[[3, 1 / 3]], D=[[0.5]], states=(Signal("a", "m"), Signal()), **COMMON
)
FRACTION = realize.TransferFunction(numerator=[0.1, 7.0], denominator=[3.0, 1 / 3, 0.7], **COMMON)
ROOTS = realize.ZeroPoleGain(zeros=[0.3], poles=[0.1 + 0.2j, 0.1 - 0.2j], gain=1 / 3, **COMMON)
SQUARE = realize.TransferFunction(
    numerator=[[[1.0], [2.0, 1.0]], [[0.0], [5.0]]], denominator=[[[1.0, 2.0], [1.0, 3.0, 1.0]], [[1.0], [7.0, 1.0]]]
)
DATA = realize.FrequencyResponse(frequency=[1.0, 2.0], frequency_unit="rad/s", response=[[[1 + 1j, 2.0]], [[3.0, 4j]]])


@pytest.mark.parametrize(
    ("model", "library"),
    [
        (STATES, "control"), (STATES, "scipy.signal"), (FRACTION, "control"), (FRACTION, "scipy.signal"),
        (ROOTS, "scipy.signal"), (SQUARE, "control"), (DATA, "control"),
        (realize.StateSpace(A=np.zeros((0, 0)), B=np.zeros((0, 1)), C=np.zeros((1, 0)), D=[[2.0]]), "control"),
    ],
)  # fmt: skip
def test_there_and_back(model: Any, library: str) -> None:
    there = realize.to_library(model, library)
    back = realize.from_library(there)
    assert mark(back) == mark(model)
    assert back.time == model.time and back.inputs == model.inputs and back.offset == model.offset
    assert back.ports == model.ports
    if isinstance(model, realize.StateSpace) and model.order:
        assert back.states == model.states
    again = realize.from_library(copy.deepcopy(there))
    assert mark(again) == mark(model)


def test_the_other_library_sees_the_same_plant() -> None:
    point = np.exp(0.3j)
    expected = FRACTION.evaluate(point)[0, 0]
    assert realize.to_library(FRACTION)(point) == pytest.approx(expected, rel=1e-13)
    there = realize.to_library(ROOTS, "scipy.signal")
    w, h = signal.dfreqresp(there, w=[0.3])
    assert h[0] == pytest.approx(ROOTS.evaluate(np.exp(1j * w[0]))[0, 0], rel=1e-13)
    assert realize.to_library(STATES).dt == 1 / 44100
    assert realize.to_library(STATES).input_labels == ["torque"]


def test_their_objects_from_their_own_hands() -> None:
    G = control.ss([[-1.0]], [[1.0, 2.0]], [[1.0]], [[0.0, 0.0]], inputs=["a", "b"], states=["q"], dt=0.1)
    model = realize.from_library(G)
    assert [s.name for s in model.inputs] == ["a", "b"] and model.outputs[0].name == "" and model.states[0].name == "q"
    assert model.time == TimeBase("sampled", period=0.1)
    back = realize.to_library(model)
    assert (back.input_labels, back.output_labels, back.state_labels, back.dt) == (["a", "b"], ["y[0]"], ["q"], 0.1)
    assert np.array_equal(back.B, G.B)
    changed = realize.to_library(STATES)
    changed.dt = 0.5
    assert realize.from_library(changed).time == TimeBase("sampled", period=0.5)
    for wrong in (control.tf([1], [1, 2], True), signal.dlti([1], [1, 2]), "text", {}, None, (1,), np.eye(3)):
        with pytest.raises(InputError):
            realize.from_library(wrong)


@pytest.mark.parametrize("verb", ["convert", "minimal", "reduce", "inspect", "compare"])
def test_verbs_take_them(verb: str) -> None:
    objects = [
        control.tf([1.0], [1.0, 3.0, 2.0]), signal.lti([1.0], [1.0, 3.0, 2.0]), signal.lti([], [-1.0, -2.0], 1.0),
        ([1.0], [1.0, 3.0, 2.0]), ([], [-1.0, -2.0], 1.0),
        ([[-3.0, -2.0], [1.0, 0.0]], [[1.0], [0.0]], [[0.0, 1.0]], [[0.0]]),
        np.array([[0.0, 0.0, 1.0, 1.0, 3.0, 2.0]]),
    ]  # fmt: skip
    for value in objects:
        if verb == "inspect":
            assert realize.inspect(value)["minimal_order"] == 2
        elif verb == "compare":
            assert realize.compare(value, objects[0])["peak-error"]["value"] < 1e-14
        else:
            more = {"convert": ("state-space",)}.get(verb, ())
            made = getattr(realize, verb)(value, *more, **({"order": 1} if verb == "reduce" else {}))
            assert made.receipt.source.order == 2


def test_what_cannot_be_held_is_refused() -> None:
    dead = FRACTION.with_(time=TimeBase(), dead_time=DeadTime((0.5,), (0.0,), ((0.0,),)))
    decimal = realize.TransferFunction(
        numerator=[0.1], denominator=[1.0, 2.0], decimals={"numerator": {(0, 0, 0): "0.1"}}
    )
    descriptor = realize.StateSpace(A=[[1.0]], B=[[1.0]], C=[[1.0]], E=[[0.0]])
    for library in ("control", "scipy.signal"):
        for model in (dead, decimal, descriptor):
            with pytest.raises(Refused):
                realize.to_library(model, library)
    with pytest.raises(Refused):
        realize.to_arrays(dead)
    with pytest.raises(Refused):
        realize.to_library(SQUARE, "scipy.signal")
    with pytest.raises(UsageError):
        realize.to_library(FRACTION, "other")
    assert realize.to_library(decimal.with_(decimals={"numerator": {(0, 0, 0): "0.5"}}, numerator=[0.5])) is not None


@pytest.mark.parametrize("model", [STATES, FRACTION, ROOTS, SQUARE], ids=lambda model: model.kind)
def test_arrays_out_and_in(model: Any) -> None:
    back = realize.from_library(realize.to_arrays(model))
    assert (
        mark(back.with_(**{n: getattr(model, n) for n in ("time", "inputs", "outputs", "offset", "ports")})).order
        == model.order
    )
    for name, value in model.parameters().items():
        if name != "states" and value is not None:
            assert repr(getattr(back, name)) == repr(value)


@pytest.mark.parametrize("known", list(CATALOGUE.values())[:12], ids=lambda known: known.name)
def test_models_pickle_and_copy(known: Any) -> None:
    plant = known.make()
    made = realize.convert(plant, "state-space") if plant.shape == (1, 1) else None
    for model in [plant] + ([made.model] if made else []):
        for twin in (pickle.loads(pickle.dumps(model)), copy.copy(model), copy.deepcopy(model)):
            assert type(twin) is type(model) and mark(twin) == mark(model) and twin.receipts == model.receipts
            for value in twin.parameters().values():
                if isinstance(value, np.ndarray):
                    assert not value.flags.writeable
    if made:
        assert pickle.loads(pickle.dumps(made)).receipt == made.receipt
