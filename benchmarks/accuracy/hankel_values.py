"""Hankel singular values: relative error of the worst one, and of how many 1e-12 is kept; beside others.

Run: python benchmarks/accuracy/hankel_values.py [--alone]
The truth is counted: Gramians in up to some thousand bits by doubling, and the signs of pivots at both ends of each
interval (`realize.testing.gramians`), which shares nothing with what is judged. Values of the others are compared with
the intervals so confirmed. The others run in a child process with a time limit.
"""

from __future__ import annotations

import sys
import time
from collections.abc import Iterator

import numpy as np
import scipy.signal
from independent import Child, control_values, gramian_values, slycot_values

import realize
from realize.testing.gramians import gramian_product, misplaced, rational

OTHERS = {"scipy Gramians": gramian_values, "control": control_values, "slycot ab09ad": slycot_values}
TARGET = 1e-12


def plants() -> Iterator[tuple[str, realize.StateSpace, int]]:
    """Yield (name, state model, bits of the independent computation)."""
    rng = np.random.default_rng(11)
    for n in (5, 10, 20, 40, 60):
        A = np.diag(-2.0 * np.ones(n)) + np.diag(np.ones(n - 1), 1) + np.diag(np.ones(n - 1), -1)
        A[-1, -1] = -1.0
        yield f"RC ladder {n}", realize.StateSpace(A=A, B=np.eye(n)[:, :1], C=np.eye(n)[-1:]), 300 + 20 * n
    for n, m, p in ((10, 1, 1), (20, 1, 1), (40, 1, 1), (60, 1, 1), (20, 2, 3), (60, 3, 3)):
        A = rng.standard_normal((n, n))
        A -= (np.linalg.eigvals(A).real.max() + 0.3) * np.eye(n)
        B, C = rng.standard_normal((n, m)), rng.standard_normal((p, n))
        yield f"random {n}, {m} in {p} out", realize.StateSpace(A=A, B=B, C=C), 300 + 20 * n
    for count, channels in ((10, 1), (20, 1), (30, 1), (30, 2)):
        w = np.sort(10 ** rng.uniform(0, 3, count))
        A = np.zeros((2 * count, 2 * count))
        for k in range(count):
            A[2 * k : 2 * k + 2, 2 * k : 2 * k + 2] = [[0, 1], [-(w[k] ** 2), -0.002 * w[k]]]
        B, C = np.zeros((2 * count, channels)), np.zeros((channels, 2 * count))
        B[1::2], C[:, ::2] = rng.standard_normal((count, channels)), rng.standard_normal((channels, count))
        yield f"{count} modes at 0.1 %, {channels} in", realize.StateSpace(A=A, B=B, C=C), 800
    w = 2 * np.pi * 1000
    for name, found in (
        ("Butterworth 12", scipy.signal.butter(12, w, analog=True, output="ba")),
        ("Chebyshev 12", scipy.signal.cheby1(12, 1, w, analog=True, output="ba")),
        ("elliptic 12", scipy.signal.ellip(12, 1, 80, w, analog=True, output="ba")),
    ):
        A, B, C, _ = scipy.signal.tf2ss(*found)
        yield f"{name} companion", realize.StateSpace(A=A, B=B, C=C), 800


def main() -> int:
    child = None if "--alone" in sys.argv else Child()
    names = list(OTHERS) if child else []
    head = f"{'plant':26} {'claimed':>8} {'confirmed':>10} {'CPU s':>6}"
    print(head + "".join(f" | {name + ': worst, kept':>28}" for name in names))
    wrong = 0
    for name, model, bits in plants():
        start = time.process_time()
        values, errors, basis, _ = realize.hankel_singular_values(model)
        taken = time.process_time() - start
        n = values.size
        square = gramian_product(rational(model.A), rational(model.B), rational(model.C), bits)
        which = range(n) if n <= 20 else sorted({0, 1, n // 4, n // 2, 3 * n // 4, n - 2, n - 1})
        bad = misplaced(square, values.tolist(), errors.tolist(), bits, which)
        claimed = float(np.max(errors / values))
        wrong += len(bad) + (claimed > TARGET) + (basis != "proved")
        line = f"{name:26} {claimed:8.1e} {f'{len(which) - len(bad)} of {len(which)}':>10} {taken:6.2f}"
        for other in names:
            status, result = child.call(OTHERS[other], model.A, model.B, model.C)
            if status == "done" and result is not None and len(result) == n:
                apart = np.abs(np.asarray(result) - values) / values
                line += f" | {apart.max():16.1e}, {int(np.sum(apart <= TARGET)):3d} of {n:3d}"
            else:
                line += f" | {status + ' ' + str(result)[:20]:>28}"
        print(line, flush=True)
    print("all confirmed, all within 1e-12" if not wrong else f"{wrong} MISSED")
    return int(wrong > 0)


if __name__ == "__main__":
    sys.exit(main())
