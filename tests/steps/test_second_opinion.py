"""The second opinion agrees, disagrees, crashes, hangs or talks nonsense: the result is the same."""

from __future__ import annotations

import os
import subprocess
import time
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import realize
from realize.errors import Refused
from realize.models import FrequencyResponse, StateSpace, TransferFunction, digest
from realize.steps import convert, fit, reduce, second_opinion

PLANT = TransferFunction(numerator=[1.0, 2.0], denominator=[1.0, 3.0, 5.0, 7.0])

ANSWERS = {
    "segfault": ("import os, signal; os.kill(os.getpid(), signal.SIGSEGV)", "signal 11"),
    "status": ("import sys; sys.exit(3)", "status 3"),
    "nothing": ("pass", "status 0"),
    "not a number": (
        'import json, sys; r = json.load(sys.stdin); k = len(r["frequency"]);'
        'print(json.dumps({"by": "x", "real": [[[float("nan")]]] * k, "imaginary": [[[0.0]]] * k}))',
        "not a number",
    ),
    "infinite": (
        'import json, sys; r = json.load(sys.stdin); k = len(r["frequency"]);'
        'print(json.dumps({"by": "x", "real": [[[1e999]]] * k, "imaginary": [[[0.0]]] * k}))',
        "infinite",
    ),
    "wrong shape": ('print(\'{"by": "x", "real": [1.0], "imaginary": [2.0]}\')', "shape"),
    "ragged": ('print(\'{"by": "x", "real": [1.0, [2]], "imaginary": [2.0]}\')', "could not be read"),
    "parts that do not fit": (
        'print(\'{"by": "x", "real": [1.0, 2.0, 3.0], "imaginary": [2.0, 1.0]}\')',
        "could not be",
    ),
    "half an answer": ('print(\'{"by": "x", "real": [1.0]}\')', "could not be read"),
    "text for numbers": ('print(\'{"by": "x", "real": "a", "imaginary": {}}\')', "could not be read"),
    "a list": ("print([1, 2])", "could not be read"),
    "no JSON": ('print("hello")', "could not be read"),
    "nested": ('print("[" * 100000)', "could not be read"),
    "binary": ('import sys; sys.stdout.buffer.write(b"\\xff\\xfe\\x00" * 10)', "could not be read"),
    "error": ('print(\'{"error": "LinAlgError: singular"}\')', "singular"),
}


def _child(tmp_path: Path, monkeypatch: pytest.MonkeyPatch, text: str) -> None:
    script = tmp_path / "child.py"
    script.write_text(text)
    monkeypatch.setattr(second_opinion, "CHILD", script)


@pytest.mark.parametrize("name", ANSWERS)
def test_a_child_that_fails_harms_nothing(name: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    text, note = ANSWERS[name]
    _child(tmp_path, monkeypatch, text)
    made = convert(PLANT, "zero-pole-gain", second_opinion=True)
    opinion = made.receipt.second_opinion
    assert opinion.status == "failed"
    assert note in opinion.note
    assert opinion.agreement is None
    assert digest(made.model) == digest(convert(PLANT, "zero-pole-gain").model)
    assert not made.receipt.failed


def test_a_child_that_hangs_is_ended(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    marker = tmp_path / "pid"
    _child(
        tmp_path,
        monkeypatch,
        f"import os, signal, time; signal.signal(signal.SIGTERM, signal.SIG_IGN);"
        f"open({str(marker)!r}, 'w').write(str(os.getpid())); time.sleep(60)",
    )
    monkeypatch.setattr(second_opinion, "TIME_LIMIT", 1.5)
    started = time.monotonic()
    made = convert(PLANT, "zero-pole-gain", second_opinion=True)
    assert time.monotonic() - started < 30, "ended, not waited for"
    assert made.receipt.second_opinion.status == "failed"
    assert "1.5 s" in made.receipt.second_opinion.note
    with pytest.raises(ProcessLookupError):
        os.kill(int(marker.read_text()), 0)


def test_no_interpreter_is_a_failed_opinion(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(second_opinion.sys, "executable", "/nonexistent/python")
    assert convert(PLANT, "zero-pole-gain", second_opinion=True).receipt.second_opinion.status == "failed"


def test_a_refused_step_leaves_no_child_behind(monkeypatch: pytest.MonkeyPatch) -> None:
    """Sections hold one channel: refused after the child was started."""
    started: list[subprocess.Popen[Any]] = []
    original = subprocess.Popen

    def watched(*arguments: Any, **options: Any) -> Any:
        started.append(original(*arguments, **options))
        return started[-1]

    monkeypatch.setattr(second_opinion.subprocess, "Popen", watched)
    wide = StateSpace(A=[[-1.0]], B=[[1.0, 2.0]], C=[[1.0]])
    with pytest.raises(Refused):
        convert(wide, "sections", second_opinion=True)
    assert all(child.poll() is not None for child in started)


def test_agrees_on_simple_models() -> None:
    for to in ("state-space", "zero-pole-gain"):
        opinion = convert(PLANT, to, second_opinion=True).receipt.second_opinion
        assert opinion.status == "agrees" and opinion.by and opinion.agreement is not None
        assert opinion.agreement < 1e-9


def test_disagrees_where_the_library_is_wrong(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    _child(
        tmp_path,
        monkeypatch,
        'import json, sys; r = json.load(sys.stdin); k = len(r["frequency"]);'
        'print(json.dumps({"by": "x", "real": [[[0.5]]] * k, "imaginary": [[[0.0]]] * k}))',
    )
    made = convert(PLANT, "zero-pole-gain", second_opinion=True)
    assert made.receipt.second_opinion.status == "disagrees"
    assert any("disagrees" in caution for caution in made.receipt.cautions)


@pytest.mark.parametrize("gain", [1e300, 1e-300])
def test_huge_and_tiny_gains_are_compared_without_overflow(
    gain: float, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    _child(
        tmp_path,
        monkeypatch,
        'import json, sys; r = json.load(sys.stdin); g = r["fields"]["gain"][0][0];'
        'v = [g / (1j * w + 1) for w in r["frequency"]];'
        'print(json.dumps({"by": "x", "real": [[[x.real]] for x in v], "imaginary": [[[x.imag]] for x in v]}))',
    )
    from realize.models import ZeroPoleGain

    model = ZeroPoleGain(zeros=[], poles=[-1.0], gain=gain)
    opinion = convert(model, "transfer-function", second_opinion=True).receipt.second_opinion
    assert opinion.status == "agrees"
    assert opinion.agreement is not None and opinion.agreement < 1e-14


def test_fit_has_no_independent_routine_and_data_are_not_handed_over() -> None:
    w = np.geomspace(0.1, 100, 40)
    data = FrequencyResponse(frequency=w, frequency_unit="rad/s", response=(1 / (1j * w + 2))[:, None, None])
    made = fit(data, order=1, second_opinion=True)
    assert made.receipt.second_opinion.status == "not-applicable"


def test_reduce_agrees_with_the_library() -> None:
    pytest.importorskip("slycot")
    n = 6
    plant = StateSpace(A=np.diag(-np.arange(1.0, n + 1)) + np.eye(n, k=1), B=np.ones((n, 1)), C=np.ones((1, n)))
    opinion = reduce(plant, order=3, second_opinion=True).receipt.second_opinion
    assert opinion.status == "agrees" and "slycot" in opinion.by


def test_none_is_asked_where_everything_is_proved() -> None:
    """From the shell a conversion whose limited claims are all proved needs nobody else's word."""
    plant = realize.TransferFunction(numerator=[1.0, 5.1], denominator=[1.0, 3.3, 2.7])
    opinion = realize.convert(plant, "state-space", second_opinion=None).receipt.second_opinion
    assert opinion.status == "not-asked" and opinion.note == "every limited claim is proved"


def test_exact_arithmetic_says_who_is_right(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """A library that answers 1 everywhere disagrees with 1/(s + 1); the claims are proved, so the library is wrong."""
    child = tmp_path / "child.py"
    child.write_text(
        "import json, sys\n"
        "r = json.load(sys.stdin)\n"
        "n = len(r['frequency'])\n"
        "one = [[[1.0]]] * n\n"
        "json.dump({'by': 'a library', 'real': one, 'imaginary': [[[0.0]]] * n}, sys.stdout)\n"
    )
    monkeypatch.setattr("realize.steps.second_opinion.CHILD", child)
    plant = realize.TransferFunction(numerator=[1.0], denominator=[1.0, 1.0])
    receipt = realize.convert(plant, "state-space", second_opinion=True).receipt
    assert receipt.second_opinion.status == "disagrees"
    assert any(
        "Exact arithmetic proves this result right, so a library is wrong here" in text for text in receipt.cautions
    )


def test_one_worker_serves_many_steps() -> None:
    with second_opinion.one_worker() as worker:
        first = convert(PLANT, "state-space", second_opinion=True).receipt.second_opinion
        child = worker._child
        second = convert(PLANT, "zero-pole-gain", second_opinion=True).receipt.second_opinion
        assert first.status == second.status == "agrees"
        assert child is not None and worker._child is child
    assert child.poll() is not None


@pytest.mark.parametrize(("name", "note"), [("segfault", "signal 11"), ("status", "status 3"), ("no JSON", "read")])
def test_a_worker_that_dies_is_started_again(
    name: str, note: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    good = second_opinion.CHILD
    with second_opinion.one_worker():
        _child(tmp_path, monkeypatch, "input()\n" + ANSWERS[name][0])
        failed = convert(PLANT, "state-space", second_opinion=True).receipt.second_opinion
        assert failed.status == "failed" and note in failed.note
        monkeypatch.setattr(second_opinion, "CHILD", good)
        second = convert(PLANT, "state-space", second_opinion=True).receipt.second_opinion
        assert second.status in ("agrees", "failed")
        assert convert(PLANT, "state-space", second_opinion=True).receipt.second_opinion.status == "agrees"


def test_a_worker_that_hangs_is_ended(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    _child(tmp_path, monkeypatch, "import time; time.sleep(60)")
    monkeypatch.setattr(second_opinion, "TIME_LIMIT", 0.5)
    started = time.monotonic()
    with second_opinion.one_worker() as worker:
        opinion = convert(PLANT, "state-space", second_opinion=True).receipt.second_opinion
        assert opinion.status == "failed" and "no answer" in opinion.note
        assert worker._child is None
    assert time.monotonic() - started < 10
