"""Sixteen inputs on which scripts over general-purpose libraries fail silently, against their exact answers.

The answers (orders, poles, zeros, coefficients, responses) are correctly rounded results of rational or ball
arithmetic, cross-checked with two other libraries: ../shared/data/hard-inputs.json, made for this project.
"""

from __future__ import annotations

import json
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import realize

HARD = Path(__file__).parents[3] / "shared" / "data" / "hard-inputs.json"
CASES = {case["id"]: case for case in json.loads(HARD.read_text())["cases"]} if HARD.exists() else {}
needed = pytest.mark.skipif(not CASES, reason=f"{HARD} is not there")
TO_STATES = ("TF02", "TF07", "TF09", "TF13", "TF15", "MR09")
STATES = ("SS01", "SS05", "SS09", "MR01", "BT01", "CD01", "CF02")
EPS = np.finfo(float).eps


def coefficients(name: str) -> realize.TransferFunction:
    given = CASES[name]["input"]
    return realize.TransferFunction(numerator=given["num"], denominator=given["den"])


def states(name: str) -> realize.StateSpace:
    given = CASES[name]["input"]
    return realize.StateSpace(**{part: given[part] for part in "ABCD"})


def response_of(name: str, shape: tuple[int, int]) -> tuple[np.ndarray, np.ndarray]:
    """Return w in rad/s and the exact response [k][outputs][inputs]."""
    oracle = CASES[name]["oracle"]
    given = oracle["response"]
    w = np.array(oracle["w"])
    values = np.array(given["re"]) + 1j * np.array(given["im"])
    return w, np.moveaxis(values.reshape(*shape, w.size), 2, 0)


def relative_error(model: realize.Model, name: str) -> float:
    """Return the largest error of each channel's response relative to its exact value."""
    w, wanted = response_of(name, model.shape)
    gap = np.abs(model.evaluate(1j * w) - wanted)
    return float(np.max(gap / np.where(wanted == 0, np.inf, np.abs(wanted))))


def roots_agree(found: list[list[float]], wanted: list[list[float]]) -> None:
    """Every root to the last bit of each part, with its multiplicity."""
    assert sorted(map(tuple, found)) == sorted(map(tuple, wanted))


@needed
def test_every_case_is_tried() -> None:
    assert set(CASES) == {*TO_STATES, *STATES, "MR06", "ED01", "ED03"} and len(CASES) == 16


@needed
@pytest.mark.parametrize("name", TO_STATES)
def test_coefficients_to_states(name: str) -> None:
    source, oracle = coefficients(name), CASES[name]["oracle"]
    made = realize.convert(source, "state-space")
    assert made.model.order == oracle["minimal_order"]
    # the exact answers are for the numbers as given: what is left is the rounding of the cascade's entries
    assert relative_error(made.model, name) < (5e-12 if name == "MR09" else 1e-12)
    assert all(claim.holds is not False for claim in made.receipt.claims)
    assert relative_error(source, name) < 1e-14


@needed
@pytest.mark.parametrize("name", TO_STATES)
def test_inspect_coefficients(name: str) -> None:
    record, oracle = realize.inspect(coefficients(name)), CASES[name]["oracle"]
    assert record["minimal_order"] == oracle["minimal_order"]
    for side in ("poles", "zeros"):
        if oracle.get(f"{side}_re_im_mult") is not None:
            roots_agree(record[side], oracle[f"{side}_re_im_mult"])


@needed
@pytest.mark.parametrize("name", ["SS01", "SS05", "SS09", "CF02", "CD01"])
def test_states_to_coefficients(name: str) -> None:
    source, oracle = states(name), CASES[name]["oracle"]
    model = realize.convert(source, "transfer-function", common_denominator=True).model
    assert isinstance(model, realize.TransferFunction)
    denominator = oracle.get("den") or oracle.get("charpoly")
    if denominator is None:
        # the plant is the companion form of these
        given = CASES[name]["input"]
        assert model.denominator[0][0].tolist() == given["tf_den"] and model.numerator[0][0].tolist() == given["tf_num"]
        return
    p, m = source.shape
    for i in range(p):
        for j in range(m):
            assert model.denominator[i][j].tolist() == denominator
            if "num" in oracle:
                wanted = np.trim_zeros(np.array(oracle["num"][i][j]), "f")
                assert model.numerator[i][j].tolist() == wanted.tolist()
                degree = model.denominator[i][j].size - model.numerator[i][j].size
                assert degree == oracle["relative_degree"][i][j]


@needed
@pytest.mark.parametrize("name", STATES)
def test_inspect_states(name: str) -> None:
    source, oracle = states(name), CASES[name]["oracle"]
    record = realize.inspect(source)
    if "minimal_order" in oracle:
        assert record["minimal_order"] == oracle["minimal_order"]
    for key in ("poles_re_im_mult", "eigenvalues_re_im_mult"):
        if oracle.get(key) is not None:
            roots_agree(record["poles"], oracle[key])
    if "hsv" in oracle:
        # to full relative accuracy far below the first: values that doubles can resolve
        wanted, found = np.array(oracle["hsv"]), np.array(record["hankel_singular_values"])
        resolved = wanted > 1e-12 * wanted[0]
        assert np.allclose(found[: wanted.size][resolved], wanted[resolved], rtol=1e-3)


@needed
@pytest.mark.parametrize("name", ["SS01", "SS05", "SS09", "MR01", "CD01", "CF02"])
@pytest.mark.parametrize("to", ["zero-pole-gain", "pole-residue"])
def test_states_to_factors_and_residues(name: str, to: str) -> None:
    if "response" not in CASES[name]["oracle"] or (name == "CD01"):
        pytest.skip("the exact response of this case is that of the sampled plant")
    made = realize.convert(states(name), to)
    w, wanted = response_of(name, made.model.shape)
    gap = np.abs(made.model.evaluate(1j * w) - wanted)
    # sums of residues are right relative to the peak, products of factors everywhere
    below = np.abs(wanted) if to == "zero-pole-gain" else np.abs(wanted).max()
    assert np.max(gap / np.where(below == 0, np.inf, below)) < (1e-12 if to == "zero-pole-gain" else 1e-9)


@needed
@pytest.mark.parametrize("name", ["SS01", "SS05", "SS09", "MR01", "CF02"])
def test_states_evaluate(name: str) -> None:
    source = states(name)
    w, wanted = response_of(name, source.shape)
    gap = np.abs(source.evaluate(1j * w) - wanted).max(axis=(1, 2)) / np.abs(wanted).max(axis=(1, 2))
    assert gap.max() < 1e-9


@needed
def test_a_transfer_matrix_with_shared_poles() -> None:
    given, oracle = CASES["MR06"]["input"], CASES["MR06"]["oracle"]
    source = realize.TransferFunction(numerator=given["num"], denominator=given["den_common"])
    assert realize.inspect(source)["minimal_order"] == oracle["minimal_order"]
    for to in ("pole-residue", "state-space"):
        made = realize.convert(source, to)
        w, wanted = response_of("MR06", source.shape)
        size = np.linalg.norm(wanted, axis=(1, 2))
        assert np.max(np.linalg.norm(made.model.evaluate(1j * w) - wanted, axis=(1, 2)) / size) < 1e-12
        if to == "state-space":
            assert made.model.order == oracle["minimal_order"]
    assert relative_error(source, "MR06") < 1e-13


@needed
def test_an_infinite_coefficient_is_no_input(tmp_path: Path, run: Callable[..., Any]) -> None:
    with pytest.raises(realize.InputError, match=r"numerator"):
        realize.TransferFunction(numerator=[float("inf")], denominator=CASES["ED01"]["input"]["den"])
    text = '{"realize": 1, "kind": "transfer-function", "numerator": [%s], "denominator": [1, 1]}'
    for word in ("Infinity", '"inf"', "1e999"):
        (tmp_path / "plant.json").write_text(text % word)
        made = run("convert", tmp_path / "plant.json", "--to", "state-space")
        assert made.status == 3 and "numerator" in made.err


@needed
@pytest.mark.parametrize("to", ["state-space", "zero-pole-gain", "sections", "pole-residue"])
def test_a_leading_coefficient_ratio_that_overflows(to: str) -> None:
    given, oracle = CASES["ED03"]["input"], CASES["ED03"]["oracle"]
    source = realize.TransferFunction(numerator=given["num"], denominator=given["den"])
    roots_agree(realize.inspect(source)["poles"], oracle["poles_re_im_mult"])
    try:
        made = realize.convert(source, to)
    except realize.Refused as reason:
        # a section or residue of it is beyond doubles: words, never an infinity
        assert "scale" in str(reason) or "range of doubles" in str(reason)
        return
    assert made.model.order == 2
    assert all(claim.holds is not False for claim in made.receipt.claims)


def ladder(sections: int) -> realize.StateSpace:
    """An LC ladder between resistors, one inductor or capacitor a state."""
    value = 1.1 + 0.3 * np.sin(np.arange(sections))
    A = np.diag(-1 / value[:-1], 1) + np.diag(1 / value[1:], -1)
    A[0, 0], A[-1, -1] = -0.7, -0.9
    B, C = np.zeros((sections, 1)), np.zeros((1, sections))
    B[0, 0], C[0, -1] = 1.0, 1.0
    return realize.StateSpace(A=A, B=B, C=C)


def test_a_ladder_of_sixty_sections_cannot_be_coefficients(tmp_path: Path, run: Callable[..., Any]) -> None:
    """Correctly rounded coefficients in doubles carry 100 % response error: said so, with what to use instead."""
    realize.write(ladder(60), tmp_path / "ladder.json")
    arguments = ["convert", tmp_path / "ladder.json", "--no-second-opinion", "--json", "-o"]
    made = run(*arguments, tmp_path / "coefficients.json", "--to", "transfer-function")
    assert made.status == 4 and (tmp_path / "coefficients.json").exists()
    record = made.record
    error = next(claim for claim in record["claims"] if claim["name"] == "response-error")
    assert error["holds"] is False and error["value"] > 0.1
    caution = " ".join(record["cautions"])
    for kind in ("pole-residue", "sections", "state-space"):
        assert kind in caution
    assert run(*arguments, tmp_path / "digits.json", "--to", "transfer-function", "--digits", "40").status == 0
    assert run(*arguments, tmp_path / "sections.json", "--to", "sections").status == 0
