"""Exit statuses and messages: one message naming file, field and what was expected; never a traceback."""

from __future__ import annotations

import json
import os
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

GOOD = '{"realize": 1, "kind": "transfer-function", "numerator": [1, 2], "denominator": [1, 3, 5]}'


def _transfer(numerator: str = "[1]", denominator: str = "[1, 1]", more: str = "") -> str:
    return (
        f'{{"realize": 1, "kind": "transfer-function", "numerator": {numerator}, "denominator": {denominator}{more}}}'
    )


#: file content -> what the message must name
HOSTILE: dict[str, tuple[str | bytes, str]] = {
    "not a number": (_transfer("[1, NaN]"), "numerator[1]"),
    "infinity": (_transfer("[1, Infinity]"), "numerator[1]"),
    "minus infinity": (_transfer("[-Infinity]"), "numerator[0]"),
    "beyond doubles": (_transfer("[1, 1e999]"), "numerator[1]"),
    "huge exponent": (_transfer('["1e999999999"]'), "numerator[0]"),
    "exponent of many digits": (_transfer('["1e' + "9" * 5000 + '"]'), "numerator[0]"),
    "too many digits": (_transfer('["' + "7" * 2001 + '"]'), "numerator[0]"),
    "long integer": (_transfer("[" + "9" * 400 + "]"), "numerator[0]"),
    "endless integer": (_transfer("[" + "9" * 10000 + "]"), "numerator[0]"),
    "decimal not a number": (_transfer('["nan"]'), "numerator[0]"),
    "text": (_transfer('["a"]'), "numerator[0]"),
    "null": (_transfer("null"), "numerator"),
    "true": (_transfer("[true]"), "numerator[0]"),
    "object for a number": (_transfer('[{"a": 1}]'), "numerator[0]"),
    "empty polynomial": (_transfer("[]"), "numerator"),
    "zero denominator": (_transfer(denominator="[0, 0]"), "denominator"),
    "ragged": (
        '{"realize": 1, "kind": "state-space", "A": [[1, 2], [3]], "B": [[1], [2]], "C": [[1, 2]]}',
        "A[1]",
    ),
    "not square": ('{"realize": 1, "kind": "state-space", "A": [[1, 2]], "B": [[1]], "C": [[1, 2]]}', "A"),
    "wrong rows of B": ('{"realize": 1, "kind": "state-space", "A": [[1]], "B": [[1], [2]], "C": [[1]]}', "B"),
    "missing field": ('{"realize": 1, "kind": "state-space", "A": [[1]], "B": [[1]]}', "C"),
    "ragged channels": (_transfer("[[[1], [2]], [[3]]]"), "numerator[1]"),
    "empty": ("", "empty"),
    "blanks": (" \n ", "blanks"),
    "list": ("[]", "object"),
    "deep": (_transfer("[" * 100_000 + "]" * 100_000), "nested"),
    "too deep": (_transfer("[" * 50 + "1" + "]" * 50), "numerator"),
    "wrong kind": ('{"realize": 1, "kind": "transfer function", "numerator": [1], "denominator": [1]}', "kind"),
    "kind is a list": ('{"realize": 1, "kind": ["a"], "numerator": [1], "denominator": [1]}', "kind"),
    "unknown field": (_transfer(more=', "denominater": [1]'), "denominater"),
    "future version": (GOOD.replace('"realize": 1', '"realize": 2'), "version"),
    "version is text": (GOOD.replace('"realize": 1', '"realize": "1"'), "realize"),
    "no version": ('{"kind": "transfer-function", "numerator": [1], "denominator": [1]}', "realize"),
    "garbage": (bytes(range(256)), "binary"),
    "half": (GOOD[:40], "line 1, column"),
    "twice": (_transfer(more=', "numerator": [2]'), "numerator"),
    "not closed": (
        '{"realize": 1, "kind": "zero-pole-gain", "zeros": [], "poles": [[-1, 2]], "gain": 1}',
        "poles[0]",
    ),
    "names": (_transfer(more=', "inputs": [{"name": "a"}, {"name": "b"}]'), "inputs"),
    "surrogate": (_transfer(more=', "inputs": [{"name": "\\ud800"}]'), "inputs[0].name"),
    "negative dead time": (_transfer(more=', "dead_time": {"inputs": [-1]}'), "dead_time.inputs[0]"),
    "dead time not a number": (_transfer(more=', "dead_time": {"inputs": [NaN]}'), "dead_time.inputs[0]"),
    "no period": (_transfer(more=', "time": {"domain": "sampled"}'), "time"),
    "period zero": (_transfer(more=', "time": {"domain": "sampled", "period": 0}'), "time.period"),
    "broken receipt": (_transfer(more=', "receipts": [{"a": 1}]'), "receipts[0]"),
    "offset": (_transfer(more=', "offset": {"inputs": [1, 2]}'), "offset.inputs"),
    "sections of four": (
        '{"realize": 1, "kind": "sections", "sections": [{"numerator": [1, 2, 3, 4], "denominator": [1, 2, 3]}]}',
        "sections[0].numerator",
    ),
    "matrix file outside": (
        '{"realize": 1, "kind": "state-space", "A": {"file": "../../etc/passwd"}, "B": [[1]], "C": [[1]]}',
        "A",
    ),
    "falling frequencies": (
        '{"realize": 1, "kind": "frequency-response", "frequency": [2, 1], "frequency_unit": "Hz", '
        '"response": [[[[1, 0]]], [[[1, 0]]]]}',
        "frequency[1]",
    ),
}


@pytest.mark.parametrize("name", HOSTILE)
def test_a_hostile_file_is_refused_by_name_and_field(name: str, run: Callable[..., Any], tmp_path: Path) -> None:
    content, place = HOSTILE[name]
    path = tmp_path / "model.json"
    path.write_bytes(content if isinstance(content, bytes) else content.encode())
    done = run("inspect", path, "--json")
    assert done.status == 3, done.err
    lines = done.err.strip().split("\n")
    assert len(lines) == 1 and len(lines[0]) < 1000
    assert str(path) in lines[0] and place in lines[0]
    assert done.record["error"]["status"] == 3
    assert done.record["error"]["file"] == str(path)
    again = run("convert", path, "--to", "state-space", "-o", tmp_path / "out.json")
    assert again.status == 3 and not (tmp_path / "out.json").exists()


def test_missing_and_folder_and_forbidden(run: Callable[..., Any], tmp_path: Path) -> None:
    done = run("inspect", tmp_path / "absent.json")
    assert done.status == 3 and "absent.json" in done.err
    done = run("inspect", tmp_path)
    assert done.status == 3 and str(tmp_path) in done.err
    path = tmp_path / "locked.json"
    path.write_text(GOOD)
    path.chmod(0)
    if os.access(path, os.R_OK):
        pytest.skip("permissions do not bind this user")
    done = run("inspect", path)
    assert done.status == 3 and "ermission" in done.err


@pytest.fixture
def good(tmp_path: Path) -> Path:
    path = tmp_path / "good.json"
    path.write_text(GOOD)
    return path


WRONG_USAGE = [
    ["nothing"],
    ["convert"],
    ["convert", "GOOD"],
    ["convert", "GOOD", "--to", "matrix"],
    ["convert", "GOOD", "GOOD", "--to", "state-space"],
    ["convert", "GOOD", "--to", "state-space", "--form", "jordanian"],
    ["convert", "GOOD", "--to", "zero-pole-gain", "--form", "cascade"],
    ["convert", "GOOD", "--to", "state-space", "--common-denominator"],
    ["convert", "GOOD", "--to", "state-space", "--json", "-o", "-"],
    ["convert", "GOOD", "--to", "state-space", "-o", "x.unknown"],
    ["convert", "GOOD", "--to", "state-space", "-o", ""],
    ["convert", "GOOD", "--to", "state-space", "--limit", "peak=1"],
    ["convert", "GOOD", "--to", "state-space", "--limit", "peak-error"],
    ["convert", "GOOD", "--to", "state-space", "--limit", "peak-error=nan"],
    ["convert", "GOOD", "--to", "state-space", "--limit", "peak-error=1e999"],
    ["convert", "GOOD", "--to", "state-space", "-o", "x.csv"],
    ["minimal"],
    ["minimal", "GOOD", "--order", "1"],
    ["reduce", "GOOD"],
    ["reduce", "GOOD", "--order", "1", "--error", "1%"],
    ["reduce", "GOOD", "--order", "-1"],
    ["reduce", "GOOD", "--order", "1.5"],
    ["reduce", "GOOD", "--error", "0"],
    ["reduce", "GOOD", "--error", "-1%"],
    ["reduce", "GOOD", "--error", "nan"],
    ["reduce", "GOOD", "--method", "magic"],
    ["fit", "GOOD"],
    ["fit", "GOOD", "--order", "5..3"],
    ["fit", "GOOD", "--band", "2kHz,1kHz"],
    ["fit", "GOOD", "--band", "1kHz"],
    ["fit", "GOOD", "--band", "1furlong,2kHz"],
    ["fit", "GOOD", "--dead-time", "-1"],
    ["compare", "GOOD"],
    ["compare", "-", "-"],
    ["inspect", "GOOD", "--strict"],
    ["inspect", "GOOD", "--columns", "a,b"],
    ["report", "GOOD"],
    ["report", "GOOD", "-o", "x.unknown"],
    ["demo", "--seed", "-1"],
    ["demo", "--seed", "x"],
]


@pytest.mark.parametrize("arguments", WRONG_USAGE, ids=" ".join)
def test_wrong_usage(
    arguments: list[str], run: Callable[..., Any], good: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    done = run(*(str(good) if argument == "GOOD" else argument for argument in arguments))
    assert done.status == 2, done.err
    assert done.err.startswith("realize: ")
    assert [path.name for path in tmp_path.iterdir()] == [good.name]


WIDE = '{"realize": 1, "kind": "state-space", "A": [[-1, 0], [0, -2]], "B": [[1, 0], [0, 1]], "C": [[1, 0], [0, 1]]}'
DATA = (
    '{"realize": 1, "kind": "frequency-response", "frequency": [1, 2, 3], "frequency_unit": "Hz", '
    '"response": [[[[1, 0]]], [[[0.5, -0.5]]], [[[0.1, -0.2]]]]}'
)
SINGULAR = '{"realize": 1, "kind": "state-space", "A": [[0]], "B": [[1]], "C": [[1]], "E": [[0]]}'
IMPROPER = _transfer("[1, 0, 0]", "[1, 1]")

REFUSED: list[tuple[str, list[str], str]] = [
    (DATA, ["convert", "FILE", "--to", "state-space"], "fit"),
    (DATA, ["minimal", "FILE"], "fit"),
    (DATA, ["reduce", "FILE", "--order", "1"], "fit"),
    (WIDE, ["convert", "FILE", "--to", "sections"], "zero-pole-gain"),
    (WIDE, ["convert", "FILE", "--to", "state-space", "--form", "controllable-companion"], "modal"),
    (WIDE, ["convert", "FILE", "--to", "state-space", "--form", "observable-companion"], "modal"),
    (SINGULAR, ["convert", "FILE", "--to", "transfer-function"], "singular"),
    (SINGULAR, ["inspect", "FILE"], "singular"),
    (SINGULAR, ["minimal", "FILE"], "singular"),
    (SINGULAR, ["minimal", "FILE", "--exact"], "singular"),
    (SINGULAR, ["reduce", "FILE", "--order", "0"], "singular"),
    (SINGULAR, ["compare", "FILE", "FILE"], "singular"),
    (IMPROPER, ["reduce", "FILE", "--order", "1"], "improper"),
]


@pytest.mark.parametrize("case", REFUSED, ids=lambda case: " ".join(case[1]))
def test_refused_with_a_way_out(
    case: tuple[str, list[str], str], run: Callable[..., Any], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    content, arguments, words = case
    monkeypatch.chdir(tmp_path)
    Path("model.json").write_text(content)
    writes = arguments[0] in ("convert", "minimal", "reduce")
    done = run(*("model.json" if a == "FILE" else a for a in arguments), *(["-o", "out.json"] if writes else []))
    assert done.status == 5, done.err
    assert words in done.err
    assert not Path("out.json").exists()


def test_real_processes_end_with_the_same_statuses(spawn: Callable[..., Any], good: Path, tmp_path: Path) -> None:
    broken = tmp_path / "broken.json"
    broken.write_text(_transfer("[NaN]"))
    data = tmp_path / "data.json"
    data.write_text(DATA)
    convert = ["--to", "zero-pole-gain", "--no-second-opinion"]
    for arguments, status in (
        (["convert", good, *convert], 0),
        (["convert", good, "--to", "nothing"], 2),
        (["convert", broken, *convert], 3),
        (["convert", good, *convert, "--limit", "order=1"], 4),
        (["convert", data, *convert], 5),
    ):
        done = spawn(*arguments)
        assert done.status == status, (arguments, done.err)
        assert "Traceback" not in done.err
    done = spawn("--version")
    assert done.status == 0 and done.out.startswith("realize ")


def test_a_fault_is_called_a_fault(
    monkeypatch: pytest.MonkeyPatch, good: Path, capfd: pytest.CaptureFixture[str]
) -> None:
    from realize.commands import inspect as command
    from realize.commands.main import run as run_command

    def broken(*_: Any) -> Any:
        raise AssertionError("something impossible")

    monkeypatch.setattr(command, "inspect", broken)
    assert run_command(["inspect", str(good), "--json"]) == 1
    out, err = capfd.readouterr()
    assert "bug" in err and json.loads(out)["error"]["status"] == 1


def test_no_memory_is_refused(monkeypatch: pytest.MonkeyPatch, good: Path, capfd: pytest.CaptureFixture[str]) -> None:
    from realize.commands import inspect as command
    from realize.commands.main import run as run_command

    def broken(*_: Any) -> Any:
        raise MemoryError

    monkeypatch.setattr(command, "inspect", broken)
    assert run_command(["inspect", str(good)]) == 5
    assert "memory" in capfd.readouterr().err
