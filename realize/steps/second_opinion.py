"""The second opinion: the same step by an independent library, in a child process with limits on time and memory.

The child can crash, hang or answer nonsense: the receipt then says "failed" and the result stands.
"""

from __future__ import annotations

import json
import os
import select
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager, suppress
from contextvars import ContextVar
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from realize.models import Model, PoleResidue, Sections, StateSpace, TransferFunction, ZeroPoleGain, is_data
from realize.schema import Claim, SecondOpinion

#: Seconds that the child may take, counted from its start.
TIME_LIMIT = 30.0
#: Bytes of address space.
MEMORY_LIMIT = 8 * 2**30
#: Largest difference, relative to the largest gain, that still counts as agreement: what library routines of working
#: precision give on harmless models is 1e-8 and better.
AGREEMENT = 1e-6
#: Larger models are not handed over.
LARGEST_ORDER = 1500
FREQUENCIES = 40
#: Bytes of an answer that are looked at.
ANSWER_LIMIT = 256 * 2**20

CHILD = Path(__file__).with_name("opinion_child.py")


def _plain(value: Any) -> Any:
    if isinstance(value, np.ndarray):
        if value.dtype.kind == "c":
            return [value.real.tolist(), value.imag.tolist()]
        return value.tolist()
    if isinstance(value, tuple):
        return [_plain(entry) for entry in value]
    return value


def _request(step: str, source: Model, options: dict[str, Any], frequency: np.ndarray) -> dict[str, Any] | None:
    if is_data(source) or source.beyond_doubles or (source.order or 0) > LARGEST_ORDER:
        return None
    known = (TransferFunction, ZeroPoleGain, PoleResidue, Sections, StateSpace)
    if not isinstance(source, known):
        return None
    fields = {name: _plain(value) for name, value in source.parameters().items() if name != "states"}
    return {
        "step": step,
        "kind": source.kind,
        "shape": list(source.shape),
        "period": source.time.seconds if source.time.sampled else None,
        "fields": fields,
        "options": options,
        "frequency": frequency.tolist(),
    }


Opinion = Callable[[Model], SecondOpinion]


@contextmanager
def asking(step: str, source: Model, options: dict[str, Any], wanted: bool | None) -> Iterator[Opinion | Later | None]:
    """Start the child for a step; yield a function that waits for it and judges the result, None where not wanted.

    With None for ``wanted`` the child of a conversion is started only when the claims leave something open: then a
    `Later` is yielded.

    The child never outlives the step, whatever becomes of it.

    Parameters
    ----------
    step : str
        Name of the verb.
    source : Model
    options : dict
        What the child needs to know of the step.
    wanted : bool or None
    """
    if wanted is None and step in ("convert", "minimal"):
        yield Later(step, source, options)
        return
    if wanted is False:
        yield None
        return
    opinion, close = _ask(step, source, options)
    try:
        yield opinion
    finally:
        close()


@dataclass(frozen=True)
class Later:
    """A second opinion that is asked for only where the claims leave something open."""

    step: str
    source: Model
    options: dict[str, Any]

    def about(self, result: Model, claims: list[Claim]) -> SecondOpinion:
        """Return the opinion, or say why none was asked for."""
        limited = [claim for claim in claims if claim.limit is not None]
        if limited and all(claim.basis == "proved" and claim.holds for claim in limited):
            return SecondOpinion(status="not-asked", note="every limited claim is proved")
        opinion, close = _ask(self.step, self.source, self.options)
        try:
            return opinion(result)
        finally:
            close()


class Worker:
    """A child that answers many requests, one after the other: libraries are imported once.

    It is started at the first request, and again after a request that it did not survive or answer in time.
    """

    def __init__(self) -> None:
        self._child: subprocess.Popen[bytes] | None = None
        self._asked = False

    def send(self, request: dict[str, Any]) -> None:
        """Hand over a request; an answer that nobody waited for ends the child first."""
        if self._asked:
            self.close()
        try:
            if self._child is None:
                self._child = subprocess.Popen(
                    [sys.executable, "-I", str(CHILD), str(MEMORY_LIMIT), str(int(TIME_LIMIT)), "serve"],
                    stdin=subprocess.PIPE,
                    stdout=subprocess.PIPE,
                    stderr=subprocess.DEVNULL,
                    env=_environment(),
                )
            assert self._child.stdin is not None
            self._child.stdin.write(json.dumps(request).encode() + b"\n")
            self._child.stdin.flush()
            self._asked = True
        except OSError:
            self.close()

    def receive(self) -> tuple[int | None, bytes]:
        """Return (0, answer), (status, nothing) of a child that died, or (None, nothing) without an answer in time."""
        child, self._asked = self._child, False
        if child is None or child.stdout is None:
            return 1, b""
        deadline = time.monotonic() + TIME_LIMIT
        answer = b""
        while not answer.endswith(b"\n"):
            left = deadline - time.monotonic()
            ready = select.select([child.stdout], [], [], max(left, 0))[0] if left > 0 else []
            if not ready or len(answer) > ANSWER_LIMIT:
                self.close()
                return None, b""
            part = os.read(child.stdout.fileno(), 1 << 16)
            if not part:
                code = child.wait()
                self.close()
                return code, answer if code == 0 else b""
            answer += part
        return 0, answer

    def close(self) -> None:
        """End the child."""
        child, self._child, self._asked = self._child, None, False
        if child is not None:
            child.kill()
            for stream in (child.stdin, child.stdout):
                if stream is not None:
                    with suppress(OSError):
                        stream.close()
            child.wait()


_kept: ContextVar[Worker | None] = ContextVar("kept", default=None)


@contextmanager
def one_worker() -> Iterator[Worker]:
    """Inside, second opinions come from one child that stays: for many steps in a row."""
    worker = Worker()
    token = _kept.set(worker)
    try:
        yield worker
    finally:
        _kept.reset(token)
        worker.close()


def _environment() -> dict[str, str]:
    return {**os.environ, "OMP_NUM_THREADS": "1", "OPENBLAS_NUM_THREADS": "1"}


def _nothing() -> None:
    """Nothing was started."""


def _answer(status: str, note: str, by: str = "") -> SecondOpinion:
    return SecondOpinion(by=by, status=status, note=note)  # type: ignore[arg-type]


def _ask(step: str, source: Model, options: dict[str, Any]) -> tuple[Opinion, Callable[[], None]]:
    """Start the child; return the function that judges, and the one that ends the child."""
    if step not in ("convert", "minimal", "reduce"):
        return lambda result: _answer("not-applicable", "no independent routine for this step"), _nothing
    from realize.steps.receipts import probe_frequencies

    frequency = probe_frequencies(source, FREQUENCIES) if not is_data(source) else np.ones(1)
    request = _request(step, source, options, frequency)
    if request is None:
        return lambda result: _answer(
            "not-applicable", "the model is too large or beyond the range of doubles"
        ), _nothing
    kept = _kept.get()
    if kept is not None:
        kept.send(request)
        return lambda result: _verdict(*kept.receive(), frequency, result), _nothing
    files = tempfile.TemporaryFile(), tempfile.TemporaryFile()
    files[0].write(json.dumps(request).encode())
    files[0].seek(0)
    try:
        child = subprocess.Popen(
            [sys.executable, "-I", str(CHILD), str(MEMORY_LIMIT), str(int(TIME_LIMIT))],
            stdin=files[0],
            stdout=files[1],
            stderr=subprocess.DEVNULL,
            env=_environment(),
        )
    except OSError as error:
        for file in files:
            file.close()
        note = f"the child process could not be started: {error}"
        return lambda result: _answer("failed", note), _nothing

    def close() -> None:
        if child.poll() is None:
            child.kill()
            child.wait()
        for file in files:
            file.close()

    return lambda result: _judge(child, files[1], frequency, result), close


def _judge(child: subprocess.Popen[bytes], output: Any, frequency: np.ndarray, result: Model) -> SecondOpinion:
    try:
        code = child.wait(timeout=TIME_LIMIT)
    except subprocess.TimeoutExpired:
        return SecondOpinion(status="failed", note=f"no answer within {TIME_LIMIT:g} s")
    output.seek(0)
    return _verdict(code, output.read(ANSWER_LIMIT), frequency, result)


def _verdict(code: int | None, text: bytes, frequency: np.ndarray, result: Model) -> SecondOpinion:
    """Judge an answer; a code of None stands for none in time."""
    if code is None:
        return SecondOpinion(status="failed", note=f"no answer within {TIME_LIMIT:g} s")
    if code != 0 or not text:
        what = f"died with signal {-code}" if code < 0 else f"ended with status {code}"
        return SecondOpinion(status="failed", note=f"the independent library {what}")
    try:
        answer = json.loads(text)
        by = str(answer.get("by", ""))
        if "error" in answer:
            return _answer("not-applicable" if answer.get("inapplicable") else "failed", str(answer["error"])[:300], by)
        parts = [np.array(answer[name], dtype=float) for name in ("real", "imaginary")]
        theirs = np.empty(np.broadcast_shapes(*(part.shape for part in parts)), dtype=complex)
        theirs.real, theirs.imag = parts
    except (ValueError, TypeError, KeyError, AttributeError, RecursionError):
        return SecondOpinion(status="failed", note="the independent library's answer could not be read")
    with np.errstate(all="ignore"):
        ours = result.rational_part(result.time.points(frequency))
    if theirs.shape != ours.shape:
        return SecondOpinion(
            by=by, status="failed", note=f"an answer of shape {list(theirs.shape)} instead of {list(ours.shape)}"
        )
    usable = np.isfinite(ours).all(axis=(1, 2))
    if not np.isfinite(theirs[usable]).all():
        return SecondOpinion(by=by, status="failed", note="its response is infinite or not a number")
    if not usable.any():
        return SecondOpinion(by=by, status="failed", note="no frequency at which the responses could be compared")
    # brought near 1 first: gains of 1e300 have no square
    top = max(float(np.abs(values[usable].view(float)).max()) for values in (ours, theirs))
    power = -int(np.frexp(top)[1]) // 2
    ours, theirs = (
        np.ldexp(np.ldexp(values[usable].view(float), power), power).view(complex) for values in (ours, theirs)
    )
    difference = np.linalg.norm(theirs - ours, axis=(1, 2))
    size = np.linalg.norm(ours, axis=(1, 2)).max()
    worst = int(np.argmax(difference))
    agreement = float(difference[worst] / size) if size > 0 else float(difference[worst] > 0)
    if agreement <= AGREEMENT:
        return SecondOpinion(by=by, agreement=agreement, status="agrees")
    where = frequency[usable][worst]
    return SecondOpinion(
        by=by,
        agreement=agreement,
        status="disagrees",
        note=f"its response differs by {agreement:.1e} of the largest gain at {where:.6g} rad/s",
    )
