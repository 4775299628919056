"""The command line is the schema's: verbs, options, spellings, defaults, help; the schema is consistent in itself."""

from __future__ import annotations

import importlib
import inspect
import json
import math
from collections.abc import Callable
from pathlib import Path
from typing import Any

import click
import pytest

import realize
from realize.commands.build import build_app
from realize.errors import ClaimFailed, InputError, RealizeError, Refused, UsageError
from realize.models import MODEL_TYPES
from realize.schema import (
    CLAIMS,
    COMMON_FIELDS,
    EXIT_STATUSES,
    FIT_METHODS,
    FORMAT_VERSION,
    FORMS,
    KINDS,
    PARAMETRIC_KINDS,
    RECEIPT_OPTIONS,
    REDUCTION_METHODS,
    STRUCTURED,
    UNIVERSAL_KINDS,
    VERBS,
    Claim,
    Receipt,
    judge,
    options_of,
    receipt_from_record,
    receipt_to_record,
)
from realize.schema.values import PARSERS

APP = build_app([])


def test_the_verbs_are_the_commands() -> None:
    assert set(APP.commands) == set(VERBS)
    for verb in VERBS:
        module = importlib.import_module(f"realize.commands.{verb.replace('-', '_')}")
        assert callable(module.execute)


@pytest.mark.parametrize("name", VERBS)
def test_the_options_of_a_command_are_those_of_the_schema(name: str) -> None:
    verb, command = VERBS[name], APP.commands[name]
    found = {
        o
        for parameter in command.params
        if isinstance(parameter, click.Option)
        for o in parameter.opts + parameter.secondary_opts
    }
    expected = {f"--{option.name}" for option in options_of(verb)}
    expected |= {f"--no-{option.name}" for option in options_of(verb) if option.takes == "switch"}
    if verb.makes_model or name in ("report", "demo"):
        expected |= {"-o", "--output"}
    assert found == expected
    arguments = [p for p in command.params if isinstance(p, click.Argument)]
    assert [a.metavar for a in arguments] == list(verb.arguments)
    assert [a.nargs == -1 for a in arguments] == [a.endswith("...") for a in verb.arguments]
    assert command.help == verb.says


@pytest.mark.parametrize("name", VERBS)
def test_help_names_every_option_and_every_choice(name: str, run: Callable[..., Any]) -> None:
    done = run(name, "--help")
    assert done.status == 0
    text = " ".join(done.out.split())
    for option in options_of(VERBS[name]):
        assert f"--{option.name}" in text
        for choice in option.choices:
            assert choice.replace("-", "") in text.replace("-", "").replace(" ", ""), choice


@pytest.mark.parametrize("name", VERBS)
def test_defaults_are_those_of_the_schema(name: str) -> None:
    for option in VERBS[name].options:
        parameter = next(p for p in APP.commands[name].params if p.name == option.keyword)
        if option.default is not None:
            assert parameter.default == option.default


@pytest.mark.parametrize("name", ["convert", "minimal", "reduce", "fit", "inspect", "compare"])
def test_python_functions_take_the_options_of_the_schema(name: str) -> None:
    given = set(inspect.signature(getattr(realize, name)).parameters)
    shell_only = {"explain", "columns", "rate", "history"}  # explain and history are functions of their own
    own = {option.keyword for option in VERBS[name].options} - shell_only
    assert own <= given, own - given


PLANT = '{"realize": 1, "kind": "transfer-function", "numerator": [1, 2], "denominator": [1, 3, 5, 7]}'

#: Positions and velocities: what a kind that is not universal can be read off.
OSCILLATOR = (
    '{"realize": 1, "kind": "state-space", "A": [[0, 1], [-4, -1]], "B": [[0], [1]], "C": [[1, 0]], "D": [[0]]}'
)


@pytest.mark.parametrize("kind", PARAMETRIC_KINDS)
def test_every_kind_is_accepted(kind: str, run: Callable[..., Any], tmp_path: Path) -> None:
    (tmp_path / "plant.json").write_text(PLANT if kind in UNIVERSAL_KINDS else OSCILLATOR)
    done = run("convert", tmp_path / "plant.json", "--to", kind, "--no-second-opinion")
    assert done.status == 0 and done.record["kind"] == kind


@pytest.mark.parametrize("form", FORMS)
def test_every_form_is_accepted(form: str, run: Callable[..., Any], tmp_path: Path) -> None:
    (tmp_path / "plant.json").write_text(PLANT)
    done = run(
        "convert", tmp_path / "plant.json", "--to", "state-space", "--form", form, "--no-second-opinion", "--json"
    )
    assert done.status == 0 and done.record["details"]["form"] == form


@pytest.mark.parametrize("method", REDUCTION_METHODS)
def test_every_reduction_method_is_accepted(method: str, run: Callable[..., Any], tmp_path: Path) -> None:
    (tmp_path / "plant.json").write_text(PLANT)
    arguments = ["reduce", tmp_path / "plant.json", "--order", "2", "--method", method, "--no-second-opinion"]
    if method == "frequency-weighted":
        (tmp_path / "loop.json").write_text(PLANT)
        arguments += ["--controller", tmp_path / "loop.json"]
    assert run(*arguments).status == 0


@pytest.mark.parametrize("method", FIT_METHODS)
def test_every_fit_method_is_accepted(method: str, run: Callable[..., Any], tmp_path: Path) -> None:
    w = [0.25 * 1.5**k for k in range(12)]
    record = {
        "realize": 1,
        "kind": "frequency-response",
        "frequency": w,
        "frequency_unit": "rad/s",
        "response": [[[[1 / (1 + x * x), -x / (1 + x * x)]]] for x in w],
    }
    if method == "ho-kalman":
        samples = [[[0.5**k]] for k in range(20)]
        record = {"realize": 1, "kind": "impulse-response", "period": 0.1, "samples": samples}
    (tmp_path / "data.json").write_text(json.dumps(record))
    arguments = ["fit", tmp_path / "data.json", "--order", "1", "--method", method, "--no-second-opinion"]
    if method == "frequency-weighted":
        (tmp_path / "loop.json").write_text(PLANT)
        arguments += ["--controller", tmp_path / "loop.json"]
    assert run(*arguments).status == 0


@pytest.mark.parametrize("name", CLAIMS)
def test_every_claim_name_is_a_limit(name: str) -> None:
    assert PARSERS["limit"]((f"{name}=0.5",)) == {name: 0.5}


def test_every_value_an_option_takes_has_a_parser() -> None:
    taken = {option.takes for verb in VERBS.values() for option in options_of(verb)}
    assert taken - {"flag", "switch", "choice"} <= set(PARSERS)


@pytest.mark.parametrize(
    ("takes", "text", "value"),
    [
        ("band", "1Hz,2kHz", (2 * math.pi, 4000 * math.pi)),
        ("band", "0.1rad/s,5", (0.1, 5.0)),
        ("band", "1mHz,1MHz", (2e-3 * math.pi, 2e6 * math.pi)),
        ("order", "auto", "auto"),
        ("order", "7", 7),
        ("order", "2..8", (2, 8)),
        ("error", "1%", 0.01),
        ("error", "0.01", 0.01),
        ("time", "2ms", 0.002),
        ("time", "5us", 5e-6),
        ("time", "0.25", 0.25),
        ("columns", "frequency_hz, real ,imaginary", ["frequency_hz", "real", "imaginary"]),
    ],
)
def test_values_of_options(takes: str, text: str, value: Any) -> None:
    found = PARSERS[takes](text)
    assert found == pytest.approx(value) if not isinstance(value, (str, list)) else found == value


@pytest.mark.parametrize(
    ("takes", "text"),
    [
        ("band", "1"), ("band", "2,1"), ("band", "1,1"), ("band", "-1,1"), ("band", "1,2,3"), ("band", "a,b"),
        ("band", "1e999,2"), ("band", "nan,2"), ("order", "-1"), ("order", "1.5"), ("order", "3..1"), ("order", "..3"),
        ("order", ""), ("error", "0"), ("error", "%"), ("error", "-1%"), ("error", "inf"), ("time", "-1"),
        ("time", "1h"), ("time", ""), ("time", "nan"), ("columns", "a,,b"), ("integer", "-1"), ("integer", "1.0"),
        ("integer", "\u0661"), ("number", "0"), ("number", "1e999"),
    ],
)  # fmt: skip
def test_values_that_are_none(takes: str, text: str) -> None:
    with pytest.raises(ValueError, match=r"."):
        PARSERS[takes](text)


def test_kinds_are_models_and_fields_are_theirs() -> None:
    assert set(KINDS) == set(MODEL_TYPES)
    for name, kind in KINDS.items():
        own = set(inspect.signature(MODEL_TYPES[name]).parameters)
        assert {field.name for field in kind.fields} <= own
        assert not {field.name for field in kind.fields} & set(COMMON_FIELDS)
    assert FORMAT_VERSION == 1
    assert set(STRUCTURED) <= set(PARAMETRIC_KINDS) | set(FORMS)


def test_statuses_and_exceptions() -> None:
    statuses = {error.exit_status for error in (RealizeError, UsageError, InputError, ClaimFailed, Refused)}
    assert statuses == {1, 2, 3, 4, 5}
    assert statuses | {0, 130} == set(EXIT_STATUSES)
    assert {option.name for option in RECEIPT_OPTIONS} == {"strict", "limit", "second-opinion", "lines"}


@pytest.mark.parametrize(
    ("value", "limit", "basis", "uncertainty", "holds"),
    [
        (1.0, None, "proved", 0.0, None),
        (1.0, 2.0, "proved", 0.0, True),
        (1.0, 2.0, "proved", 1.5, None),
        (3.0, 2.0, "proved", 0.0, False),
        (1.0, 2.0, "measured", None, None),
        (3.0, 2.0, "measured", None, False),
        (1.0, 2.0, "measured", 0.5, True),
        (math.inf, 2.0, "measured", None, False),
        (math.nan, 2.0, "proved", 0.0, False),
        (1.0, 2.0, "measured", math.inf, None),
        (1.0, 2.0, "bounded", math.nan, None),
        (None, 2.0, "measured", None, None),
        (0.0, 0.0, "proved", 0.0, True),
    ],
)
def test_a_claim_is_judged(value: Any, limit: Any, basis: Any, uncertainty: Any, holds: Any) -> None:
    claim = judge("peak-error", value, limit=limit, basis=basis, uncertainty=uncertainty)
    assert claim.holds is holds
    assert claim.value is None or math.isfinite(claim.value)
    assert claim.uncertainty is None or math.isfinite(claim.uncertainty)
    assert claim.infinite is (value is not None and not math.isfinite(value))


def test_receipts_go_through_json_and_back() -> None:
    made = realize.convert(
        realize.TransferFunction(numerator=[1.0, 2.0], denominator=[1.0, 3.0, 5.0]), "zero-pole-gain"
    ).receipt
    assert isinstance(made, Receipt)
    assert receipt_from_record(json.loads(json.dumps(receipt_to_record(made), allow_nan=False))) == made
    assert all(isinstance(claim, Claim) for claim in made.claims)


def test_the_public_names_are_sorted_and_there() -> None:
    assert realize.__all__ == sorted(realize.__all__)
    for name in realize.__all__:
        assert getattr(realize, name) is not None
    with pytest.raises(AttributeError):
        realize.nothing  # noqa: B018
