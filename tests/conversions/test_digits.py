"""Results in decimals: correctly rounded against an independent library, read back exactly, claims on the decimals."""

from __future__ import annotations

import decimal
import json
from collections.abc import Callable
from decimal import Decimal
from fractions import Fraction
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from realize.errors import InputError, Refused, UsageError
from realize.files import dumps, read, write
from realize.models import Model, PoleResidue, Sections, StateSpace, TimeBase, TransferFunction, ZeroPoleGain
from realize.steps import convert

KINDS = ("transfer-function", "zero-pole-gain", "pole-residue", "sections")
PLANT = TransferFunction(numerator=[1.0, 2.0, 3.0], denominator=[1.0, 0.3, 2.7, 0.1])
TWO_BY_TWO = TransferFunction(
    numerator=[[[1.0], [2.0, 0.1]], [[0.0], [3.0]]], denominator=[[[1.0, 1.1], [1.0, 0.2, 5.0]], [[1.0], [1.0, 1.1]]]
)


def exact(model: Model, name: str, index: tuple[int, ...], value: float) -> Fraction:
    text = model.decimals.get(name, {}).get(index)
    return Fraction(float(value)) if text is None else Fraction(text)


def numbers(model: Model) -> list[tuple[float, str]]:
    """Return the nearest double and the text of every decimal of the model."""
    found = []
    for name, rows in model.decimals.items():
        tree = getattr(model, name)
        for index, text in rows.items():
            value: Any = tree
            for k in index:
                value = (value.real, value.imag)[k] if isinstance(value, (complex, np.complexfloating)) else value[k]
            found.append((float(value), text))
    return found


def significant(text: str) -> int:
    return len(text.partition("e")[0].replace(".", "").lstrip("-0"))


def ladder(sections: int) -> StateSpace:
    """An LC ladder between resistors: one inductor or capacitor a state, values that are no powers of two."""
    value = 1.1 + 0.3 * np.sin(np.arange(sections))
    A = np.diag(-1 / value[:-1], 1) + np.diag(1 / value[1:], -1)
    A[0, 0], A[-1, -1] = -0.7, -0.9
    B, C = np.zeros((sections, 1)), np.zeros((1, sections))
    B[0, 0], C[0, -1] = 1.0, 1.0
    return StateSpace(A=A, B=B, C=C)


Pair = tuple[Decimal, Decimal]


def times(a: Pair, b: Pair) -> Pair:
    return a[0] * b[0] - a[1] * b[1], a[0] * b[1] + a[1] * b[0]


def over(a: Pair, b: Pair) -> Pair:
    size = b[0] * b[0] + b[1] * b[1]
    top = times(a, (b[0], -b[1]))
    return top[0] / size, top[1] / size


def horner(coefficients: list[Any], s: Pair) -> Pair:
    value = (Decimal(0), Decimal(0))
    for c in coefficients:
        value = times(value, s)
        value = value[0] + Decimal(c), value[1]
    return value


def slope(coefficients: list[Any]) -> list[Any]:
    return [Decimal(c) * (len(coefficients) - 1 - k) for k, c in enumerate(coefficients[:-1])]


def newton(coefficients: list[Any], start: Pair) -> Pair:
    """Return the root near a point to the precision of the context, by Python's own decimals."""
    for _ in range(60):
        step = over(horner(coefficients, start), horner(slope(coefficients), start))
        start = start[0] - step[0], start[1] - step[1]
    return start


def as_decimal(value: Fraction) -> Decimal:
    return Decimal(value.numerator) / Decimal(value.denominator)


@pytest.mark.parametrize("digits", [1, 5, 16, 17, 40, 200])
def test_poles_and_zeros_are_correctly_rounded(digits: int) -> None:
    made = convert(PLANT, "zero-pole-gain", digits=digits).model
    assert isinstance(made, ZeroPoleGain)
    for side, coefficients in (("zeros", PLANT.numerator[0][0]), ("poles", PLANT.denominator[0][0])):
        for k, root in enumerate(getattr(made, side)[0][0].tolist()):
            near = np.roots(coefficients)
            near = complex(near[np.argmin(np.abs(near - root))])
            with decimal.localcontext(prec=2 * digits + 40):
                wanted = newton(coefficients.tolist(), (Decimal(near.real), Decimal(near.imag)))
                for part, value in enumerate((root.real, root.imag)):
                    mine = as_decimal(exact(made, side, (0, 0, k, part), value))
                    rounded = decimal.Context(prec=digits).plus(wanted[part])
                    assert mine == rounded or abs(mine) + abs(wanted[part]) < Decimal("1e-30") * abs(Decimal(abs(near)))
        assert all(significant(text) <= digits for text in made.decimals[side].values())


def test_residues_agree_with_decimal_arithmetic() -> None:
    made = convert(PLANT, "pole-residue", digits=50).model
    assert isinstance(made, PoleResidue)
    n, d = PLANT.numerator[0][0].tolist(), PLANT.denominator[0][0].tolist()
    for k in range(3):
        with decimal.localcontext(prec=150):
            x, y, u, v = (
                as_decimal(exact(made, name, index, value))
                for name, index, value in (
                    ("poles", (k, 0), made.poles[k].real),
                    ("poles", (k, 1), made.poles[k].imag),
                    ("residues", (k, 0, 0, 0), made.residues[k, 0, 0].real),
                    ("residues", (k, 0, 0, 1), made.residues[k, 0, 0].imag),
                )
            )
            pole = newton(d, (x, y))
            residue = over(horner(n, pole), horner(slope(d), pole))
            for mine, wanted in zip((x, y, u, v), (*pole, *residue), strict=True):
                assert mine == decimal.Context(prec=50).plus(wanted) or abs(wanted) < Decimal("1e-100")


def test_a_repeated_pole_keeps_its_powers() -> None:
    source = TransferFunction(numerator=[1.0, 0.1], denominator=[1.0, 2.0, 7.0, 6.0, 9.0])  # (s^2 + s + 3)^2
    made = convert(source, "pole-residue", digits=60)
    assert sorted(made.model.powers.tolist()) == [1, 1, 2, 2]
    claims = {claim.name: claim for claim in made.receipt.claims}
    assert claims["response-error"].value < 1e-55 and claims["response-error"].holds


def test_exact_ties_round_to_even_and_exact_parts_stay() -> None:
    # poles -0.125 (a decimal tie at two digits) and -1.5 +- 2j, whose parts are exact
    source = ZeroPoleGain(zeros=[], poles=[-0.125, -1.5 + 2j, -1.5 - 2j], gain=0.375)
    coefficients = convert(source, "transfer-function").model
    two = convert(coefficients, "zero-pole-gain", digits=2).model
    assert sorted(text for text in two.decimals.get("poles", {}).values()) == ["-0.12", "-1.5", "-1.5", "-2", "2"]
    assert two.decimals["gain"] == {(0, 0): "0.38"}
    assert convert(source, "zero-pole-gain", digits=17).model.decimals == {}
    half = convert(
        ZeroPoleGain(zeros=[], poles=[-0.125 + 1j, -0.125 - 1j], gain=1.0), "transfer-function"
    ).model  # real part -0.125 of a complex pole: a tie that no ball decides
    made = convert(half, "zero-pole-gain", digits=2).model
    assert set(made.decimals["poles"].values()) == {"-0.12", "1", "-1"}


@pytest.mark.parametrize("to", KINDS)
@pytest.mark.parametrize("digits", [3, 25, 2000])
def test_read_back_exactly(to: str, digits: int, tmp_path: Path) -> None:
    made = convert(PLANT, to, digits=digits)
    write(made.model, tmp_path / "model.json")
    again = read(tmp_path / "model.json")
    assert again.decimals == made.model.decimals
    for name in made.model.parameters():
        assert again.exact(name) == made.model.exact(name) if name != "powers" else True
    for double, text in numbers(made.model):
        assert double == float(text) and significant(text) <= digits
    error = next(claim for claim in made.receipt.claims if claim.name == "response-error")
    assert error.value < 100 * 10.0 ** -min(digits - 1, 300) or error.value == 0.0


@pytest.mark.parametrize("to", KINDS)
@pytest.mark.parametrize(
    "source",
    [
        PLANT,
        ZeroPoleGain(zeros=[0.0, -0.1], poles=[0.0, 0.1 + 1j, 0.1 - 1j, -3.0], gain=0.7),
        Sections(sections=[[[0, 0.1, 1.0], [1.0, 0.1, 0.7]], [[1.0, 0.0, 0.3], [1.0, 0.2, 0.3]]], gain=2.1),
        PoleResidue(poles=[-0.1, -0.3], residues=[[[0.7]], [[-0.2]]], direct=[[0.3]]),
        StateSpace(A=[[0.0, 1.0], [-0.3, -0.1]], B=[[0.0], [0.1]], C=[[1.0, 0.0]]),
        TransferFunction(numerator=[3.0], denominator=[7.0]),
        TransferFunction(numerator=[0.0], denominator=[7.0, 1.0]),
        TransferFunction(numerator=[0.1, 0.2, 0.3, 0.7], denominator=[0.3, 1.0]),
        TransferFunction(numerator=[0.3, 0.1], denominator=[1.0, -1.3, 0.42], time=TimeBase("sampled", period=0.1)),
    ],
    ids=["fraction", "factors", "sections", "residues", "states", "constant", "zero", "improper", "sampled"],
)
def test_every_source_and_target(source: Model, to: str) -> None:
    made = convert(source, to, digits=30)
    for claim in made.receipt.claims:
        # rounded residues do not add up to zero: beyond relative degree one the roll-off is lost at the very end
        ends = ("end-behaviour",) if to != "pole-residue" else ()
        if claim.name in ("response-error", "peak-error", *ends):
            # a light zero amplifies the last digit up to 1e4 times
            assert claim.holds and claim.value < 1e-25, claim
    for name in ("poles", "zeros"):
        if isinstance(made.model, ZeroPoleGain):
            texts = [made.model.exact(name)[0][0][k] for k in range(getattr(made.model, name)[0][0].size)]
            for re, im in texts:
                assert [re, (-im[0], im[1])] in [[tuple(a), tuple(b)] for a, b in texts]


@pytest.mark.parametrize("to", KINDS[:3])
def test_several_channels(to: str) -> None:
    made = convert(TWO_BY_TWO, to, digits=30)
    claims = {claim.name: claim.value for claim in made.receipt.claims}
    assert claims["channel-error"] < 1e-28
    if to == "transfer-function":
        assert made.model.numerator[1][0].tolist() == [0.0]


def test_a_ladder_of_sixty_sections_needs_more_digits_than_doubles() -> None:
    source = ladder(60)
    doubles = convert(source, "transfer-function")
    decimals = convert(source, "transfer-function", digits=40)
    errors = [
        next(claim for claim in made.receipt.claims if claim.name == "response-error") for made in (doubles, decimals)
    ]
    assert errors[0].holds is False and errors[0].value > 0.1
    assert errors[1].holds is True and errors[1].value < 1e-14
    assert decimals.receipt.fragility["result"] < 1e-15 < doubles.receipt.fragility["result"]
    assert not any("badly" in words for words in decimals.receipt.cautions)
    back = convert(decimals.model, "state-space")
    assert next(claim for claim in back.receipt.claims if claim.name == "response-error").value < 1e-9


@pytest.mark.parametrize("to", ["state-space"])
def test_other_targets_are_wrong_usage(to: str) -> None:
    with pytest.raises(UsageError, match="--digits"):
        convert(PLANT, to, digits=30)


@pytest.mark.parametrize("digits", [0, 2001, -1, True, 2.0])
def test_digits_within_bounds(digits: Any) -> None:
    with pytest.raises(UsageError, match="1 to 2000"):
        convert(PLANT, "transfer-function", digits=digits)


def test_too_large_a_plant_is_refused() -> None:
    rng = np.random.default_rng(1)
    source = StateSpace(A=rng.standard_normal((200, 200)), B=np.ones((200, 1)), C=np.ones((1, 200)))
    with pytest.raises(Refused, match="--digits"):
        convert(source, "pole-residue", digits=30)


def test_the_command(run: Callable[..., Any], tmp_path: Path) -> None:
    (tmp_path / "plant.json").write_text(dumps(PLANT))
    output = tmp_path / "out.json"
    arguments = ["convert", tmp_path / "plant.json", "--no-second-opinion", "-o", output]
    assert run(*arguments, "--to", "zero-pole-gain", "--digits", "25").status == 0
    record = json.loads(output.read_text())
    assert isinstance(record["poles"][0][0], str) and len(record["poles"][0][0]) > 24
    assert run(*arguments, "--to", "state-space", "--digits", "25").status == 2
    assert run(*arguments, "--to", "sections", "--digits", "0").status == 2
    assert run(*arguments, "--to", "sections", "--digits", "x").status == 2


def test_the_reader_refuses_what_has_too_many_digits() -> None:
    with pytest.raises(InputError):
        TransferFunction(
            numerator=[1.0], denominator=[1.0, 1.0], decimals={"numerator": {(0, 0, 0): "1." + "1" * 2001}}
        ).exact("numerator")
