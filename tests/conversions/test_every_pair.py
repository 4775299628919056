"""Every pair of parametric kinds on a catalogue of odd plants: exact errors, honest claims, printed routes."""

from __future__ import annotations

import math
from collections.abc import Iterator
from typing import Any

import numpy as np
import pytest

from realize.conversions import ROWS, Task, plan_route
from realize.conversions.route import COORDINATE_ROWS, SMALLEST_DESCRIPTOR
from realize.errors import Refused, UsageError
from realize.models import (
    DeadTime,
    MatrixFraction,
    Model,
    Offset,
    PoleResidue,
    Ports,
    SecondOrder,
    Sections,
    Signal,
    StateSpace,
    TimeBase,
    TransferFunction,
    ZeroPoleGain,
)
from realize.schema import FORMS, UNIVERSAL_KINDS
from realize.steps import convert, explain

SAMPLED = TimeBase("sampled", period=0.01)


def tf(numerator: Any, denominator: Any, **more: Any) -> TransferFunction:
    return TransferFunction(numerator=numerator, denominator=denominator, **more)


PLANTS: dict[str, Model] = {
    "third order": tf([1.0, 2.0], [1.0, 3.0, 5.0, 7.0]),
    "constant": tf([3.5], [2.0]),
    "zero": tf([0.0], [1.0, 1.0]),
    "integrator": tf([1.0], [1.0, 0.0]),
    "double integrator with zero": tf([1.0, 1.0], [1.0, 0.0, 0.0]),
    "triple pole": tf([1.0], [1.0, 3.0, 3.0, 1.0]),
    "double pair": ZeroPoleGain(zeros=[], poles=[-1 + 2j, -1 - 2j, -1 + 2j, -1 - 2j], gain=3.0),
    "improper": tf([1.0, 2.0, 3.0, 4.0], [1.0, 3.0]),
    "differentiator": tf([1.0, 0.0], [1.0]),
    "polynomial": tf([1.0, 2.0, 0.0], [4.0]),
    "tiny gain": tf([1e-300], [1.0, 1.0]),
    "huge gain": tf([1e300], [1.0, 1.0]),
    "fast": tf([1e200], [1.0, 1e200]),
    "slow": tf([1e-200], [1.0, 1e-200]),
    "wide": ZeroPoleGain(zeros=[-1e-8], poles=[-1e-10, -1.0, -1e10], gain=1e5),
    "overflowing gain": tf([1e200], [1e-200, 1.0, 1.0]),
    "undamped": tf([1.0], [1.0, 0.0, 4.0]),
    "notch": tf([1.0, 0.0, 4.0], [1.0, 1.0, 4.0]),
    "cancelling": tf([1.0, 1.0], [1.0, 3.0, 2.0]),
    "unstable": tf([1.0, -3.0], [1.0, 0.0, -1.0]),
    "far zero": tf([1e-14, 5e-14], [1.0, 3.0, 2.0]),
    "sampled": tf([1.0, 0.5], [1.0, -1.9, 0.95], time=SAMPLED),
    "sampled integrator": tf([1.0], [1.0, -1.0], time=SAMPLED),
    "delays": tf([1.0], [1.0, 0.0, 0.0, 0.0], time=SAMPLED),
    "finite impulse response": tf([1.0, 2.0, 3.0], [1.0, 0.0, 0.0], time=SAMPLED),
    "advance": tf([1.0, 0.0, 0.0], [1.0, 0.5], time=SAMPLED),
    "near z = 1": ZeroPoleGain(zeros=[0.5], poles=[1 - 1e-9, 0.25], gain=1e-9, time=SAMPLED),
    "states": StateSpace(A=[[0.0, 1.0], [-2.0, -3.0]], B=[[0.0], [1.0]], C=[[1.0, 0.0]]),
    "no states": StateSpace(A=np.zeros((0, 0)), B=np.zeros((0, 1)), C=np.zeros((1, 0)), D=[[2.0]]),
    "not minimal": StateSpace(A=np.diag([-1.0, -2.0, 3.0]), B=[[1.0], [1.0], [0.0]], C=[[1.0, 1.0, 1.0]]),
    "algebraic state": StateSpace(A=np.diag([-1.0, 1.0]), B=[[1.0], [1.0]], C=[[1.0, 1.0]], E=np.diag([1.0, 0.0])),
    "descriptor derivative": StateSpace(A=np.eye(2), B=[[0.0], [1.0]], C=[[1.0, 0.0]], E=[[0.0, 1.0], [0.0, 0.0]]),
    "residues": PoleResidue(poles=[-1 + 2j, -1 - 2j, -3.0], residues=[[[1 + 1j]], [[1 - 1j]], [[2.0]]], direct=[[1.0]]),
    "sections": Sections(sections=[[[1, 2, 3], [1, 0.1, 4]], [[0, 1, 2], [1, 1, 1]]], gain=2.0),
    "no sections": Sections(sections=[], gain=3.0),
    "improper sections": Sections(sections=[[[1, 2, 3], [0, 1, 4]], [[0, 1, 2], [0, 1, 1]]], gain=2.0),
    "two by two": tf([[[1.0], [2.0, 1.0]], [[0.0], [3.0]]], [[[1.0, 1.0], [1.0, 2.0, 5.0]], [[1.0], [1.0, 1.0]]]),
    "two by two, repeated": tf(
        [[[1.0], [2.0]], [[1.0], [3.0, 1.0]]], [[[1.0, 2.0, 1.0], [1.0, 1.0]], [[1.0, 1.0], [1.0, 2.0, 1.0]]]
    ),
    "two by two, improper": tf(
        [[[1.0, 0.0, 1.0], [2.0, 1.0]], [[0.0], [3.0]]], [[[1.0, 1.0], [1.0, 2.0, 5.0]], [[1.0], [1.0, 1.0]]]
    ),
    "unlike units": tf([[[1.0], [2e-9]], [[3e-9], [7e-18]]], [[[1.0, 1.0]] * 2] * 2),
    "one small channel": tf([[[1.0], [0.0]], [[0.0], [1e-18]]], [[[1.0, 1.0]] * 2] * 2),
    "three outputs": tf([[[1.0]], [[2.0, 1.0]], [[5.0]]], [[[1.0, 1.0]], [[1.0, 2.0, 5.0]], [[1.0, 1.0]]]),
    "three inputs": tf([[[1.0], [2.0, 1.0], [1.0, 1.0, 1.0]]], [[[1.0, 1.0], [1.0, 2.0, 5.0], [1.0, 1.0, 1.0]]]),
    "sampled, several": tf([[[1.0], [0.25, 1.0]]], [[[1.0, -0.5], [1.0, -1.0, 0.5]]], time=SAMPLED),
    "right fraction": MatrixFraction(
        side="right",
        numerator=[[[1.0, 0.0]], [[2.0, 3.0]]],
        denominator=[[[1.0, 0.0], [0.0, 1.0]], [[3.0, 1.0], [0.0, 2.0]], [[2.0, 4.0], [1.0, 5.0]]],
    ),
    "left fraction, improper, not reduced": MatrixFraction(
        side="left",
        numerator=[[[0.0], [1.0]], [[1.0], [2.0]], [[1.0], [3.0]]],
        denominator=[[[1.0, 1.0], [0.0, 0.0]], [[3.0, 1.0], [1.0, 1.0]], [[2.0, 4.0], [1.0, 5.0]]],
    ),
    "masses and springs": SecondOrder(
        mass=[[1.0, 0.5], [0.5, 2.0]],
        damping=[[0.25, 0.0], [0.0, 0.5]],
        stiffness=[[3.0, -1.0], [-1.0, 1.0]],
        input=[[1.0], [0.0]],
        position_output=[[0.0, 1.0]],
        velocity_output=[[0.5, 0.0]],
    ),
    "several residues": PoleResidue(
        poles=[-1.0, -2.0 + 3.0j, -2.0 - 3.0j],
        residues=[[[1.0, 2.0], [0.5, 1.0]], [[1.0j, 1.0], [2.0, 1.0]], [[-1.0j, 1.0], [2.0, 1.0]]],
        direct=[[0.0, 1.0], [0.0, 0.0]],
    ),
    "several states": StateSpace(
        A=[[0.0, 1.0, 0.0], [-2.0, -3.0, 1.0], [0.0, 0.0, -4.0]],
        B=[[0.0, 1.0], [1.0, 0.0], [1.0, 1.0]],
        C=[[1.0, 0.0, 0.0], [0.0, 1.0, 1.0]],
    ),
    "decimals": ZeroPoleGain(
        zeros=[-0.3],
        poles=[-0.1, -0.2],
        gain=0.1,
        decimals={"poles": {(0, 0, 0, 0): "-0.1"}, "zeros": {(0, 0, 0, 0): "-0.3"}, "gain": {(0, 0): "0.1"}},
    ),
}

#: Conversions that cannot carry the plant in doubles and must say so with a failed claim: (plant, target).
FAILS = {
    ("wide", "pole-residue"),
    ("several states", "pole-residue"),
    ("right fraction", "pole-residue"),
}
#: Coefficients near (z - 1) cancel: what is left of 1 - 1e-9 after one rounding is off by about 1e-7.
COEFFICIENTS = ("transfer-function", "controllable-companion", "observable-companion")
#: Dense coordinates are judged by the peak error; and the plants that do not have them.
NOT_BALANCED = {
    "zero",
    "integrator",
    "double integrator with zero",
    "overflowing gain",
    "undamped",
    "cancelling",
    "unstable",
    "sampled integrator",
    "near z = 1",
    "not minimal",
}
DENSE = {
    "balanced": NOT_BALANCED,
    "input-normal": NOT_BALANCED,
    "output-normal": NOT_BALANCED - {"overflowing gain"},
    "linear-quadratic-balanced": {
        "zero",
        "huge gain",
        "wide",
        "overflowing gain",
        "cancelling",
        "near z = 1",
        "not minimal",
        "unlike units",
        "one small channel",
    },
    "schur": set(),
    "controller-hessenberg": {"wide", "near z = 1"},
    "observer-hessenberg": {"overflowing gain", "near z = 1"},
    "reachable-staircase": {"wide", "near z = 1"},
    "observable-staircase": {"overflowing gain", "near z = 1"},
    # nothing is hidden there, so that no rotation rounds anything
    "kalman": set(),
}
#: Forms whose entries are exact, and the plants that they ruin all the same.
RUINED = {
    "multi-input-companion": {"near z = 1"},
    "controllability": {"near z = 1", "wide"},
    "observability": {"near z = 1", "wide"},
}
TARGETS = [(kind, None) for kind in UNIVERSAL_KINDS] + [("state-space", form) for form in FORMS]


def frequencies(model: Model) -> list[float]:
    """A few frequencies inside of the dynamics."""
    if model.time.sampled:
        return [0.01, 1.0, 33.0, 200.0, 310.0]
    sizes = {"fast": 1e200, "slow": 1e-200, "decimals": 0.1}
    scale = next((size for name, size in sizes.items() if PLANTS.get(name) is model), 1.0)
    return [scale * w for w in (0.11, 0.37, 1.3, 3.7, 9.0)]


def _allowed(name: str, to: str, form: str | None) -> bool:
    p, m = PLANTS[name].shape
    if to == "sections":
        return p * m == 1
    if form in ("controllable-companion", "controllability"):
        return m == 1
    return p == 1 if form in ("observable-companion", "observability") else True


CASES = [(name, to, form) for name in PLANTS for to, form in TARGETS]


@pytest.mark.parametrize(("name", "to", "form"), CASES, ids=lambda part: str(part).replace(" ", "_"))
def test_the_response_is_kept_and_the_claims_are_honest(name: str, to: str, form: str | None, oracle: Any) -> None:
    source = PLANTS[name]
    if not _allowed(name, to, form):
        with pytest.raises(Refused, match=r"use|convert"):
            convert(source, to, form=form)
        return
    if name in DENSE.get(form or "", ()):
        with pytest.raises(Refused, match=r"minimal|stable|ruin|Riccati"):
            convert(source, to, form=form)
        return
    if name in RUINED.get(form or "", ()):
        with pytest.raises(Refused, match=r"coordinates ruin this model.*--force"):
            convert(source, to, form=form)
        return
    beyond = name == "overflowing gain" and (
        (form or "").endswith("companion") or form in ("controllability", "observability")
    )
    if beyond:
        with pytest.raises(Refused, match="range of doubles"):
            convert(source, to, form=form)
        return
    made = convert(source, to, form=form)
    assert made.model.kind == to
    claims = {claim.name: claim for claim in made.receipt.claims}
    w = frequencies(source)
    response = claims["response-error"]
    truth = oracle.error(source, made.model, w)
    if name == "near z = 1" and (form or to) in COEFFICIENTS:
        assert truth > 1e-13
        assert response.holds is False and 1e-10 < response.value < 1e-6
        return
    if form in DENSE:
        # twenty decades between the poles leave the rotation's rounding just below the limit
        assert claims["peak-error"].value < (1e-9 if (name, form) == ("wide", "schur") else 2e-10)
        assert truth <= (response.value + (response.uncertainty or 0.0)) * (1 + 1e-9) + 1e-300
        return
    if name == "near z = 1" and to == "matrix-fraction":
        assert 1e-13 < truth < 1e-9 and truth <= response.value + (response.uncertainty or 0.0)
        return
    assert truth < 2e-14, "what the catalogue allows: everything here can be carried to a few roundings"
    assert oracle.error(source, made.model, w, channels=True) < 1e-12
    assert not response.infinite
    total = response.value + (response.uncertainty or 0.0)
    assert truth <= total * (1 + 1e-9) + 1e-300
    assert response.value < 1e-12, "nothing worse is found anywhere in the band"
    if name not in {row[0] for row in FAILS}:
        assert not made.receipt.failed, [claim.name for claim in made.receipt.failed]
    if to != source.kind:
        assert made.receipt.route
    assert explain(source, to, form=form)


@pytest.mark.parametrize(("name", "to"), sorted(FAILS))
def test_what_cannot_be_carried_is_said(name: str, to: str) -> None:
    """Residues rounded one by one sum to something that is not zero: the relative degree is lost."""
    made = convert(PLANTS[name], to)
    assert [claim.name for claim in made.receipt.failed] == ["end-behaviour"]


def _grid(model: Model, low: float, high: float, count: int) -> Iterator[float]:
    for k in range(count):
        yield low * (high / low) ** (k / (count - 1))


INEXACT: dict[str, tuple[Model, str, str | None]] = {
    "coefficients of a 12th-order low-pass as companion": (
        tf([1.0], np.poly([-1.0 + 0.001j * k for k in range(-5, 6)]).real.tolist()),
        "zero-pole-gain",
        None,
    ),
    "sixteen poles close together": (
        ZeroPoleGain(zeros=[], poles=[-1.0 - 0.01 * k for k in range(16)], gain=1.0),
        "transfer-function",
        None,
    ),
    "light modes as coefficients": (
        ZeroPoleGain(
            zeros=[-0.001 + 1.5j, -0.001 - 1.5j],
            poles=[z for k in range(1, 7) for z in (-1e-3 * k + 1j * k, -1e-3 * k - 1j * k)],
            gain=1.0,
        ),
        "transfer-function",
        None,
    ),
    "close poles as residues": (
        ZeroPoleGain(zeros=[], poles=[-1.0, -1.001, -1.002, -1.003], gain=1.0),
        "pole-residue",
        None,
    ),
}


@pytest.mark.parametrize("name", INEXACT)
def test_the_claims_cover_the_truth_on_a_denser_grid(name: str, oracle: Any) -> None:
    """value + uncertainty is never below the truth, and the value is no more than a third above what can be found."""
    source, to, form = INEXACT[name]
    made = convert(source, to, form=form)
    response = made.receipt.claim("response-error")
    if isinstance(source, ZeroPoleGain):
        sizes = np.abs(np.concatenate([source.poles[0][0], source.zeros[0][0]]))
    else:
        sizes = np.array([1.0])
    grid = list(_grid(source, float(sizes.min()) / 10, float(sizes.max()) * 10, 300)) + sizes.tolist()
    truth = oracle.error(source, made.model, grid)
    assert response.value is not None
    assert truth <= (response.value + (response.uncertainty or 0.0)) * 1.05
    assert truth >= 0.6 * response.value, "the value is a value that occurs"
    top, gain = oracle.sizes(source, made.model, [0.0, *grid])
    peak = made.receipt.claim("peak-error")
    assert peak.value is not None
    assert top / gain <= (peak.value + (peak.uncertainty or 0.0)) * 1.05


@pytest.mark.parametrize(("to", "form"), TARGETS)
def test_everything_else_travels(to: str, form: str | None) -> None:
    common = {
        "inputs": (Signal("torque", "N*m"),),
        "outputs": (Signal("angle", "rad"),),
        "dead_time": DeadTime((0.1,), (0.2,), ((0.3,),)),
        "offset": Offset((1.0,), (2.0,)),
        "ports": Ports("scattering", (50.0,)),
    }
    made = convert(tf([1.0, 2.0], [1.0, 3.0, 5.0], **common), to, form=form)
    for name, value in common.items():
        assert getattr(made.model, name) == value
    assert made.history == (made.receipt,)
    again = convert(made, "transfer-function")
    assert [receipt.step for receipt in again.history] == ["convert", "convert"]
    assert again.model.dead_time == common["dead_time"]
    sampled = TimeBase("sampled", rate="44100")
    assert convert(tf([1.0], [1.0, -0.5], time=sampled), to, form=form).model.time == sampled


def test_states_leave_their_names_behind_and_the_receipt_says_so() -> None:
    source = StateSpace(
        A=[[-1.0]],
        B=[[1.0]],
        C=[[1.0]],
        states=(Signal("x", "m"),),
        offset=Offset((1.0,), (2.0,), (3.0,)),
    )
    same = convert(source, "state-space")
    assert same.model.states == source.states and same.model.offset == source.offset
    made = convert(source, "state-space", form="cascade")
    assert made.model.offset == Offset((1.0,), (2.0,))
    assert sum("left behind" in caution for caution in made.receipt.cautions) == 2


def test_a_hidden_unstable_pole_is_said() -> None:
    made = convert(PLANTS["not minimal"], "transfer-function")
    assert made.model.order == 2
    assert any("not stable" in caution for caution in made.receipt.cautions)


def test_a_common_denominator() -> None:
    made = convert(PLANTS["three inputs"], "transfer-function", common_denominator=True)
    assert isinstance(made.model, TransferFunction)
    first = made.model.denominator[0][0]
    assert all(np.array_equal(first, d) for row in made.model.denominator for d in row)
    # the third channel is (s^2 + s + 1)/(s^2 + s + 1): (s + 1)(s^2 + 2 s + 5) is the least common denominator
    assert first.tolist() == [1.0, 3.0, 7.0, 5.0]
    assert not made.receipt.failed


def test_every_row_of_the_table_is_reached() -> None:
    used = set()
    for model in PLANTS.values():
        for to, form in [
            *TARGETS,
            *([("second-order", None)] if model.kind in ("state-space", "pole-residue") else []),
        ]:
            used.update((row.source, row.target) for row in plan_route(Task(model, to, form)))
    assert used == {(row.source, row.target) for row in (*ROWS, *COORDINATE_ROWS, SMALLEST_DESCRIPTOR)}


def test_exact_rows_are_exact(oracle: Any) -> None:
    """Through exact rows alone nothing is lost: zeros, poles and gain as they stand."""
    source = PLANTS["wide"]
    made = convert(source, "zero-pole-gain")
    assert oracle.error(source, made.model, [1e-9, 1.0, 1e9]) == 0.0


def test_forms_and_kinds_that_do_not_exist() -> None:
    with pytest.raises(UsageError):
        convert(PLANTS["wide"], "state-space", form="nothing")
    with pytest.raises(UsageError):
        convert(PLANTS["wide"], "nothing")


def test_the_source_is_not_touched() -> None:
    source = tf([1.0, 2.0], [1.0, 3.0, 5.0, 7.0])
    before = [np.array(source.numerator[0][0]), np.array(source.denominator[0][0])]
    for to, form in TARGETS:
        convert(source, to, form=form)
    assert np.array_equal(before[0], source.numerator[0][0]) and np.array_equal(before[1], source.denominator[0][0])
    with pytest.raises(ValueError):
        source.numerator[0][0][0] = 5.0


@pytest.mark.parametrize(("gain", "to"), [(g, to) for g in ("1e400", "1e-400") for to in UNIVERSAL_KINDS])
def test_gains_beyond_doubles_are_carried_or_refused(gain: str, to: str, oracle: Any) -> None:
    source = ZeroPoleGain(
        zeros=[],
        poles=[-1.0, -2.0],
        gain=math.inf if gain == "1e400" else 0.0,
        decimals={"gain": {(0, 0): gain}},
    )
    try:
        made = convert(source, to)
    except Refused:
        return
    truth = oracle.error(source, made.model, [0.5, 3.0])
    assert truth < 1e-15 or made.receipt.claim("response-error").holds is False


@pytest.mark.parametrize("to", UNIVERSAL_KINDS)
@pytest.mark.parametrize("pole", ["-1e400", "-1e-400"])
def test_poles_beyond_doubles_are_carried_or_refused(pole: str, to: str, oracle: Any) -> None:
    source = ZeroPoleGain(
        zeros=[],
        poles=[-math.inf if pole == "-1e400" else 0.0, -2.0],
        gain=1.0,
        decimals={"poles": {(0, 0, 0, 0): pole}},
    )
    try:
        made = convert(source, to)
    except Refused:
        return
    truth = oracle.error(source, made.model, [0.5, 3.0])
    assert truth < 1e-15 or made.receipt.failed
