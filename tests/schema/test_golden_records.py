"""The JSON records of every verb keep their structure.

Golden files hold names and types and the words that are contract, no numbers.
``python tests/schema/test_golden_records.py`` writes the golden files anew; a change of them is a change of the format.
"""

from __future__ import annotations

import json
import os
import sys
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from realize.schema import BASES, CLAIMS, VERBS

GOLDEN = Path(__file__).parents[1] / "golden"
#: Fields whose text is part of the contract and is compared as it stands.
WORDS = {"name", "basis", "step", "kind", "status", "domain", "meaning"}
QUIET = "--no-second-opinion"

PLANT = {
    "realize": 1,
    "kind": "transfer-function",
    "time": {"domain": "continuous"},
    "inputs": [{"name": "force", "unit": "N"}],
    "outputs": [{"name": "position", "unit": "m"}],
    "dead_time": {"inputs": [0.5], "outputs": [0.0], "channels": [[0.0]]},
    "numerator": [1, 2],
    "denominator": [1, 3, 5, 7],
}
HIDDEN = PLANT | {"numerator": [1, 3, 2], "denominator": [1, 6, 11, 6]}
SMALLER = PLANT | {"denominator": [1, 3, 5, 7.5]}
WIDE = {
    "realize": 1,
    "kind": "state-space",
    "time": {"domain": "sampled", "period": 0.125},
    "A": [[0.5, 0.25], [0, 0.25]],
    "B": [[1, 0], [0, 1]],
    "C": [[1, 0], [1, 1]],
}
W = [0.25 * 1.25**k for k in range(24)]
DATA = {
    "realize": 1,
    "kind": "frequency-response",
    "frequency": W,
    "frequency_unit": "rad/s",
    "response": [[[[1 / (1 + w * w), -w / (1 + w * w)]]] for w in W],
    "deviation": [[[1e-3]] for _ in W],
}
FILES = {"plant.json": PLANT, "hidden.json": HIDDEN, "smaller.json": SMALLER, "wide.json": WIDE, "data.json": DATA}

RECORDS: dict[str, list[str]] = {
    "convert": ["convert", "plant.json", "--to", "state-space", "--json", "--second-opinion", "-o", "out.json"],
    "convert-quiet": ["convert", "plant.json", "--to", "zero-pole-gain", "--json", QUIET],
    "convert-several": ["convert", "wide.json", "--to", "pole-residue", "--json", QUIET],
    "convert-explain": ["convert", "plant.json", "--to", "sections", "--explain", "--json"],
    "fit": ["fit", "data.json", "--order", "1..2", "--json", QUIET],
    "minimal": ["minimal", "hidden.json", "--json", QUIET],
    "reduce": ["reduce", "plant.json", "--order", "2", "--json", QUIET],
    "reduce-error": ["reduce", "plant.json", "--error", "20%", "--json", QUIET],
    "inspect": ["inspect", "plant.json", "--json"],
    "inspect-several": ["inspect", "wide.json", "--json"],
    "inspect-data": ["inspect", "data.json", "--json"],
    "compare": ["compare", "plant.json", "smaller.json", "--json"],
    "compare-data": ["compare", "data.json", "data.json", "--json"],
    "report": ["report", "plant.json", "-o", "plant.svg", "--json"],
    "error": ["inspect", "absent.json", "--json"],
    "run": ["run", "jobs.toml", "--json", "--processes", "1"],
    "demo": ["demo", "-o", "folder", "--json"],
}


def shape(value: Any, field: str = "") -> Any:
    """Return names and types of a record; entries of a list that look alike once."""
    if isinstance(value, dict):
        if field in ("versions", "claims") and all(not isinstance(v, (dict, list)) for v in value.values()):
            return {name: "text" if isinstance(v, str) else "number" for name, v in value.items()}
        return {name: shape(entry, name) for name, entry in value.items()}
    if isinstance(value, list):
        seen: list[Any] = []
        for entry in value:
            found = shape(entry, field)
            if found not in seen:
                seen.append(found)
        return seen
    if isinstance(value, bool):
        return "boolean"
    if isinstance(value, (int, float)):
        return "number"
    if value is None:
        return "null"
    return value if field in WORDS else "text"


JOBS = 'realize = 1\ninputs = "plant.json"\noutput = "made"\n[[steps]]\nverb = "convert"\nto = "sections"\n'


def write_inputs() -> None:
    Path("jobs.toml").write_text(JOBS)
    for name, record in FILES.items():
        Path(name).write_text(json.dumps(record))


def last_record(text: str) -> Any:
    """Return the record of a command; of a run, which prints a line for each event, the last one."""
    lines = text.splitlines()
    return json.loads(lines[-1] if lines[0].startswith('{"event"') else text)


def frozen(record: Any) -> Any:
    """Return the shape, without what may come and go: how many cautions there are, notes, where a value was found."""
    made = shape(record)

    def strip(value: Any) -> None:
        if isinstance(value, dict):
            for name in ("cautions", "route"):
                if isinstance(value.get(name), list):
                    value[name] = ["text"]
            if "where" in value:
                value["where"] = {}
            if set(value) >= {"value", "holds", "uncertainty", "basis"}:
                # measured, bounded or proved, with or without a bound: the method's own business, and free to improve
                value.update(uncertainty="number or null", holds="boolean or null", basis="basis")
            if set(value) >= {"basis", "freedom"}:
                # error bars of exact data hang on the misfit's rounding
                value.update(basis="basis")
            for entry in value.values():
                strip(entry)
        elif isinstance(value, list):
            for entry in value:
                strip(entry)

    strip(made)
    return made


@pytest.mark.parametrize("name", RECORDS)
def test_the_record_keeps_its_structure(
    name: str, run: Callable[..., Any], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    if name == "convert":
        pytest.importorskip("scipy.signal")
    monkeypatch.chdir(tmp_path)
    write_inputs()
    done = run(*RECORDS[name])
    assert done.status == (3 if name == "error" else 0), done.err
    golden = json.loads((GOLDEN / f"{name}.json").read_text())
    assert frozen(last_record(done.out)) == golden


def test_every_verb_has_a_golden_record() -> None:
    assert {arguments[0] for arguments in RECORDS.values()} == set(VERBS)
    assert {path.stem for path in GOLDEN.glob("*.json")} == set(RECORDS)


def _claims_of(value: Any) -> list[dict[str, Any]]:
    if isinstance(value, dict):
        own = [value] if {"name", "value", "basis"} <= set(value) else []
        return own + [claim for entry in value.values() for claim in _claims_of(entry)]
    return [claim for entry in value for claim in _claims_of(entry)] if isinstance(value, list) else []


@pytest.mark.parametrize(
    "name", ["convert-quiet", "convert-several", "fit", "minimal", "reduce", "compare", "compare-data"]
)
def test_claims_are_those_of_the_schema_and_consistent(
    name: str, run: Callable[..., Any], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    write_inputs()
    claims = _claims_of(run(*RECORDS[name]).record)
    assert claims
    for claim in claims:
        assert claim["name"] in CLAIMS
        assert claim["unit"] == CLAIMS[claim["name"]].unit
        assert claim["basis"] in BASES
        assert set(claim["where"]) <= {"frequency", "output", "input", "note"}
        if claim["infinite"]:
            assert claim["value"] is None
        if claim["limit"] is None:
            assert claim["holds"] is None
        elif claim["value"] is not None:
            total = claim["value"] + (claim["uncertainty"] or 0.0)
            bounded = claim["basis"] != "measured" or claim["uncertainty"] is not None
            assert claim["holds"] == (
                False if claim["value"] > claim["limit"] else True if bounded and total <= claim["limit"] else None
            )


def test_digests_leave_out_times_and_versions(
    run: Callable[..., Any], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The same step twice gives the same digests; the digest is of the model, not of its receipts."""
    monkeypatch.chdir(tmp_path)
    write_inputs()
    first, second = (run(*RECORDS["convert-quiet"]).record for _ in range(2))
    assert first["result"] == second["result"] and first["source"] == second["source"]
    assert {**first, "seconds": 0, "versions": {}} == {**second, "seconds": 0, "versions": {}}
    run("convert", "plant.json", "--to", "sections", QUIET, "-o", "one.json")
    record = json.loads(Path("one.json").read_text())
    digest = run("inspect", "one.json", "--json").record["digest"]
    record["receipts"][0]["seconds"] = 1234.5
    record["receipts"][0]["versions"] = {"realize": "99"}
    Path("two.json").write_text(json.dumps(record))
    assert run("inspect", "two.json", "--json").record["digest"] == digest
    del record["receipts"]
    Path("two.json").write_text(json.dumps(record))
    assert run("inspect", "two.json", "--json").record["digest"] == digest
    for field, value in (
        ("gain", 5.0),
        ("inputs", [{"name": "other", "unit": "N"}]),
        ("dead_time", {"inputs": [0.25]}),
    ):
        Path("two.json").write_text(json.dumps(record | {field: value}))
        assert run("inspect", "two.json", "--json").record["digest"] != digest, field


def _regenerate() -> None:
    import contextlib
    import io
    import shutil
    import tempfile

    from realize.commands.main import run as run_command

    GOLDEN.mkdir(exist_ok=True)
    folder = tempfile.mkdtemp()
    os.chdir(folder)
    write_inputs()
    for name, arguments in RECORDS.items():
        out = io.StringIO()
        with contextlib.redirect_stdout(out):
            run_command(arguments)
        (GOLDEN / f"{name}.json").write_text(json.dumps(frozen(last_record(out.getvalue())), indent=1) + "\n")
    os.chdir("/")
    shutil.rmtree(folder)


if __name__ == "__main__":
    sys.exit(_regenerate())
