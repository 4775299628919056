"""Runs: what they write, what they set aside, how they go on."""

from __future__ import annotations

import fcntl
import json
import os
import shutil
import signal
import time
import zipfile
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from batch_helpers import CONVERT, HEAD, digests_of, plant, records_of

import realize
from realize.batch import writing
from realize.batch.lock import NAME
from realize.errors import InputError, Refused

Make = Callable[..., Path]


def go(folder: Path, **options: Any) -> Any:
    return realize.run(folder / "jobs.toml", processes=1, **options)


def leftovers(folder: Path) -> list[Path]:
    return [path for path in folder.rglob(".realize*")]


def test_records_summary_and_a_second_run(folder: Make) -> None:
    root = folder(4)
    events: list[dict[str, Any]] = []
    made = go(root, on_event=events.append)
    assert (made.status, made.done, made.earlier, made.set_aside) == (0, 4, 0, 0)
    assert {e["event"] for e in events} == {"started", "file", "progress", "finished"}
    lines = records_of(root)
    assert sorted(line["file"] for line in lines) == [f"plants/p{k:04d}.json" for k in range(4)]
    for line in lines:
        model = realize.read(root / "made" / line["output"])
        assert model.receipts[-1].result.digest == line["result"]["digest"]
        assert line["status"] == "done" and line["claims"] and line["seconds"] > 0
    assert json.loads((root / "made" / "jobs.summary.json").read_text())["done"] == 4
    assert {row["name"] for row in made.worst} >= {"response-error", "peak-error"}
    assert leftovers(root) == []

    before = {path: path.stat().st_mtime_ns for path in (root / "made").glob("p*.json")}
    again = go(root)
    assert (again.status, again.done, again.earlier) == (0, 4, 4)
    assert {path: path.stat().st_mtime_ns for path in before} == before
    assert records_of(root) == lines

    (root / "plants" / "p0000.json").write_text(json.dumps(plant(99)))  # another input
    (root / "made" / "p0001.json").unlink()  # an output that has gone
    (root / "made" / "p0002.json").write_text("damaged")
    third = go(root)
    assert (third.status, third.done, third.earlier) == (0, 4, 1)
    assert sorted(line["file"] for line in records_of(root)) == sorted(line["file"] for line in lines)

    (root / "jobs.toml").write_text(HEAD + CONVERT.replace("second-opinion", 'form = "modal"\nsecond-opinion'))
    assert go(root).earlier == 0  # other options


def test_several_steps_with_looks_and_patterns(folder: Make) -> None:
    text = HEAD + (
        CONVERT.replace("{name}", "{name}-states")
        + '[[steps]]\nverb = "inspect"\noutput = "{name}-inspection.json"\n'
        + '[[steps]]\nverb = "reduce"\norder = 1\noutput = "{name}.npz"\nsecond-opinion = false\n'
        + '[[steps]]\nverb = "compare"\n[[steps]]\nverb = "report"\noutput = "pictures/{name}.svg"\n'
    )
    root = folder(1, text)
    made = go(root)
    assert made.status == 0 and made.reports == ["pictures/p0000.svg"]
    lines = records_of(root)
    assert [line["step"] for line in lines] == [1, 2, 3, 4, 5]
    assert (root / "made" / "pictures" / "p0000.svg").read_text().startswith("<?xml")
    assert json.loads((root / "made" / "p0000-inspection.json").read_text())["order"] == 2
    small = realize.read(root / "made" / "p0000.npz")
    assert small.order == 1 and len(small.receipts) == 2
    assert lines[0]["result"] == lines[2]["source"] or lines[2]["source"]["order"] == 2
    assert "linf-error" in {claim["name"] for claim in lines[3]["claims"]}
    assert go(root).earlier == 1


@pytest.mark.parametrize("policy", ["set-aside", "keep", "stop"])
def test_a_failed_claim(folder: Make, policy: str) -> None:
    text = HEAD + f'on-failure = "{policy}"\n[limits]\norder = 1\n' + CONVERT
    root = folder(2, text)
    made = go(root)
    assert made.status == 4
    good, aside = root / "made" / "p0000.json", root / "made" / "set-aside" / "p0000.json"
    assert good.exists() == (policy == "keep") and aside.exists() == (policy != "keep")
    assert (made.kept, made.set_aside) == ((2, 0) if policy == "keep" else (0, 2 if policy == "set-aside" else 1))
    assert all("over the limit: order" in line["reason"] for line in records_of(root) if line["status"] != "done")
    if policy == "set-aside":
        assert go(root).earlier == 2 and go(root, retry=True).earlier == 0
        (root / "jobs.toml").write_text(text.replace("order = 1", "order = 2"))
        better = go(root)
        assert (better.status, better.done) == (0, 2) and good.exists()


def hostile(folder: Path) -> int:
    """Write twenty files that no step can take, and return how many."""
    texts: dict[str, bytes] = {
        "empty": b"",
        "blank": b" \n",
        "noise": bytes(range(256)) * 9,
        "nan": b'{"realize": 1, "kind": "transfer-function", "numerator": [NaN], "denominator": [1, 2]}',
        "deep": b"[" * 100000,
        "deeper": b'{"a":' * 100000,
        "list": b"[1, 2]",
        "kind": b'{"realize": 1, "kind": "spreadsheet"}',
        "version": b'{"realize": 7, "kind": "state-space"}',
        "zero": b'{"realize": 1, "kind": "transfer-function", "numerator": [1], "denominator": [0, 0]}',
        "big": b'{"realize": 1, "kind": "transfer-function", "numerator": [1e999], "denominator": [1, 2]}',
        "digits": b'{"realize": 1, "kind": "transfer-function", "numerator": ['
        + b"9" * 9000
        + b'], "denominator": [1]}',
        "shape": b'{"realize": 1, "kind": "state-space", "A": [[1, 2], [3]], "B": [[1]], "C": [[1]]}',
        "latin": b'{"realize": 1, "kind": "transfer-function", "inputs": [{"name": "\xe9"}]}',
        "outside": b'{"realize": 1, "kind": "state-space", "A": {"file": "../../../etc/passwd"}, "B": [[1]]}',
        "picture": b"\x89PNG\r\n\x1a\n" + b"\0" * 100,
    }
    for name, text in texts.items():
        (folder / f"x-{name}.json").write_bytes(text)
    np.savez(folder / "x-pickle.npz", A=np.array([{"a": 1}], dtype=object), B=np.eye(1), C=np.eye(1))
    (folder / "x-pickle.npz").rename(folder / "x-pickle.json")
    with zipfile.ZipFile(folder / "x-bomb.json", "w", zipfile.ZIP_DEFLATED) as archive:
        archive.writestr("A.npy", b"\0" * 50_000_000)
    os.mkfifo(folder / "x-pipe.json")
    (folder / "x-link.json").symlink_to("/etc/hostname")
    return len(texts) + 4


def test_hostile_files_among_good_ones(folder: Make) -> None:
    root = folder(80)
    count = hostile(root / "plants")
    assert count == 20
    made = go(root)
    assert (made.status, made.done, made.set_aside) == (4, 80, 20)
    bad = [line for line in records_of(root) if line["status"] == "set-aside"]
    assert len({line["file"] for line in bad}) == 20 and all(line["reason"] for line in bad)
    assert not [line for line in bad if line["why"] == "fault"], bad
    assert len(digests_of(root)) == 80 and leftovers(root) == []


def test_a_file_that_takes_too_long_or_too_much_is_set_aside(folder: Make) -> None:
    text = HEAD.replace("plants/*.json", "plants/*") + 'time-limit = 12\nmemory-limit = "500MiB"\n'
    root = folder(6, text + CONVERT.replace('"state-space"', '"transfer-function"\narithmetic = "exact"'))
    rng = np.random.default_rng(1)
    slow, large = 260, 6500
    for name, n in (("p0002-slow", slow), ("p0004-large", large)):
        A = rng.standard_normal((n, n)) if n == slow else np.zeros((n, n))
        np.savez_compressed(root / "plants" / f"{name}.npz", A=A, B=np.ones((n, 1)), C=np.ones((1, n)))
    made = go(root)
    why = {line["file"]: line["why"] for line in records_of(root) if line["status"] == "set-aside"}
    assert made.done == 6 and made.status == 4
    assert why["plants/p0002-slow.npz"] == "time" and why["plants/p0004-large.npz"] in ("memory", "refused", "killed")
    (root / "plants" / "p0002-slow.npz").unlink()
    again = go(root)
    assert again.earlier >= 6 and again.set_aside == 1


def children(pid: int) -> list[int]:
    try:
        return [int(p) for p in Path(f"/proc/{pid}/task/{pid}/children").read_text().split()]
    except OSError:
        return []


def test_killed_again_and_again_nothing_is_lost(folder: Make, start: Callable[..., Any]) -> None:
    count = 36
    root = folder(count)
    assert go(root).status == 0
    undisturbed = digests_of(root)
    shutil.rmtree(root / "made")
    records = root / "made" / "jobs.records.jsonl"
    rng = np.random.default_rng(5)
    for moment in range(6):
        run = start(root, "--processes", "1")
        deadline = time.monotonic() + 60
        while time.monotonic() < deadline and run.poll() is None:
            lines = records.read_bytes().count(b"\n") if records.exists() else 0
            if lines >= 5 * moment:
                break
            time.sleep(0.01)
        time.sleep(float(rng.uniform(0, 0.05)))
        if moment % 2 and (workers := children(run.pid)):
            os.kill(workers[0], signal.SIGKILL)
            time.sleep(0.01)
        run.kill()
        run.communicate()
    made = go(root)
    assert (made.status, made.done) == (0, count)
    assert digests_of(root) == undisturbed
    files = [line["file"] for line in records_of(root)]
    assert len(files) == len(set(files)) == count
    assert leftovers(root) == []


def test_leftovers_and_a_torn_line_are_cleared_away(folder: Make) -> None:
    root = folder(2)
    go(root)
    part = root / "made" / (writing.PREFIX + "0123456789abcdef.part")
    part.write_text("half")
    records = root / "made" / "jobs.records.jsonl"
    records.write_bytes(records.read_bytes()[:-20])
    (root / "made" / NAME).write_text(json.dumps({"host": os.uname().nodename, "pid": 999999}))
    made = go(root)
    assert (made.status, made.earlier) == (0, 1) and leftovers(root) == []
    assert "took over the lock of process 999999" in made.notes[0]
    assert len(records_of(root)) == 2


def test_two_runs_do_not_share_a_folder(folder: Make) -> None:
    root = folder(1)
    (root / "made").mkdir()
    with open(root / "made" / NAME, "w") as other:
        json.dump({"host": os.uname().nodename, "pid": os.getpid()}, other)
        other.flush()
        fcntl.flock(other, fcntl.LOCK_EX)
        with pytest.raises(Refused, match=f"process {os.getpid()} on .* sign of life"):
            go(root)
    (root / "made" / NAME).write_text(json.dumps({"host": "another-machine", "pid": 7}))
    with pytest.raises(Refused, match="process 7 on another-machine"):
        go(root)
    old = time.time() - 3600
    os.utime(root / "made" / NAME, (old, old))
    assert go(root).status == 0


def test_links_are_not_followed_for_writing(folder: Make, tmp_path_factory: pytest.TempPathFactory) -> None:
    elsewhere = tmp_path_factory.mktemp("elsewhere")
    (elsewhere / "victim").write_text("as it was")
    root = folder(2, HEAD + CONVERT.replace("{name}.json", "deep/{name}.json"))
    (root / "made").mkdir()
    (root / "made" / "deep").symlink_to(elsewhere)
    made = go(root)
    assert made.status == 4 and made.set_aside == 2 and "symbolic link" in made.aside[0]["reason"]
    assert [path.name for path in elsewhere.iterdir()] == ["victim"]
    (root / "made" / "deep").unlink()
    (root / "made" / "deep").mkdir()
    (root / "made" / "deep" / "p0000.json").symlink_to(elsewhere / "victim")
    assert go(root, retry=True).status == 0
    assert (elsewhere / "victim").read_text() == "as it was"
    assert not (root / "made" / "deep" / "p0000.json").is_symlink()


def test_a_full_disk_stops_with_words_and_goes_on_later(folder: Make, monkeypatch: pytest.MonkeyPatch) -> None:
    from realize.batch import record

    root = folder(3)
    real, calls = os.write, []

    def full(descriptor: int, data: bytes) -> int:
        if b'"plants/' in bytes(data):
            calls.append(1)
            if len(calls) > 1:
                real(descriptor, bytes(data)[:10])
                raise OSError(28, "No space left on device")
        return real(descriptor, data)

    monkeypatch.setattr(record.os, "write", full)
    made = go(root)
    monkeypatch.undo()
    assert made.status == 5 and "no space left" in made.stopped and "goes on from here" in made.stopped
    assert len(records_of(root)) == 1
    again = go(root)
    assert (again.status, again.done, again.earlier) == (0, 3, 1)


def test_inputs_that_vanish(folder: Make) -> None:
    root = folder(3)
    gone = root / "plants" / "p0001.json"
    text = gone.read_text()

    def lose_a_file(event: dict[str, Any]) -> None:
        if event["event"] == "started" and gone.exists():
            gone.unlink()

    def lose_the_folder(event: dict[str, Any]) -> None:
        if event["event"] == "started":
            (root / "plants").rename(root / "away")

    made = go(root, on_event=lose_a_file)
    assert (made.status, made.done, made.aside[0]["why"]) == (4, 2, "vanished")
    gone.write_text(text)
    assert [getattr(go(root), name) for name in ("status", "done")] == [0, 3]
    shutil.rmtree(root / "made")
    made = go(root, on_event=lose_the_folder)
    assert made.status == 5 and made.set_aside == 0 and "vanished" in made.stopped
    (root / "away").rename(root / "plants")
    assert go(root).status == 0


def test_inputs_that_are_missing_or_collide(folder: Make) -> None:
    root = folder(2, HEAD.replace("plants/*", "plants/q*") + CONVERT)
    with pytest.raises(InputError, match=r"line 2.*no file matches"):
        go(root)
    (root / "jobs.toml").write_text(HEAD + CONVERT.replace("{name}", "all"))
    with pytest.raises(InputError, match=r"line 4.*p0000.*p0001.*would both be written"):
        go(root)


def test_the_command(folder: Make, run: Callable[..., Any], monkeypatch: pytest.MonkeyPatch) -> None:
    root = folder(2)
    (root / "plants" / "bad\n.json").write_text("{}")
    monkeypatch.chdir(root)
    done = run("run", "jobs.toml", "--processes", "1", "--log", "log.jsonl")
    assert done.status == 4
    assert "2 of 3 files done, 1 set aside" in done.out and "response-error" in done.out
    assert "set-aside: plants/bad\\n.json: " in done.err
    assert json.loads((root / "log.jsonl").read_text())["set_aside"] == 1
    done = run("run", "jobs.toml", "--json")
    events = [json.loads(line) for line in done.out.splitlines()]
    assert events[0]["event"] == "started" and events[0]["earlier"] == 3 and events[-1]["event"] == "finished"
    (root / "jobs.toml").write_text("realize = 1\n")
    done = run("run", "jobs.toml")
    assert done.status == 3 and "inputs is missing" in done.err


def test_interrupted(folder: Make, start: Callable[..., Any]) -> None:
    root = folder(60)
    process = start(root, "--processes", "1")
    records = root / "made" / "jobs.records.jsonl"
    deadline = time.monotonic() + 60
    while time.monotonic() < deadline and not (records.exists() and records.stat().st_size):
        time.sleep(0.01)
    process.send_signal(signal.SIGINT)
    _, words = process.communicate(timeout=60)
    assert process.returncode == 130 and b"goes on from here" in words and b"Traceback" not in words
    assert leftovers(root) == [] and json.loads((root / "made" / "jobs.summary.json").read_text())["status"] == 130
