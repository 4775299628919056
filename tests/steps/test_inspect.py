"""What `inspect` says: new fields, and remarks that speak when they should and are silent when they should be."""

from __future__ import annotations

import json
import re

import numpy as np
import pytest

import realize
from realize import FrequencyResponse, PoleResidue, StateSpace, TimeBase, TransferFunction, ZeroPoleGain, inspect
from realize.schema import KINDS, VERBS
from realize.steps.findings import Finding
from realize.testing.catalogue import CATALOGUE

HERTZ = 2 * np.pi


def flexible(frequencies, damping, B, C):
    w = HERTZ * np.asarray(frequencies)
    n = 2 * w.size
    A = np.zeros((n, n))
    for k, (wk, zk) in enumerate(zip(w, damping, strict=True)):
        A[2 * k : 2 * k + 2, 2 * k : 2 * k + 2] = [[0, 1], [-(wk**2), -2 * zk * wk]]
    B, C = np.atleast_2d(B), np.atleast_2d(C)
    inputs, outputs = np.zeros((n, B.shape[1])), np.zeros((C.shape[0], n))
    inputs[1::2], outputs[:, ::2] = B, C
    return StateSpace(A=A, B=inputs, C=outputs)


def subjects(model):
    record = inspect(model)
    json.dumps(record, allow_nan=False)
    return {finding["subject"]: finding for finding in record["findings"]}


PLAIN = {
    "lag": ZeroPoleGain(zeros=[], poles=[-3.0], gain=2.0),
    "servo": TransferFunction(numerator=[20.0], denominator=[1.0, 3.7, 20.0]),
    "two modes": flexible([3.1, 17.3], [0.01, 0.02], [[1.0], [0.7]], [[1.0, 0.4]]),
    "two by two": flexible([3.1, 17.3], [0.01, 0.02], [[1.0, 0.2], [0.7, 1.0]], [[1.0, 0.4], [0.1, 1.0]]),
    "sampled": ZeroPoleGain(
        zeros=[-0.9], poles=[0.9 + 0.1j, 0.9 - 0.1j], gain=0.1, time=TimeBase("sampled", period=0.01)
    ),
    "constant": TransferFunction(numerator=[3.0], denominator=[2.0]),
}


@pytest.mark.parametrize("name", list(PLAIN))
def test_nothing_wrong_nothing_said(name):
    assert subjects(PLAIN[name]) == {}


@pytest.mark.parametrize("name", list(CATALOGUE))
def test_damping_and_frequency_stand_beside_the_poles(name):
    record = inspect(CATALOGUE[name].make())
    json.dumps(record, allow_nan=False)
    period = record["time"].get("period")
    assert len(record["poles"]) == len(record["damping"]) == len(record["frequency"])
    for (re_, im, _), z, w in zip(record["poles"], record["damping"], record["frequency"], strict=True):
        pole = complex(re_, im)
        if period is not None:
            if pole == 0:
                assert z is None and w is None
                continue
            pole = complex(np.log(pole)) / period
        assert w == pytest.approx(abs(pole), rel=1e-12, abs=1e-300)
        assert z is None if pole == 0 else z == pytest.approx(-pole.real / abs(pole), rel=1e-9, abs=1e-12)


def test_damping_of_sampled_poles_near_one_keeps_its_digits():
    z, T = np.exp(complex(-1e-9, 1e-5)), 1e-5
    plant = ZeroPoleGain(zeros=[], poles=[z, z.conjugate()], gain=1.0, time=TimeBase("sampled", period=T))
    record = inspect(plant)
    # of the pole as its doubles are, in exact arithmetic
    from flint import acb, arb

    from realize.kernels.exact.numbers import precision

    with precision(200):
        s = acb(arb(z.real), arb(z.imag)).log() / arb(T)
        truth = float((-s.real / abs(s)).mid())
    assert record["damping"][0] == pytest.approx(truth, rel=1e-14)


def test_unstable_damping_is_negative():
    record = inspect(ZeroPoleGain(zeros=[], poles=[3 + 4j, 3 - 4j, -1.0], gain=1.0))
    assert record["damping"] == [1.0, -0.6, -0.6] and record["frequency"] == [1.0, 5.0, 5.0]
    assert record["hankel_singular_values"] is record["hankel_errors"] is record["hankel_basis"] is None


def test_indices_and_relative_degrees_agree_between_kinds():
    first = flexible([3.1, 17.3], [0.01, 0.02], [[1.0, 0.0], [0.7, 1.0]], [[1.0, 0.0], [0.5, 1.0], [0.0, 0.0]])
    record = inspect(first)
    assert record["controllability_indices"] == [2, 2] and record["observability_indices"] == [2, 2, 0]
    assert record["relative_degree"] == [[2, None], [2, 2], [None, None]]
    other = inspect(realize.convert(first, to="pole-residue").model)
    assert other["controllability_indices"] == [2, 2] and other["observability_indices"] == [2, 2, 0]


def test_indices_that_are_unknown_are_null():
    improper = inspect(TransferFunction(numerator=[1.0, 0.0, 0.0], denominator=[1.0, 1.0]))
    assert improper["controllability_indices"] is None and improper["relative_degree"] == [[-1]]
    assert improper["hankel_singular_values"] is None
    descriptor = inspect(StateSpace(A=[[-1.0]], B=[[1.0]], C=[[1.0]], E=[[2.0]]))
    assert descriptor["controllability_indices"] is None and descriptor["scaling"] is None
    nothing = inspect(StateSpace(A=np.zeros((0, 0)), B=np.zeros((0, 2)), C=np.zeros((1, 0)), D=[[1.0, 0.0]]))
    assert nothing["controllability_indices"] == [0, 0] and nothing["relative_degree"] == [[0, None]]


def test_nearly_cancelling_pairs_with_their_distance():
    plant = ZeroPoleGain(zeros=[-1.0000000003, -5.0], poles=[-1.0, -2.0, -3.0], gain=1.0)
    found = subjects(plant)
    assert "3.0e-10 apart" in found["cancellation"]["what"] and "0.1592 Hz" in found["cancellation"]["what"]
    assert "cancellation" not in subjects(ZeroPoleGain(zeros=[-1.00001], poles=[-1.0, -2.0], gain=1.0))
    exact = inspect(ZeroPoleGain(zeros=[-1.0], poles=[-1.0, -2.0], gain=1.0))
    assert exact["minimal_order"] == 1 and exact["hankel_singular_values"][1] == 0.0
    assert [f["subject"] for f in exact["findings"]] == ["order"]


def test_weak_modes_and_which_side_is_to_blame():
    B, C = [[1.0], [1.0], [1e-9]], [[1.0, 1.0, 1.0]]
    inputs = subjects(flexible([3.1, 11.3, 41.0], [0.01] * 3, B, C))["weak modes"]
    assert "41 Hz" in inputs["what"] and "inputs hardly reach" in inputs["what"]
    outputs = subjects(flexible([3.1, 11.3, 41.0], [0.01] * 3, np.transpose(C), np.transpose(B)))["weak modes"]
    assert "outputs hardly see" in outputs["what"]


def test_hidden_modes_are_named_with_their_side():
    found = subjects(StateSpace(A=np.diag([-1.0, -2.0, -3.0]), B=[[1.0], [0.0], [1.0]], C=[[1.0, 1.0, 0.0]]))
    what = found["order"]["what"]
    assert "minimal order is 1" in what
    assert re.search(r"reach of the inputs: -2\.", what) and re.search(r"seen at the outputs: -3\.", what)
    assert "weak modes" not in found


def test_badly_scaled_states_and_what_scaling_would_gain():
    plant = PLAIN["two by two"]
    d = np.array([1e8, 1e-3, 1e5, 1e-7])
    bad = StateSpace(A=plant.A * d[:, None] / d, B=plant.B * d[:, None], C=plant.C / d)
    assert "scaled" in subjects(bad)["scaling"]["advice"]
    scaling = inspect(bad)["scaling"]
    assert scaling["ratio"] == pytest.approx(scaling["before"] / scaling["after"]) and scaling["ratio"] > 1e4
    exponents = np.array(scaling["states"])
    assert scaling["condition"] == 2.0 ** int(exponents.max() - exponents.min())
    better = realize.convert(bad, to="state-space", form="scaled").model
    assert inspect(better)["scaling"]["ratio"] < 100


def test_coefficients_in_the_wrong_unit_of_time():
    w = HERTZ * 1e6
    found = subjects(TransferFunction(numerator=[w**4], denominator=[1.0, 2.6 * w, 3.4 * w**2, 2.6 * w**3, w**4]))
    assert "zero-pole-gain" in found["scaling"]["advice"]


def test_units_that_look_wrong():
    assert "gain" in subjects(ZeroPoleGain(zeros=[], poles=[-3.0], gain=1e10))["units"]["what"]
    assert "gain" in subjects(ZeroPoleGain(zeros=[], poles=[-3.0], gain=1e-10))["units"]["what"]
    one = [[1.0, 3.0]]
    apart = TransferFunction(numerator=[[[1.0]], [[1e-11]]], denominator=[one, one])
    assert "Channels differ" in subjects(apart)["units"]["what"]
    hertz = subjects(
        ZeroPoleGain(zeros=[], poles=[complex(-1, 49.98999899979995), complex(-1, -49.98999899979995)], gain=2500.0)
    )
    assert "look like Hz" in hertz["units"]["what"] and "2 pi" in hertz["units"]["advice"]


def test_time_scales_damping_sampling_dead_time():
    assert "cascade" in subjects(ZeroPoleGain(zeros=[], poles=[-1e-3, -1e7], gain=1e4))["time scales"]["advice"]
    light = subjects(flexible([3.1, 17.3], [0.01, 1e-5], [[1.0], [0.7]], [[1.0, 0.4]]))["damping"]
    assert "17.3 Hz" in light["what"] and "1.0e-05" in light["what"]
    slow = ZeroPoleGain(zeros=[], poles=[0.9999999], gain=1e-7, time=TimeBase("sampled", period=1e-6))
    assert "crowd at z = 1" in subjects(slow)["sampling"]["what"]
    late = TransferFunction(
        numerator=[1.0], denominator=[1e-3, 1.0], dead_time=realize.DeadTime([20.0], [0.0], [[0.0]])
    )
    assert "seconds" in subjects(late)["dead time"]["advice"]


def test_many_small_values_and_noise(monkeypatch):
    n = 20
    A = -2 * np.eye(n) + np.diag(np.ones(n - 1), 1) + np.diag(np.ones(n - 1), -1)
    ladder = StateSpace(A=A, B=np.eye(n)[:, :1], C=np.eye(n)[-1:])
    assert "reduce" in subjects(ladder)["order"]["advice"]
    from realize.steps import hankel

    monkeypatch.setattr(hankel, "BUDGET", 0.0)
    said = " ".join(inspect(StateSpace(A=A, B=np.eye(n)[:, :1], C=np.eye(n)[-1:]))["cautions"])
    assert "in double arithmetic" in said


def test_data_has_remarks_too():
    f = np.geomspace(1.0, 1000.0, 20)
    data = FrequencyResponse(frequency=f, frequency_unit="rad/s", response=(1 / (1j * f + 10))[:, None, None])
    found = subjects(data)
    assert "look like Hz" in found["units"]["what"] and "noise" in found
    right = FrequencyResponse(frequency=f, frequency_unit="Hz", response=(1 / (1j * f + 10))[:, None, None])
    assert "units" not in subjects(right)


def test_every_advice_names_verbs_forms_and_kinds_that_exist():
    import inspect as python_inspect

    from realize.steps import findings

    source = python_inspect.getsource(findings)
    forms = next(option for option in VERBS["convert"].options if option.name == "form").choices
    named = re.findall(r"`([^`\n]*)`", "".join(re.findall(r'"([^"\n]*)"', source)))
    assert len(named) > 5
    for text in named:
        first = text.split()[0]
        assert first in VERBS or first in ("--form", "--digits"), text
        for form in re.findall(r"--form ([a-z-]+)", text):
            assert form in forms, text
        for kind in re.findall(r"--to ([a-z-]+)", text):
            assert kind in KINDS, text


def test_cautions_are_the_findings_as_sentences():
    record = inspect(ZeroPoleGain(zeros=[], poles=[-1e-3, -1e7, 2.0], gain=1e4))
    assert record["cautions"] == [Finding(**finding).sentence for finding in record["findings"]]
    assert len(record["cautions"]) >= 2


def test_residues_without_exact_poles():
    record = inspect(PoleResidue(poles=[-1 + 2j, -1 - 2j], residues=[[[1j]], [[-1j]]], direct=[[0.5]]))
    assert record["relative_degree"] == [[0]] and record["controllability_indices"] == [2]
