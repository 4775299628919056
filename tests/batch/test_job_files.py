"""Job files are checked before anything runs, and the message names the line."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import pytest

from realize.batch.jobs import read_job, verbs_of_jobs
from realize.batch.naming import check_pattern, fill
from realize.batch.toml_lines import line_of, lines_of
from realize.batch.values import value_of
from realize.errors import InputError
from realize.schema import VERBS

GOOD = """realize = 1
inputs = ["plants/*.json"]
output = "made"
on-failure = "keep"
time-limit = "500ms"
memory-limit = "64MiB"

[limits]
peak-error = 1e-12

[[steps]]
verb = "convert"
to = "state-space"   # a comment
strict = true

[[steps]]
verb = "reduce"
error = "1%"
[steps.limits]
peak-error = 0.5
"""


def job(tmp_path: Path, text: str, **options: Any) -> Any:
    (tmp_path / "jobs.toml").write_text(text)
    return read_job(tmp_path / "jobs.toml", **options)


def test_a_good_file_is_read(tmp_path: Path) -> None:
    found = job(tmp_path, GOOD)
    assert found.on_failure == "keep" and found.time_limit == 0.5 and found.memory_limit == 64 << 20
    first, second = found.steps
    assert first.options["to"] == "state-space" and first.strict and first.limits == {"peak-error": 1e-12}
    assert second.options == {"error": 0.01, "method": "auto"} or second.options == {"error": 0.01}
    assert second.limits == {"peak-error": 0.5} and second.output == "{folder}/{name}.json" and first.output is None


@pytest.mark.parametrize(
    ("before", "after", "line", "words"),
    [
        ('"convert"', '"covert"', 12, "did you mean 'convert'"),
        ('"convert"', '"run"', 12, "no verb 'run'"),
        ('to = "state-space"', 'to = "state-spice"', 13, "there are: transfer-function"),
        ('to = "state-space"', 'too = "state-space"', 13, "did you mean 'to'"),
        ('to = "state-space"', "explain = true", 13, "no field 'explain'"),
        ('to = "state-space"', "", 12, "convert needs to"),
        ('to = "state-space"', 'to = "sections"\nform = "modal"', 12, "--form modal goes with"),
        ('error = "1%"', "", 17, "exactly one of"),
        ('error = "1%"', 'error = "-1%"', 18, "not an error greater than zero"),
        ('error = "1%"', 'error = true', 18, "neither a text nor a number"),
        ("strict = true", "strict = 1", 14, "neither true nor false"),
        ("peak-error = 1e-12", "peek-error = 1e-12", 8, "no claim 'peek-error'"),
        ("peak-error = 1e-12", "peak-error = nan", 8, "no finite number"),
        ('"made"', '"../made"', 3, "leads out of the job file's folder"),
        ('"made"', '"/etc"', 3, "leads out of the job file's folder"),
        ('"made"', '"."', 3, "own folder"),
        ('"plants/*.json"', '"/etc/*"', 2, "leads out of the job file's folder"),
        ('"plants/*.json"', '"plants/../../*"', 2, "leads out of the job file's folder"),
        ("realize = 1", "realize = 2", 1, "version 2"),
        ('"keep"', '"ignore"', 4, "stop, set-aside, keep"),
        ('"500ms"', "0", 5, "not a time greater than zero"),
        ('"64MiB"', '"lots"', 6, "no amount of memory"),
        ("strict = true", 'output = "../x.json"', 14, "stay in the output folder"),
        ("strict = true", 'output = "{name}.txt"', 14, ".json or .npz"),
        ("strict = true", 'output = "{name.__class__}.json"', 14, "to fill in"),
        ("strict = true", 'output = "/x.json"', 14, "stay in the output folder"),
    ],
)  # fmt: skip
def test_what_is_wrong_is_named_with_its_line(tmp_path: Path, before: str, after: str, line: int, words: str) -> None:
    assert before in GOOD
    with pytest.raises(InputError) as caught:
        job(tmp_path, GOOD.replace(before, after, 1))
    assert f": line {line}" in str(caught.value)
    assert words in str(caught.value)


@pytest.mark.parametrize("text", ["", "realize = ", "a" * 9, "realize = 1\nrealize = 1", "[[steps]]", "steps = 3"])
def test_what_is_no_job_file_is_refused(tmp_path: Path, text: str) -> None:
    with pytest.raises(InputError):
        job(tmp_path, text)


def test_outside_can_be_allowed(tmp_path: Path) -> None:
    found = job(tmp_path, GOOD.replace('"made"', '"../made"'), allow_outside=True)
    assert found.output == tmp_path.parent.resolve() / "made"


def test_a_link_does_not_lead_the_output_out(tmp_path: Path) -> None:
    (tmp_path / "inside").mkdir()
    (tmp_path / "inside" / "made").symlink_to(tmp_path)
    with pytest.raises(InputError, match="leads out"):
        job(tmp_path / "inside", GOOD)


def test_lines_of_keys() -> None:
    text = (
        'a = """\nx = 1\n"""\nb = [\n 1, # ]\n 2 ]\n"c" = "["\n[t]\nx.y = 1\n[[s]]\nx = 1\n'
        "[[s]]\nx = '''\n[z]\n'''\ny = 2\n"
        "[s.inner]\nz = 3\n"
    )
    found = lines_of(text)
    expected = {
        ("a",): 1, ("b",): 4, ("c",): 7, ("t",): 8, ("t", "x", "y"): 9, ("s", 0): 10, ("s", 0, "x"): 11,
        ("s", 1): 12, ("s", 1, "x"): 13, ("s", 1, "y"): 16, ("s", 1, "inner", "z"): 18,
    }  # fmt: skip
    assert {path: found[path] for path in expected} == expected
    assert ("z",) not in found and ("x",) not in found
    assert line_of(found, ("s", 1, "y", 4)) == 16


@pytest.mark.parametrize(
    ("pattern", "item", "name"),
    [
        ("{name}.json", "a/b.c.json", "b.c.json"),
        ("{folder}/{name}.json", "a/x/b.json", "a/x/b.json"),
        ("{folder}/{name}.json", "b.json", "b.json"),
        ("{folder}/{name}.json", "../../b.json", "b.json"),
        ("{folder}/{name}.json", "/etc/b.json", "b.json"),
        ("{number}-{step}-{name}-{suffix}.npz", "b.csv", "2-reduce-b-csv.npz"),
        ("{name}.json", "{folder}.json", "{folder}.json"),
    ],
)
def test_names_of_outputs(pattern: str, item: str, name: str) -> None:
    check_pattern(pattern)
    assert fill(pattern, item, "reduce", 2) == name


@pytest.mark.parametrize("item", ["...json", "a/...json"])
def test_the_name_of_an_input_does_not_lead_out(item: str) -> None:
    with pytest.raises(ValueError, match="output folder"):
        fill("{name}/x.json", item, "reduce", 1)


@pytest.mark.parametrize("pattern", ["", "{}", "{name", "a}", "a/../b.json", "/a.json", "b/", ".realize-run.json"])
def test_patterns_that_are_refused(pattern: str) -> None:
    with pytest.raises(ValueError, match=r"."):
        check_pattern(pattern)


def test_the_verbs_of_job_files_are_those_of_the_schema() -> None:
    assert set(verbs_of_jobs()) < set(VERBS)
    assert {"fit", "convert", "minimal", "reduce", "inspect", "compare", "report"} <= set(verbs_of_jobs())
    assert not {"run", "demo"} & set(verbs_of_jobs())


@pytest.mark.parametrize(
    ("takes", "value", "result"),
    [
        ("order", 4, 4),
        ("order", "2..5", (2, 5)),
        ("number", 0.1, 0.1),
        ("band", ["1rad/s", "5"], (1.0, 5.0)),
        ("columns", ["a", "b"], ["a", "b"]),
        ("memory", "1.5GiB", 3 << 29),
    ],
)
def test_values(takes: str, value: Any, result: Any) -> None:
    assert value_of(takes, value) == result


def test_the_worst_claim_of_a_summary() -> None:
    from realize.batch import Summary

    def claim(name: str, value: float | None, infinite: bool = False) -> dict[str, Any]:
        more = {"limit": 1.0, "holds": None, "basis": "proved", "unit": "relative"}
        return {"name": name, "value": value, "infinite": infinite, **more}

    found = Summary("j", "o", "r")
    for k, (error, stable) in enumerate([(0.5, 1.0), (0.75, 0.0), (None, 1.0)]):
        claims = [claim("peak-error", error, error is None), claim("stability", stable), claim("order", 3.0)]
        found.add([{"file": f"f{k}", "step": 1, "verb": "reduce", "status": "done", "claims": claims}], earlier=False)
    worst = {row["name"]: (row["value"], row["infinite"], row["file"], row["files"]) for row in found.worst}
    assert worst == {"peak-error": (None, True, "f2", 3), "stability": (0.0, False, "f1", 3)}
