"""`--lines`: JSON lines in and out."""

from __future__ import annotations

import json
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from realize.files import model_from_record
from realize.models import mark
from realize.schema import VERBS, options_of

QUIET = "--no-second-opinion"
GOOD = {"realize": 1, "kind": "transfer-function", "numerator": [1, 2], "denominator": [1, 3, 5]}


def test_good_and_bad_lines(spawn: Callable[..., Any]) -> None:
    lines = [json.dumps(GOOD), "{", "", json.dumps(GOOD | {"denominator": [0]}), "[1]", json.dumps(GOOD)]
    text = ("\n".join(lines) + "\n").encode() + b"\xff\xfe\n" + json.dumps(GOOD).encode()
    done = spawn("convert", "--lines", "-", "--to", "state-space", QUIET, "-o", "-", stdin=text)
    assert done.status == 4 and "Traceback" not in done.err
    records = [json.loads(line) for line in done.out.splitlines()]
    assert [record.get("kind", "error") for record in records] == [
        "state-space", "error", "error", "error", "state-space", "error", "state-space",
    ]  # fmt: skip
    assert [record["error"]["line"] for record in records if "error" in record] == [2, 4, 5, 7]
    assert records[2]["error"]["field"].startswith("denominator") and records[2]["error"]["status"] == 3
    first = model_from_record(records[0])
    assert first.receipts[-1].result.digest == mark(first).digest
    assert "of 7 lines 4 could not be done" in done.err


def test_files_receipts_and_limits(run: Callable[..., Any], tmp_path: Path) -> None:
    source = tmp_path / "in.jsonl"
    source.write_text((json.dumps(GOOD) + "\n") * 2)
    out, log = tmp_path / "out.jsonl", tmp_path / "log.jsonl"
    done = run("reduce", "--lines", source, "--order", "1", QUIET, "--json", "-o", out, "--log", log)
    assert done.status == 0
    receipts = [json.loads(line) for line in done.out.splitlines()]
    assert [receipt["step"] for receipt in receipts] == ["reduce", "reduce"]
    assert [json.loads(line) for line in log.read_text().splitlines()] == receipts
    assert all(model_from_record(json.loads(line)).order == 1 for line in out.read_text().splitlines())
    done = run("convert", "--lines", source, "--to", "sections", QUIET, "--limit", "order=1", "--strict")
    assert done.status == 4 and [json.loads(line)["error"]["status"] for line in done.out.splitlines()] == [4, 4]


def test_wrong_usage(run: Callable[..., Any], tmp_path: Path) -> None:
    source = tmp_path / "in.jsonl"
    source.write_text(json.dumps(GOOD) + "\n")
    assert run("convert", "--lines", source).status == 2
    assert run("convert", "--lines", source, "--to", "sections", "--explain").status == 2
    assert run("convert", "--lines", source, "--to", "sections", "--form", "modal").status == 2
    assert run("convert", "--lines", tmp_path / "absent", "--to", "sections").status == 3


@pytest.mark.parametrize("verb", [verb for verb in VERBS.values() if verb.makes_receipt], ids=lambda verb: verb.name)
def test_every_verb_with_a_receipt_takes_lines(verb: Any) -> None:
    assert "lines" in {option.name for option in options_of(verb)}
