"""The option --arithmetic: which arithmetic is chosen and why, every pair in doubles, large state models, words."""

from __future__ import annotations

import json
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from realize.conversions import Task, choose_arithmetic, convert_model, plan_route
from realize.errors import Refused, UsageError
from realize.models import Model, PoleResidue, Sections, StateSpace, TimeBase, TransferFunction, ZeroPoleGain
from realize.schema import UNIVERSAL_KINDS
from realize.steps import convert, explain

QUIET = "--no-second-opinion"
SOURCES: dict[str, Model] = {
    "transfer-function": TransferFunction(numerator=[2.0, 3.0], denominator=[1.0, 2.5, 6.0, 4.0]),
    "zero-pole-gain": ZeroPoleGain(zeros=[-1.5], poles=[-1.0, -0.5 + 2j, -0.5 - 2j], gain=2.0),
    "pole-residue": PoleResidue(
        poles=[-1 + 2j, -1 - 2j, -3.0], residues=[[[1 + 1j]], [[1 - 1j]], [[2.0]]], direct=[[1.0]]
    ),
    "sections": Sections(sections=[[[1, 2, 3], [1, 0.1, 4]], [[0, 1, 2], [1, 1, 1]]], gain=2.0),
    "state-space": StateSpace(
        A=[[0.0, 1.0, 0.5], [-2.0, -3.0, 0.0], [0.25, 0.0, -4.0]], B=[[0.0], [1.0], [1.0]], C=[[1.0, 0.0, 2.0]]
    ),
}
FORMS = [(kind, None) for kind in UNIVERSAL_KINDS if kind != "matrix-fraction"] + [
    ("state-space", form) for form in ("cascade", "modal", "controllable-companion", "observable-companion")
]


def claim(result: Any, name: str) -> Any:
    return next(claim for claim in result.receipt.claims if claim.name == name)


def flexible(order: int, seed: int = 1) -> StateSpace:
    """Many lightly damped modes in rotated coordinates, two inputs and one output."""
    rng = np.random.default_rng(seed)
    n = order // 2
    w = np.sort(rng.uniform(1.0, 100.0, n))
    A = np.zeros((order, order))
    k = np.arange(0, order, 2)
    A[k, k + 1], A[k + 1, k], A[k + 1, k + 1] = w, -w, -0.02 * w
    turn = np.linalg.qr(rng.standard_normal((order, order)))[0]
    B, C = np.zeros((order, 2)), np.zeros((1, order))
    B[1::2], C[0, ::2] = rng.standard_normal((n, 2)), rng.standard_normal(n)
    return StateSpace(A=turn.T @ A @ turn, B=turn.T @ B, C=C @ turn)


@pytest.mark.parametrize("start", SOURCES)
def test_matrix_fractions_are_exact_or_not_at_all(start: str) -> None:
    with pytest.raises(Refused, match="matrix-fraction in double arithmetic"):
        convert(SOURCES[start], "matrix-fraction", arithmetic="double")
    assert convert(SOURCES[start], "matrix-fraction").receipt.claim("peak-error").holds


@pytest.mark.parametrize("start", SOURCES)
@pytest.mark.parametrize(("to", "form"), FORMS)
def test_every_pair_has_a_route_in_doubles(start: str, to: str, form: str | None) -> None:
    result = convert(SOURCES[start], to, form=form, arithmetic="double")
    assert result.model.kind == to
    for name in ("response-error", "peak-error"):
        assert claim(result, name).value < 1e-12 and claim(result, name).basis == "proved"
    details = result.receipt.details
    assert details["arithmetic"] == "double" and 0 < details["predicted_operations"] < details["budget"]
    assert result.receipt.method.startswith("double arithmetic" if result.receipt.route else "left as it was")
    assert "exact-fractions" not in result.receipt.route


def test_auto_is_a_pure_function_of_the_model() -> None:
    choice = choose_arithmetic(Task(SOURCES["transfer-function"], "zero-pole-gain"))
    assert choice.arithmetic == "exact" and not choice.over
    big = choose_arithmetic(Task(flexible(200), "zero-pole-gain"))
    assert big.arithmetic == "double" and big.over and np.isfinite(big.predicted)
    assert choose_arithmetic(Task(flexible(200), "zero-pole-gain", arithmetic="exact")).arithmetic == "exact"


def test_the_receipt_says_what_doubles_cost() -> None:
    source = TransferFunction(numerator=[1.0], denominator=[1.0, 3.0, 3.0, 1.0])
    exact, double = (convert(source, "zero-pole-gain", arithmetic=name) for name in ("exact", "double"))
    assert (
        exact.receipt.method.startswith("exact rational arithmetic") and exact.receipt.details["arithmetic"] == "exact"
    )
    assert claim(exact, "peak-error").value == 0.0
    assert len(set(double.model.poles[0][0].tolist())) == 3
    assert np.allclose(double.model.poles[0][0], -1.0, atol=1e-4)


def test_explain_ends_with_the_arithmetic_and_why() -> None:
    lines = explain(SOURCES["state-space"], "zero-pole-gain")
    assert lines[-1].startswith("exact arithmetic, chosen: about") and "budget" in lines[-1]
    lines = explain(SOURCES["state-space"], "zero-pole-gain", arithmetic="double")
    assert lines[-1].startswith("double arithmetic, as asked: about")
    assert lines[0].startswith("state-space -> factors")


def test_large_state_models_go_to_poles_zeros_and_residues_by_themselves() -> None:
    source = flexible(200)
    for to in ("zero-pole-gain", "pole-residue"):
        result = convert(source, to)
        assert result.receipt.details["arithmetic"] == "double"
        peak = claim(result, "peak-error")
        assert peak.value < 1e-10 and peak.basis == "measured"
        s = 1j * np.array([0.5, 7.0, 33.0, 300.0])
        direct = np.array([source.C @ np.linalg.solve(x * np.eye(200) - source.A, source.B) for x in s])
        assert np.allclose(result.model.evaluate(s), direct, rtol=1e-8, atol=1e-12 * np.abs(direct).max())


@pytest.mark.parametrize(("to", "form"), [("transfer-function", None), ("state-space", "controllable-companion")])
def test_coefficients_of_such_an_order_are_refused_unless_asked_for(to: str, form: str | None) -> None:
    source = flexible(200)
    one = StateSpace(A=source.A, B=source.B[:, :1], C=source.C)
    with pytest.raises(Refused, match="--arithmetic exact or double"):
        convert(one, to, form=form)
    assert plan_route(Task(one, to, form, arithmetic="double"))[-1].target.endswith(form or to)
    assert plan_route(Task(one, to, form, arithmetic="exact"))


def test_exact_beyond_the_budget_is_done_and_cautioned(monkeypatch: pytest.MonkeyPatch) -> None:
    for module in ("realize.verification.views", "realize.conversions.route"):
        monkeypatch.setattr(f"{module}.EXACT_BUDGET", 10.0)
    source = SOURCES["state-space"].with_()
    result = convert(source, "zero-pole-gain", arithmetic="exact")
    assert any("predicted operations" in caution for caution in result.receipt.cautions)
    assert claim(result, "response-error").basis == "proved"
    # what other steps choose does not depend on this one
    again = convert(source, "zero-pole-gain")
    assert again.receipt.details["arithmetic"] == "double"


@pytest.mark.parametrize("to", UNIVERSAL_KINDS)
@pytest.mark.parametrize("size", [1e-300, 1e-150, 1e150, 1e300])
def test_extremes_are_done_or_refused_in_words(size: float, to: str) -> None:
    plants: list[Model] = [
        TransferFunction(numerator=[size, 1.0], denominator=[1.0, size, 3.0]),
        ZeroPoleGain(zeros=[-size], poles=[-size, -2 * size, -3.0], gain=size),
        StateSpace(A=[[-size, 1.0], [0.0, -1.0]], B=[[0.0], [size]], C=[[1.0, 1.0]]),
        StateSpace(A=np.full((3, 3), size), B=np.full((3, 1), size), C=np.full((1, 3), size), D=[[size]]),
        PoleResidue(poles=[-size, -1.0], residues=[[[size]], [[1.0]]]),
        Sections(sections=[[[1.0, size, 1.0], [size, 1.0, 1.0]]] * 3, gain=size),
    ]
    for source in plants:
        try:
            task = Task(source, to, arithmetic="double")
            result = convert_model(task, plan_route(task))
        except Refused as reason:
            assert str(reason)
            continue
        for value in result.parameters().values():
            for row in value if isinstance(value, tuple) else (value,):
                for array in row if isinstance(row, tuple) else (row,):
                    if isinstance(array, np.ndarray) and not result.decimals:
                        assert np.all(np.isfinite(array))


def test_nearly_repeated_poles_have_no_residues() -> None:
    source = ZeroPoleGain(zeros=[], poles=[-1.0, -1.0 - 1e-13], gain=1.0)
    with pytest.raises(Refused, match="two poles near"):
        convert(source, "pole-residue", arithmetic="double")
    repeated = convert(
        ZeroPoleGain(zeros=[-2.0], poles=[-1.0, -1.0, 0.0], gain=1.0), "pole-residue", arithmetic="double"
    )
    assert claim(repeated, "response-error").value < 1e-14
    assert sorted(repeated.model.powers.tolist()) == [1, 1, 2]


def test_a_singular_pencil_and_numbers_beyond_doubles_are_refused() -> None:
    singular = StateSpace(A=np.diag([1.0, 0.0]), B=np.ones((2, 1)), C=np.ones((1, 2)), E=np.diag([1.0, 0.0]))
    with pytest.raises(Refused, match="zero for every s"):
        convert(singular, "zero-pole-gain", arithmetic="double")
    beyond = TransferFunction(numerator=[1.0], denominator=[1.0, 1.0], decimals={"numerator": {(0, 0, 0): "1e400"}})
    with pytest.raises(Refused, match="--arithmetic exact"):
        convert(beyond, "zero-pole-gain", arithmetic="double")


def test_common_denominator_in_doubles() -> None:
    source = TransferFunction(
        numerator=[[[1.0], [2.0]]], denominator=[[[1.0, 1.0], [1.0, 3.0, 2.0]]], time=TimeBase("sampled", period=0.1)
    )
    result = convert(source, "transfer-function", common_denominator=True, arithmetic="double")
    assert np.array_equal(result.model.denominator[0][0], result.model.denominator[0][1])
    assert claim(result, "peak-error").value < 1e-13


def test_wrong_usage() -> None:
    with pytest.raises(UsageError, match="no arithmetic"):
        convert(SOURCES["sections"], "zero-pole-gain", arithmetic="single")
    with pytest.raises(UsageError, match="--digits"):
        convert(SOURCES["sections"], "zero-pole-gain", digits=20, arithmetic="double")


def test_the_command_line(run: Callable[..., Any], tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    record = {"realize": 1, "kind": "transfer-function", "numerator": [1, 2], "denominator": [1, 3, 5, 7]}
    Path("plant.json").write_text(json.dumps(record))
    common = ("convert", "plant.json", "--to", "zero-pole-gain")
    done = run(*common, "--arithmetic", "double", "--json", QUIET)
    assert done.status == 0 and done.record["details"]["arithmetic"] == "double"
    assert done.record["method"].startswith("double arithmetic")
    done = run(*common, "--arithmetic", "exact", "--explain", "--json")
    assert done.record["arithmetic"].startswith("exact arithmetic, as asked")
    assert "chosen" in run(*common, "--explain").out
    assert run(*common, "--arithmetic", "quad").status == 2
    triple = record | {"numerator": [1], "denominator": [1, 3, 3, 1]}
    Path("triple.json").write_text(json.dumps(triple))
    done = run("convert", "triple.json", "--to", "pole-residue", "--arithmetic", "double", "--json", QUIET)
    assert done.status == 4
