"""What is written where: pipes, records, strict, limits, logs, interruptions; and what travels through every verb."""

from __future__ import annotations

import io
import json
import os
import signal
import subprocess
import sys
import time
from collections.abc import Callable
from itertools import pairwise
from pathlib import Path
from typing import Any

import numpy as np
import pytest

PLANT: dict[str, Any] = {
    "realize": 1,
    "kind": "transfer-function",
    "time": {"domain": "continuous"},
    "inputs": [{"name": "torque", "unit": "N*m"}],
    "outputs": [{"name": "angle", "unit": "rad"}],
    "dead_time": {"inputs": [0.25], "outputs": [0.5], "channels": [[0.125]]},
    "offset": {"inputs": [3.0], "outputs": [4.0]},
    "numerator": [1, 2],
    "denominator": [1, 3, 5, 7],
}
QUIET = "--no-second-opinion"


@pytest.fixture
def plant(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    monkeypatch.chdir(tmp_path)
    path = tmp_path / "plant.json"
    path.write_text(json.dumps(PLANT))
    return path


def _same_signals(record: dict[str, Any]) -> None:
    for name in ("inputs", "outputs", "dead_time", "offset"):
        assert record[name] == PLANT[name], name


@pytest.mark.parametrize("to", ["transfer-function", "zero-pole-gain", "pole-residue", "sections", "state-space"])
def test_names_units_dead_time_and_offset_travel_through_convert(to: str, run: Callable[..., Any], plant: Path) -> None:
    done = run("convert", plant, "--to", to, QUIET)
    assert done.status == 0, done.err
    _same_signals(done.record)
    assert done.record["kind"] == to
    assert [receipt["step"] for receipt in done.record["receipts"]] == ["convert"]


def test_they_travel_through_reduce_and_a_chain(run: Callable[..., Any], plant: Path) -> None:
    assert run("convert", plant, "--to", "state-space", QUIET, "-o", "states.json").status == 0
    assert run("reduce", "states.json", "--order", "2", QUIET, "-o", "small.json").status == 0
    assert run("convert", "small.json", "--to", "zero-pole-gain", QUIET, "-o", "last.npz").status == 0
    done = run("convert", "last.npz", "--to", "transfer-function", QUIET)
    _same_signals(done.record)
    assert [receipt["step"] for receipt in done.record["receipts"]] == ["convert", "reduce", "convert", "convert"]
    chain = done.record["receipts"]
    for before, after in pairwise(chain):
        assert before["result"]["digest"] == after["source"]["digest"]


def test_a_sampled_plant_keeps_its_exact_rate_and_its_dead_time(run: Callable[..., Any], plant: Path) -> None:
    record = PLANT | {
        "time": {"domain": "sampled", "rate": "44100"},
        "dead_time": {"inputs": [3 / 44100], "outputs": [0.0], "channels": [[0.0]]},
        "denominator": [1, -0.5, 0.1],
    }
    plant.write_text(json.dumps(record))
    for to in ("zero-pole-gain", "state-space", "sections"):
        done = run("convert", plant, "--to", to, QUIET)
        assert done.status == 0, done.err
        assert done.record["time"] == record["time"]
        assert done.record["dead_time"] == record["dead_time"]


def test_they_travel_through_fit(run: Callable[..., Any], plant: Path) -> None:
    frequency = np.geomspace(0.1, 10, 60)
    response = np.exp(-0.002j * frequency) / (1j * frequency + 1)
    record = {name: PLANT[name] for name in ("realize", "inputs", "outputs", "offset")} | {
        "kind": "frequency-response",
        "frequency": frequency.tolist(),
        "frequency_unit": "rad/s",
        "response": [[[[value.real, value.imag]]] for value in response],
    }
    Path("data.json").write_text(json.dumps(record))
    done = run("fit", "data.json", "--order", "1", "--dead-time", "2ms", QUIET)
    assert done.status == 0, done.err
    for name in ("inputs", "outputs", "offset"):
        assert done.record[name] == PLANT[name]
    assert np.sum(done.record["dead_time"]["channels"]) == 0.002
    assert np.allclose(done.record["A"], -1.0, rtol=1e-6)
    twice = json.loads(json.dumps(record)) | {"dead_time": {"inputs": [0.001]}}
    Path("data.json").write_text(json.dumps(twice))
    assert run("fit", "data.json", "--order", "1", "--dead-time", "2ms", QUIET).status == 2


def test_the_dead_time_of_the_data_is_taken_out_and_put_back(run: Callable[..., Any], plant: Path) -> None:
    frequency = np.geomspace(0.1, 10, 60)
    response = np.exp(-0.5j * frequency) / (1j * frequency + 1)
    record = {
        "realize": 1,
        "kind": "frequency-response",
        "frequency": frequency.tolist(),
        "frequency_unit": "rad/s",
        "dead_time": {"outputs": [0.5]},
        "response": [[[[value.real, value.imag]]] for value in response],
    }
    Path("data.json").write_text(json.dumps(record))
    done = run("fit", "data.json", "--order", "1", QUIET, "-o", "model.json")
    assert done.status == 0, done.err
    record = run("compare", "data.json", "model.json", "--json").record
    assert record["response-error"]["value"] < 1e-9


def test_pipes(run: Callable[..., Any], spawn: Callable[..., Any], plant: Path) -> None:
    done = spawn("convert", "-", "--to", "zero-pole-gain", QUIET, "-o", "-", stdin=plant.read_bytes())
    assert done.status == 0, done.err
    assert done.record["kind"] == "zero-pole-gain"
    assert "claim" in done.err
    again = spawn("inspect", "-", "--json", stdin=done.out.encode())
    assert again.status == 0 and again.record["order"] == 3
    empty = spawn("inspect", "-", "--json", stdin=b"")
    assert empty.status == 3 and "standard input" in empty.err


def test_json_prints_the_record_and_the_file_holds_the_model(run: Callable[..., Any], plant: Path) -> None:
    done = run("convert", plant, "--to", "sections", "--json", QUIET, "-o", "out.json")
    assert done.status == 0 and done.record["step"] == "convert"
    written = json.loads(Path("out.json").read_text())
    assert written["receipts"][-1]["claims"] == done.record["claims"]
    bare = run("convert", plant, "--to", "sections", "--json", QUIET)
    assert bare.status == 0 and bare.record["step"] == "convert"


def test_a_limit_that_fails_writes_and_ends_with_4(run: Callable[..., Any], plant: Path) -> None:
    done = run("convert", plant, "--to", "zero-pole-gain", "--limit", "order=2", QUIET, "--json", "-o", "out.json")
    assert done.status == 4
    assert Path("out.json").exists()
    claim = next(claim for claim in done.record["claims"] if claim["name"] == "order")
    assert claim["holds"] is False and claim["limit"] == 2
    assert "over the limit: order" in done.err


def test_strict_writes_nothing(run: Callable[..., Any], plant: Path) -> None:
    for output in ("out.json", "out.npz", "-"):
        arguments = ["convert", plant, "--to", "zero-pole-gain", "--limit", "order=2", QUIET, "--strict", "-o", output]
        done = run(*arguments)
        assert done.status == 4 and not done.out
        assert sorted(path.name for path in Path(".").iterdir()) == ["plant.json"]
        assert "no output was written" in done.err


def test_strict_leaves_an_older_file_alone(run: Callable[..., Any], plant: Path) -> None:
    Path("out.json").write_text("old")
    assert (
        run("convert", plant, "--to", "sections", "--limit", "order=2", QUIET, "--strict", "-o", "out.json").status == 4
    )
    assert Path("out.json").read_text() == "old"


@pytest.mark.parametrize("to", ["zero-pole-gain", "state-space", "sections", "transfer-function", "pole-residue"])
def test_a_good_conversion_passes_strict(to: str, run: Callable[..., Any], plant: Path) -> None:
    plant.write_text(json.dumps(PLANT | {"numerator": [1, 2, 3]}))
    done = run("convert", plant, "--to", to, QUIET, "--strict", "-o", "out.json")
    assert done.status == 0, done.err
    assert Path("out.json").exists()


def test_a_limit_on_a_claim_that_is_not_made_is_not_passed_over(run: Callable[..., Any], plant: Path) -> None:
    arguments = ["convert", plant, "--to", "sections", "--limit", "channel-error=1e-9", QUIET, "--json"]
    done = run(*arguments)
    claim = next(claim for claim in done.record["claims"] if claim["name"] == "channel-error")
    assert claim["value"] is None and claim["holds"] is None and claim["limit"] == 1e-9
    assert any("channel-error" in caution for caution in done.record["cautions"])
    assert run(*arguments, "--strict").status == 4


def test_a_missing_folder_and_a_folder_as_output(run: Callable[..., Any], plant: Path) -> None:
    done = run("convert", plant, "--to", "sections", QUIET, "-o", "nowhere/out.json")
    assert done.status == 3 and "nowhere" in done.err
    Path("folder.json").mkdir()
    done = run("convert", plant, "--to", "sections", QUIET, "-o", "folder.json")
    assert done.status == 3 and "folder.json" in done.err


def test_log_appends_a_line_for_each_run(run: Callable[..., Any], plant: Path) -> None:
    for _ in range(2):
        assert run("convert", plant, "--to", "sections", QUIET, "--log", "log.txt", "-o", "out.json").status == 0
    assert run("inspect", plant, "--log", "log.txt").status == 0
    assert run("compare", plant, "out.json", "--log", "log.txt").status == 0
    assert run("convert", plant, "--to", "sections", "--explain", "--json", "--log", "log.txt").status == 0
    lines = [json.loads(line) for line in Path("log.txt").read_text().splitlines()]
    assert len(lines) == 5
    assert lines[0]["step"] == "convert" and lines[4]["route"]
    done = run("inspect", plant, "--log", "nowhere/log.txt")
    assert done.status == 3 and "nowhere/log.txt" in done.err


def test_explain_prints_the_route_and_writes_nothing(run: Callable[..., Any], plant: Path) -> None:
    done = run("convert", plant, "--to", "sections", "--explain", "-o", "out.json")
    assert done.status == 0 and "factors -> sections" in done.out
    assert not Path("out.json").exists()


def test_columns_name_a_bare_table(run: Callable[..., Any], plant: Path) -> None:
    Path("bare.csv").write_text("".join(f"{f},{1 / (1 + f)},{-f / (1 + f)}\n" for f in (1.0, 2.0, 4.0)))
    done = run("inspect", "bare.csv", "--columns", "frequency_hz,real,imaginary", "--json")
    assert done.status == 0 and done.record["lines"] == 3
    assert run("inspect", "bare.csv", "--columns", "frequency_hz,,imaginary").status == 2


def test_compare_takes_several_and_keeps_their_names(run: Callable[..., Any], plant: Path) -> None:
    assert run("convert", plant, "--to", "sections", QUIET, "-o", "b.json").status == 0
    assert run("reduce", plant, "--order", "2", QUIET, "-o", "c.json").status == 0
    done = run("compare", plant, "b.json", "c.json", "--json")
    assert done.status == 0
    assert [row["b"] for row in done.record["comparisons"]] == ["b.json", "c.json"]
    assert done.record["response-error"]["value"] < 1e-14
    assert done.record["comparisons"][1]["response-error"]["value"] > 1e-3
    for row in done.record["comparisons"]:
        for name in ("response-error", "peak-error", "linf-error", "h2-error"):
            assert set(row[name]) >= {"value", "basis", "holds", "infinite"}


def test_compare_over_a_band_looks_there_alone(run: Callable[..., Any], plant: Path) -> None:
    other = plant.with_name("other.json")
    other.write_text(json.dumps(PLANT | {"denominator": [1, 3, 5, 7.7]}))
    whole = run("compare", plant, other, "--json").record["response-error"]["value"]
    part = run("compare", plant, other, "--band", "100,1000", "--json").record["response-error"]["value"]
    assert whole > 0.09
    # 0.7 / |jw|^3 and below from 100 rad/s on
    assert 0 < part < 1e-6


def test_compare_of_unlike_models(run: Callable[..., Any], plant: Path) -> None:
    wide = '{"realize": 1, "kind": "state-space", "A": [[-1]], "B": [[1, 2]], "C": [[1]]}'
    Path("wide.json").write_text(wide)
    done = run("compare", plant, "wide.json")
    assert done.status == 3 and "wide.json" in done.err
    Path("sampled.json").write_text(json.dumps(PLANT | {"time": {"domain": "sampled", "period": 0.125}}))
    assert run("compare", plant, "sampled.json").status == 5


def test_reader_gone(plant: Path) -> None:
    """A closed pipe is no traceback."""
    child = subprocess.Popen(
        [sys.executable, "-m", "realize", "convert", str(plant), "--to", "sections", QUIET],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
    )
    assert child.stdout is not None and child.stderr is not None
    child.stdout.close()
    err = child.stderr.read().decode()
    child.stderr.close()
    assert child.wait(60) == 141
    assert "Traceback" not in err


def test_interruption_leaves_nothing_half_written(plant: Path, tmp_path: Path) -> None:
    """The model comes through a named pipe, so that the moment at which the work begins is known."""
    n = 300
    random = np.random.default_rng(0)
    A = random.standard_normal((n, n)) - 2 * np.sqrt(n) * np.eye(n)
    record = {
        "realize": 1,
        "kind": "state-space",
        "A": A.tolist(),
        "B": random.standard_normal((n, 4)).tolist(),
        "C": random.standard_normal((4, n)).tolist(),
    }
    Path("out.json").write_text("old")
    os.mkfifo("pipe.json")
    child = subprocess.Popen(
        # errors are measured order by order, so that the work is not over before the interruption
        [sys.executable, "-m", "realize", "reduce", "pipe.json", "--error", "0.001", "--measured"]
        + ["-o", "out.json", "--log", "log.txt"],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        env={**os.environ, "OMP_NUM_THREADS": "1"},
    )
    with open("pipe.json", "w") as stream:  # opens when the command does
        json.dump(record, stream)
    time.sleep(0.2)
    assert child.poll() is None
    child.send_signal(signal.SIGINT)
    _, err = child.communicate(timeout=60)
    assert child.returncode == 130, err.decode()
    assert b"Traceback" not in err and b"interrupted" in err
    assert Path("out.json").read_text() == "old"
    assert sorted(path.name for path in tmp_path.iterdir()) == ["out.json", "pipe.json", "plant.json"]


def test_standard_output_that_is_no_terminal_gets_no_colours(run: Callable[..., Any], plant: Path) -> None:
    done = run("inspect", plant)
    assert done.status == 0 and "\x1b" not in done.out + done.err


def test_text_from_files_cannot_move_the_cursor(run: Callable[..., Any], plant: Path) -> None:
    plant.write_text(json.dumps(PLANT | {"inputs": [{"name": "\x1b[2Jboo\nfake line", "unit": ""}]}))
    done = run("inspect", plant)
    assert "\x1b" not in done.out and "\nfake line" not in done.out
    bad = plant.with_name("bad\nname.json")
    bad.write_text("[]")
    done = run("inspect", bad)
    assert done.status == 3 and len(done.err.strip().split("\n")) == 1


def test_infinite_claims_are_null_in_the_record(run: Callable[..., Any], plant: Path) -> None:
    zero = plant.with_name("zero.json")
    zero.write_text(json.dumps(PLANT | {"numerator": [0]}))
    done = run("compare", zero, plant, "--json")
    assert done.status == 0
    assert done.record["response-error"]["value"] is None and done.record["response-error"]["infinite"] is True


def test_in_process_stdin_that_is_bytes(run: Callable[..., Any], plant: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(sys, "stdin", io.TextIOWrapper(io.BytesIO(plant.read_bytes())))
    done = run("inspect", "-", "--json")
    assert done.status == 0 and done.record["order"] == 3
