"""Times of conversions in one process: state space -> coefficients, and throughput of small plants with full receipts.

Run: OMP_NUM_THREADS=1 python benchmarks/speed/conversions.py [--runs N]
Processor time (what others do on the machine counts little), best and median of the runs; every run has a new model, so
that nothing is remembered from the one before. The load of the machine stands in the first line.
"""

from __future__ import annotations

import argparse
import os
import statistics
import time
from collections.abc import Callable

import numpy as np

import realize
from realize.kernels.exact.states import transfer_matrix


def dense(order: int, seed: int) -> realize.StateSpace:
    """Return a random stable dense plant."""
    rng = np.random.default_rng(seed)
    A = rng.standard_normal((order, order)) / np.sqrt(order) - 1.5 * np.eye(order)
    return realize.StateSpace(A=A, B=rng.standard_normal((order, 1)), C=rng.standard_normal((1, order)))


def fourth_order(seed: int) -> realize.TransferFunction:
    """Return a plant of order four with two pairs, or a pair and two real poles, and up to three zeros."""
    rng = np.random.default_rng(seed)
    w, damping = 10.0 ** rng.uniform(-1, 3, 2), rng.uniform(0.02, 1.4, 2)
    d = np.polymul([1.0, 2 * damping[0] * w[0], w[0] ** 2], [1.0, 2 * damping[1] * w[1], w[1] ** 2])
    n = rng.standard_normal(1 + seed % 4) * w.max()
    return realize.TransferFunction(numerator=n, denominator=d)


def timed(make: Callable[[int], object], run: Callable[[object], object], runs: int) -> tuple[float, float]:
    """Return best and median seconds of runs with a new model each."""
    times = []
    for seed in range(runs + 1):
        model = make(seed)
        start = time.process_time()
        run(model)
        times.append(time.process_time() - start)
    return min(times[1:]), statistics.median(times[1:])


def kernel(model: realize.StateSpace) -> None:
    """Form the exact transfer function of integer ratios that are ready."""
    transfer_matrix(*ratios[id(model)])


#: Integer ratios by model, made before the clock starts.
ratios: dict[int, tuple[object, ...]] = {}


def prepared(order: int) -> Callable[[int], realize.StateSpace]:
    """Return a maker of models whose integer ratios are ready."""

    def make(seed: int) -> realize.StateSpace:
        model = dense(order, seed)
        ratios[id(model)] = tuple(model.exact(name) for name in "ABCD")
        kept.append(model)
        return model

    return make


kept: list[realize.StateSpace] = []


def main() -> None:
    """Print the times."""
    parser = argparse.ArgumentParser(description=__doc__.split("\n")[0])
    parser.add_argument("--runs", type=int, default=5)
    runs = parser.parse_args().runs
    print(f"load average {os.getloadavg()[0]:.1f}, processor times")
    print(f"{'state space -> coefficients, dense':44}{'best':>10}{'median':>10}")
    for order in (10, 40, 100):
        best, median = timed(prepared(order), kernel, runs)
        print(f"{f'order {order}, kernel':44}{1e3 * best:8.1f}ms{1e3 * median:8.1f}ms", flush=True)
        best, median = timed(
            lambda seed, n=order: dense(n, seed), lambda m: realize.convert(m, "transfer-function"), runs
        )
        print(f"{f'order {order}, whole step with receipt':44}{1e3 * best:8.1f}ms{1e3 * median:8.1f}ms", flush=True)
    count = 40 * runs
    for to in ("state-space", "zero-pole-gain", "sections", "pole-residue"):
        for seed in range(10):
            realize.convert(fourth_order(10_000 + seed), to)
        fresh = [fourth_order(seed) for seed in range(count)]
        start = time.process_time()
        for model in fresh:
            realize.convert(model, to)
        seconds = time.process_time() - start
        print(f"{f'4th-order coefficients -> {to}':44}{count / seconds:10.0f} models a second", flush=True)
    for name, order in (("Butterworth 20", 20), ("Butterworth 40", 40)):
        poles = [z for k in range(order // 2) for z in _pair(np.pi / 2 + np.pi * (2 * k + 1) / (2 * order))]
        source = realize.convert(realize.ZeroPoleGain(zeros=[], poles=poles, gain=1.0), "transfer-function").model
        best, median = timed(
            lambda seed, s=source: s.with_(receipts=()), lambda m: realize.convert(m, "state-space"), runs
        )
        print(f"{f'{name} coefficients -> state space':44}{1e3 * best:8.1f}ms{1e3 * median:8.1f}ms", flush=True)


def _pair(angle: float) -> tuple[complex, complex]:
    z = complex(np.cos(angle), np.sin(angle))
    return z, z.conjugate()


if __name__ == "__main__":
    main()
