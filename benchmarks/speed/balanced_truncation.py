"""Time balanced truncation against slycot's ab09ad on the same models in one run, and compare their values.

Usage: OMP_NUM_THREADS=1 python benchmarks/speed/balanced_truncation.py [order ...]

Dense stable models with two inputs and two outputs: `random` (independent entries, far from normal, shifted until the
slowest pole is at -0.1; the Gramians have a low rank) and `modes` (half as many lightly damped modes in turned
coordinates; they have full rank). A line for each: seconds of processor time of one real Schur decomposition, of
slycot, of the reduction, and of the verb with its receipt; both relative to slycot's; how far the Hankel singular
values lie apart and the error estimated here, relative to the first; and the peak of allocated memory in units of n^2
doubles.
Exits with 1 if values lie farther apart than the estimate.
"""

from __future__ import annotations

import sys
import time
import tracemalloc

import numpy as np
import scipy.linalg
import slycot

import realize
from realize.models import StateSpace
from realize.reduction import reduce_states

REDUCED = 20


def random_entries(n: int) -> tuple[np.ndarray, ...]:
    """Return independent normal entries with the slowest pole at -0.1."""
    rng = np.random.default_rng(n)
    A = rng.standard_normal((n, n)) / np.sqrt(n)
    # the spectral radius is 1 to within a few n^-1/2
    slowest = np.linalg.eigvals(A).real.max() if n <= 1000 else 1.02
    return A - (slowest + 0.1) * np.eye(n), rng.standard_normal((n, 2)), rng.standard_normal((2, n))


def lightly_damped_modes(n: int) -> tuple[np.ndarray, ...]:
    """Return n / 2 modes from 1 to 1000 rad/s with damping ratio 0.02 in turned coordinates."""
    rng = np.random.default_rng(n)
    frequency = np.geomspace(1, 1000, n // 2)
    A = scipy.linalg.block_diag(*[np.array([[-0.02 * w, w], [-w, -0.02 * w]]) for w in frequency])
    Q, _ = np.linalg.qr(rng.standard_normal((n, n)))
    weight = np.repeat(frequency, 2) ** -0.5
    B, C = rng.standard_normal((n, 2)) * weight[:, None], rng.standard_normal((2, n)) * weight
    return Q @ A @ Q.T, Q @ B, C @ Q.T


def timed(action, repeat: int = 1):
    """Return the result and the least seconds of processor time."""
    seconds = []
    for _ in range(repeat):
        start = time.process_time()
        result = action()
        seconds.append(time.process_time() - start)
    return result, min(seconds)


def line(name: str, n: int, A: np.ndarray, B: np.ndarray, C: np.ndarray) -> bool:
    D = np.zeros((2, 2))
    repeat = 3 if n <= 500 else 1
    small, own = timed(lambda: reduce_states(A, B, C, D, sampled=False, order=REDUCED), repeat)
    _, whole = timed(lambda: realize.reduce(StateSpace(A=A, B=B, C=C, D=D), order=REDUCED), repeat)
    _, schur = timed(lambda: scipy.linalg.schur(A), repeat)
    reference, other = timed(
        lambda: slycot.ab09ad("C", "B", "N", n, 2, 2, A.copy(), B.copy(), C.copy(), nr=REDUCED, tol=0.0), repeat
    )
    values = reference[4]
    apart = np.abs(values - small.hankel_singular_values)
    tracemalloc.start()
    reduce_states(A, B, C, D, sampled=False, order=REDUCED)
    memory = tracemalloc.get_traced_memory()[1] / (8 * n * n)
    tracemalloc.stop()
    print(
        f"{name:>7} {n:>5} {schur:>8.3f} {other:>8.3f} {own:>8.3f} {whole:>8.3f} {other / own:>7.1f} "
        f"{other / whole:>7.1f} {own / schur:>7.2f}  {apart.max() / values[0]:.1e} "
        f"{small.hankel_errors[0] / values[0]:.1e} {memory:>6.1f}",
        flush=True,
    )
    # slycot's own values carry the same backward error
    return bool(np.all(apart <= 2 * small.hankel_errors)) and reference[0] == small.order


def main(orders: list[int]) -> int:
    realize.reduce(StateSpace(A=[[-1.0]], B=[[1.0]], C=[[1.0]], D=[[0.0]]), order=1)
    print(
        "                              seconds                slycot's over    own/\n"
        "  model     n    Schur   slycot   reduce  receipt  reduce receipt   Schur  apart  estimate n^2 doubles"
    )
    agree = True
    for n in orders:
        agree &= line("random", n, *random_entries(n))
        agree &= line("modes", n, *lightly_damped_modes(n))
    return 0 if agree else 1


if __name__ == "__main__":
    sys.exit(main([int(word) for word in sys.argv[1:]] or [250, 500, 1000]))
