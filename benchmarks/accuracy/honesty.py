"""Are the claims honest? Thousands of generated models through every step, each claim against the exact error.

For every claim with a limit or an uncertainty, value + uncertainty must not be below the truth, which `honesty_claims`
finds in exact rational arithmetic by a search of its own. Prints violations (there must be none), the tightest and the
loosest ratio (value + uncertainty) / truth, and how many claims of each step are proved, bounded and measured.

    python benchmarks/accuracy/honesty.py --count 2000 --processes 2
    python benchmarks/accuracy/honesty.py --family notches --count 50 --seed 3

Each model has a limit of time in a process of its own: one that hangs is named and the run goes on.
"""

from __future__ import annotations

import argparse
import multiprocessing
import os
import sys
import time
import traceback
import warnings
from collections import Counter, defaultdict
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from multiprocessing.connection import wait
from pathlib import Path
from typing import Any

os.environ.setdefault("OMP_NUM_THREADS", "1")
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
sys.path.insert(0, str(Path(__file__).resolve().parent))

import msgspec
import numpy as np
from honesty_claims import SLACK, Finding, Judge, held, misfits
from honesty_models import FAMILIES, generated
from honesty_oracle import Side

from realize.errors import RealizeError
from realize.models import DeadTime, FrequencyResponse, Model
from realize.schema import FORMS, PARAMETRIC_KINDS, Claim
from realize.steps import compare, convert, fit, reduce

CONVERSION = ("response-error", "channel-error", "peak-error", "end-behaviour", "order")


@dataclass
class Report:
    """What came of one model."""

    index: int
    family: str
    findings: list[Finding] = field(default_factory=list)
    refused: list[str] = field(default_factory=list)
    crashed: list[str] = field(default_factory=list)
    model: str = ""
    seconds: float = 0.0
    truth_seconds: float = 0.0


def as_text(model: Model) -> str:
    """Return a model as a model file, for reproducing what went wrong."""
    from realize.files.json_model import dumps

    return dumps(model.with_(receipts=()))


class Examination:
    """All steps on one model."""

    def __init__(
        self, report: Report, model: Model, rng: np.random.Generator, tell: Callable[[str], None], share: float
    ) -> None:
        self.report, self.model, self.rng, self.tell, self.share = report, model, rng, tell, share
        self.sides: dict[int, Side] = {}
        self.alive: list[Model] = []

    def side(self, model: Model) -> Side:
        if id(model) not in self.sides:
            self.sides[id(model)] = Side(model)
            self.alive.append(model)
        return self.sides[id(model)]

    def attempt(self, step: str, make: Callable[[], Any]) -> Any:
        """Return what a step makes, None where it refuses; anything else that it raises is a fault."""
        self.tell(step)
        try:
            with warnings.catch_warnings():
                warnings.simplefilter("error")
                return make()
        except RealizeError as error:
            self.report.refused.append(f"{step}: {type(error).__name__} {error}"[:150])
        except Exception:
            self.report.crashed.append(f"{step}: {traceback.format_exc(limit=-3)}")
        return None

    def judged(self, step: str, source: Model, result: Model, claims: list[Claim]) -> None:
        self.tell(f"{step}, the truth")
        started = time.perf_counter()
        judge = Judge(self.side(source), self.side(result))
        for claim in claims:
            slack = 0.0
            if claim.name in ("response-error", "channel-error", "end-behaviour"):
                truth, where = getattr(judge, claim.name.replace("-", "_"))()
                slack = SLACK if claim.name == "channel-error" else 0.0
            elif claim.name == "peak-error":
                truth, where = judge.peak_error()
                slack = SLACK
            elif claim.name in ("reduction-error", "reduction-bound", "linf-error"):
                truth, where = judge.linf_error()
                slack = 1e-13
            elif claim.name in ("steady-state-error", "nu-gap", "h2-error"):
                truth, where = getattr(judge, claim.name.replace("-", "_"))()
                slack = 1e-15
            elif claim.name in ("stability", "order"):
                expected = float(judge.stability()) if claim.name == "stability" else float(result.order or 0)
                false = claim.value != expected and claim.basis != "measured"
                says = f"{claim.name} {claim.value} ({claim.basis}), truth {expected}"
                self.report.findings.append(Finding(step, claim.name, claim.basis, None, false, says))
                continue
            else:
                continue
            finding = held(step, claim, truth, where, slack)
            if finding is not None:
                self.report.findings.append(finding)
        self.report.truth_seconds += time.perf_counter() - started

    def one_step(self) -> None:
        """One conversion, reduction, comparison or fit, taken at random."""
        chosen = int(self.rng.integers(6))
        if chosen < 3:
            self.conversions(self.model, "convert", 0.0)
        elif chosen == 3:
            self.decimals(self.model)
        elif chosen == 4 or self.model.shape != (1, 1):
            self.reductions(self.model)
        else:
            self.fitted(self.model)

    def all_steps(self) -> None:
        if self.share == 0:
            self.one_step()
            return
        model, rng = self.model, self.rng
        results = self.conversions(model, "convert", self.share)
        if results:
            # what was made is a source too
            chosen = results[int(rng.integers(len(results)))]
            self.conversions(chosen, "convert again", 0.3 * self.share)
            other = results[int(rng.integers(len(results)))]
            if rng.random() < self.share:
                self.compared(model, other)
        if rng.random() < self.share:
            self.decimals(model)
        self.reductions(model)
        if rng.random() < 0.5 * self.share:
            self.fitted(model)

    def targets(self) -> list[tuple[str, str | None]]:
        kinds: list[tuple[str, str | None]] = [(kind, None) for kind in PARAMETRIC_KINDS]
        return kinds + [("state-space", form) for form in FORMS]

    def conversions(self, source: Model, name: str, share: float) -> list[Model]:
        targets = self.targets()
        count = max(1, round(share * len(targets)))
        targets = [targets[k] for k in self.rng.permutation(len(targets))[:count]]
        results = []
        for to, form in targets:
            step = f"{name} {source.kind} to {to}" + (f" {form}" if form else "")
            made = self.attempt(step, lambda to=to, form=form: convert(source, to, form=form))  # type: ignore[misc]
            if made is None or made.model.order is None:
                continue
            if to == source.kind and form is None:
                continue
            self.judged(step, source, made.model, made.receipt.claims)
            results.append(made.model)
        if self.rng.random() < share:
            to, form = targets[0]
            step = f"{name} {source.kind} to {to} {form or ''} in double arithmetic"
            made = self.attempt(step, lambda: convert(source, to, form=form, arithmetic="double"))
            if made is not None:
                self.judged(step, source, made.model, made.receipt.claims)
        if source.shape != (1, 1) and self.rng.random() < share:
            step = f"{name} {source.kind} to transfer-function over a common denominator"
            made = self.attempt(step, lambda: convert(source, "transfer-function", common_denominator=True))
            if made is not None:
                self.judged(step, source, made.model, made.receipt.claims)
        return results

    def decimals(self, model: Model) -> None:
        kinds = ["transfer-function", "zero-pole-gain", "pole-residue", "sections"]
        to, digits = str(self.rng.choice(kinds)), int(self.rng.integers(1, 40))
        step = f"convert {model.kind} to {to}, digits"
        made = self.attempt(step, lambda: convert(model, to, digits=digits))
        if made is not None:
            self.judged(step, model, made.model, made.receipt.claims)

    def compared(self, model: Model, other: Model) -> None:
        made = self.attempt("compare", lambda: compare(model, other))
        if made is not None:
            names = ("response-error", "channel-error", "peak-error", "linf-error", "nu-gap", "h2-error")
            claims = [msgspec.convert(made[name], Claim) for name in names if name in made]
            self.judged("compare", model, other, claims)

    def reductions(self, model: Model) -> None:
        order = int(self.rng.integers(0, max(model.order or 0, 1) + 1))
        asked: list[tuple[str, dict[str, Any]]] = [("reduce by order", {"order": order})]
        asked.append(("reduce by error", {"error": float(10.0 ** self.rng.uniform(-9, -0.3))}))
        if self.share < 1:
            asked = [asked[int(self.rng.integers(2))]]
        for step, option in asked:
            made = self.attempt(step, lambda option=option: reduce(model, **option))  # type: ignore[misc]
            if made is not None:
                self.judged(step, model, made.model, made.receipt.claims)

    def fitted(self, model: Model) -> None:
        side = self.side(model)
        low, high = side.band() or (0.1, 10.0)
        high = min(high, 0.999 * side.top)
        if not low < high * 0.99:
            return
        w = np.geomspace(low, high, 60)
        values = model.rational_part(model.time.points(w))
        if not np.all(np.isfinite(values)) or not np.any(values):
            return
        size = float(np.abs(values).max())
        level = float(10.0 ** self.rng.uniform(-10, -2)) * size
        if not 1e-250 < level < 1e250:
            return
        noise = self.rng.normal(size=values.shape) + 1j * self.rng.normal(size=values.shape)
        dead = None
        if self.rng.random() < 0.3 and not model.time.sampled:
            p, m = model.shape
            dead = DeadTime((0.0,) * m, (0.0,) * p, tuple((0.01 / low,) * m for _ in range(p)))
        deviation = np.full(values.shape, level) if self.rng.random() < 0.5 else None
        data = FrequencyResponse(
            frequency=w,
            frequency_unit="rad/s",
            response=values + level * noise / 2**0.5,
            deviation=deviation,
            time=model.time,
            dead_time=dead,
        )
        order: Any = "auto" if self.rng.random() < 0.3 and self.share else int(np.clip(model.order or 1, 1, 10))
        to = str(self.rng.choice(["state-space", "pole-residue", "zero-pole-gain", "transfer-function"]))
        made = self.attempt("fit", lambda: fit(data, to=to, order=order))
        if made is None:
            return
        self.tell("fit, the truth")
        result = self.side(made.model)
        truths = misfits(data, result, made.model)
        for claim in made.receipt.claims:
            if claim.name in truths:
                finding = held("fit", claim, *truths[claim.name], slack=1e-13)
                if finding is not None:
                    self.report.findings.append(finding)
            elif claim.name in ("stability", "order"):
                expected = float(result.stable) if claim.name == "stability" else float(made.model.order or 0)
                says = f"{claim.name} {claim.value} ({claim.basis}), truth {expected}"
                false = claim.value != expected
                self.report.findings.append(Finding("fit", claim.name, claim.basis, None, false, says))


def examine(
    index: int, seed: int, family: str | None, share: float = 1.0, tell: Callable[[str], None] = lambda step: None
) -> Report:
    """Return the report of one generated model, of all steps and forms or of a random share of them."""
    started = time.perf_counter()
    tell("generation")
    report = Report(index, family or "")
    try:
        report.family, model, rng = generated(index, seed, family)
        Examination(report, model, rng, tell, share).all_steps()
    except Exception:
        report.crashed.append(f"the examination itself: {traceback.format_exc(limit=-4)}")
    if any(finding.false for finding in report.findings) or (report.crashed and "generated(" not in report.crashed[0]):
        report.model = as_text(model)
    report.seconds = time.perf_counter() - started
    return report


def _work(pipe: Any) -> None:
    while True:
        task = pipe.recv()
        if task is None:
            return
        pipe.send(("done", examine(*task, tell=lambda step: pipe.send(("step", step)))))


#: Index, seed, family, share of the steps.
Task = tuple[int, int, str | None, float]


class _Worker:
    def __init__(self) -> None:
        self.pipe, other = multiprocessing.Pipe()
        self.process = multiprocessing.Process(target=_work, args=(other,), daemon=True)
        self.process.start()
        other.close()
        self.task: Task | None = None
        self.step, self.started = "", 0.0

    def give(self, task: Task) -> None:
        self.task, self.step, self.started = task, "start", time.perf_counter()
        self.pipe.send(task)

    def end(self) -> None:
        self.process.kill()
        self.process.join()


def run(
    indices: range, seed: int, family: str | None, share: float, processes: int, limit: float
) -> Iterator[Report | str]:
    """Yield the report of every model, or words about one that hung or died."""
    workers = [_Worker() for _ in range(processes)]
    waiting = iter(indices)
    busy: dict[Any, _Worker] = {}

    def next_task(worker: _Worker) -> None:
        index = next(waiting, None)
        if index is None:
            worker.end()
        else:
            worker.give((index, seed, family, share))
            busy[worker.pipe] = worker

    for worker in workers:
        next_task(worker)
    while busy:
        ready = wait(list(busy), timeout=1.0)
        for pipe in ready:
            worker = busy[pipe]
            try:
                what, value = pipe.recv()
            except EOFError:
                del busy[pipe]
                yield f"died: model {worker.task} in {worker.step}"
                next_task(_Worker())
                continue
            if what == "step":
                worker.step = value
            else:
                del busy[pipe]
                yield value
                next_task(worker)
        for pipe, worker in list(busy.items()):
            if time.perf_counter() - worker.started > limit:
                worker.end()
                del busy[pipe]
                yield f"hung for {limit:g} s: model {worker.task} in {worker.step}"
                next_task(_Worker())


class Tally:
    """Counts over all reports."""

    def __init__(self) -> None:
        self.models, self.claims, self.refused = 0, 0, 0
        self.false: list[str] = []
        self.faults: list[str] = []
        self.basis: dict[str, Counter[str]] = defaultdict(Counter)
        self.ratios: dict[str, list[tuple[float, str]]] = defaultdict(list)
        self.seconds = self.truth_seconds = 0.0

    def add(self, report: Report | str) -> None:
        if isinstance(report, str):
            self.faults.append(report)
            return
        self.models += 1
        self.claims += len(report.findings)
        self.refused += len(report.refused)
        self.seconds += report.seconds
        self.truth_seconds += report.truth_seconds
        for finding in report.findings:
            step = "fit" if finding.step == "fit" else " ".join(finding.step.split()[:1])
            self.basis[step][finding.basis] += 1
            if finding.ratio is not None:
                key = f"{finding.name}, {finding.basis}"
                self.ratios[key].append((finding.ratio, f"{report.family} {report.index}: {finding.step}"))
            if finding.false:
                self.false.append(
                    f"FALSE {report.family} {report.index}: {finding.step}: {finding.says}\n    {report.model}"
                )
        self.faults += [f"{report.family} {report.index}: {text}\n    {report.model}" for text in report.crashed]

    def print(self) -> None:
        print(f"{self.models} models, {self.claims} claims, {self.refused} steps refused")
        print(f"{self.seconds:.0f} s of processes, {self.truth_seconds:.0f} s of it for the truth")
        print(f"{len(self.false)} violations, {len(self.faults)} faults and hangs")
        print("\nshare of claims by step")
        for step, counts in sorted(self.basis.items()):
            total = sum(counts.values())
            shares = ", ".join(f"{name} {100 * count / total:.1f} %" for name, count in sorted(counts.items()))
            print(f"  {step:10s} {total:7d}  {shares}")
        print("\n(value + uncertainty) / truth: tightest, median, loosest")
        for key, rows in sorted(self.ratios.items()):
            rows.sort()
            tight, loose = rows[0], rows[-1]
            print(
                f"  {key:34s} {len(rows):6d}  1 + {10 ** tight[0] - 1:.1e}   {10 ** rows[len(rows) // 2][0]:.4g}   "
                f"{10 ** min(loose[0], 300):.3g} ({loose[1]})"
            )


def main(arguments: list[str] | None = None) -> int:
    """Run the benchmark; the status is 1 if a claim was false or a step failed."""
    parser = argparse.ArgumentParser(description=(__doc__ or "").splitlines()[0])
    parser.add_argument("--count", type=int, default=2000)
    parser.add_argument("--first", type=int, default=0, help="index of the first model")
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--family", choices=list(FAMILIES))
    parser.add_argument(
        "--share", type=float, default=0.4, help="share of the kinds and forms that each model goes through"
    )
    parser.add_argument("--processes", type=int, default=2)
    parser.add_argument("--limit", type=float, default=120.0, help="seconds for one model")
    options = parser.parse_args(arguments)
    tally, started = Tally(), time.perf_counter()
    last = started
    indices = range(options.first, options.first + options.count)
    for report in run(indices, options.seed, options.family, options.share, options.processes, options.limit):
        before = len(tally.false) + len(tally.faults)
        tally.add(report)
        for text in (tally.false + tally.faults) if len(tally.false) + len(tally.faults) > before else []:
            if text not in _printed:
                _printed.add(text)
                print(text, flush=True)
        if time.perf_counter() - last > 30:
            last = time.perf_counter()
            print(
                f"... {tally.models} models, {tally.claims} claims, {last - started:.0f} s", file=sys.stderr, flush=True
            )
    tally.print()
    print(f"{time.perf_counter() - started:.0f} s in all")
    return 1 if tally.false or tally.faults else 0


_printed: set[str] = set()

if __name__ == "__main__":
    raise SystemExit(main())
