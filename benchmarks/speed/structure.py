"""Staircases and the Kalman decomposition against one real Schur decomposition of the same matrix.

CPU time, the best of three runs in turn, as ratios of one run. ``python benchmarks/speed/structure.py [ORDER]``; run it
with OMP_NUM_THREADS=1.
"""

from __future__ import annotations

import sys
import time
from collections.abc import Callable
from typing import Any

import numpy as np
import scipy.linalg

from realize.forms.coordinates import Setting
from realize.forms.registry import TABLE

#: What issue and docs promise: at most this many Schur decompositions.
PROMISED = 3.0
FORMS = ("schur", "controller-hessenberg", "reachable-staircase", "observable-staircase", "kalman")


def plant(order: int, inputs: int, outputs: int, hidden: int, seed: int) -> tuple[np.ndarray, ...]:
    """Return a plant with `hidden` unreachable and as many unobservable states, rotated."""
    rng = np.random.default_rng(seed)
    A = rng.standard_normal((order, order))
    B, C = rng.standard_normal((order, inputs)), rng.standard_normal((outputs, order))
    seen = order - 2 * hidden
    if hidden:
        # reachable and observable, reachable only, observable only
        A[:seen, seen : seen + hidden] = 0
        A[seen + hidden :, : seen + hidden] = 0
        C[:, seen : seen + hidden] = 0
        B[seen + hidden :] = 0
    Q, _ = np.linalg.qr(rng.standard_normal((order, order)))
    return Q @ A @ Q.T, Q @ B, C @ Q.T, np.zeros((outputs, inputs))


def cpu(call: Callable[[], Any]) -> tuple[float, Any]:
    """Return CPU seconds and the result."""
    started = time.process_time()
    result = call()
    return time.process_time() - started, result


def main(order: int) -> None:
    """Print a table of ratios."""
    print(f"order {order}: CPU time over that of one scipy.linalg.schur of the same matrix (promised: {PROMISED:g})")
    print(
        f"{'inputs':>6} {'outputs':>7} {'hidden':>6}  " + "  ".join(f"{name:>21}" for name in FORMS) + "  Kalman parts"
    )
    for inputs, outputs, hidden in ((1, 1, 0), (1, 1, order // 10), (2, 3, 0), (2, 3, order // 10), (10, 10, 0)):
        matrices = plant(order, inputs, outputs, hidden, 1)
        times: dict[str, list[float]] = {name: [] for name in ("scipy", *FORMS)}
        parts = ""
        for _ in range(3):
            times["scipy"].append(cpu(lambda A=matrices[0]: scipy.linalg.schur(A))[0])
            for name in FORMS:
                seconds, new = cpu(lambda name=name, matrices=matrices: TABLE[name].apply(*matrices, Setting()))
                times[name].append(seconds)
            parts = " ".join(str(size) for size in new.details["dimensions"].values())
        ratios = [min(times[name]) / min(times["scipy"]) for name in FORMS]
        print(f"{inputs:6} {outputs:7} {hidden:6}  " + "  ".join(f"{ratio:21.2f}" for ratio in ratios) + f"  {parts}")


if __name__ == "__main__":
    main(int(sys.argv[1]) if len(sys.argv) > 1 else 500)
