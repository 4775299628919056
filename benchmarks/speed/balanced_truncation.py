"""Time balanced truncation against slycot's ab09ad on the same models in one run, and check both results.

Usage: OMP_NUM_THREADS=1 python benchmarks/speed/balanced_truncation.py [order ...]

Prints a line for each order of the model: seconds of both, their ratio, and how far the Hankel singular values and
the responses of the two reduced models lie apart (relative to the largest). Exits with 1 if they disagree.
"""

from __future__ import annotations

import sys
import time

import numpy as np
import scipy.linalg
import slycot

from realize.kernels.lyapunov import square_roots
from realize.kernels.norms import gains
from realize.kernels.response import state_response
from realize.reduction import reduce_states

REDUCED = 20
AGREEMENT = 1e-8


def flexible_structure(n: int) -> tuple[np.ndarray, ...]:
    """Return a model of n / 2 damped modes from 1 to 1000 rad/s in turned coordinates, two inputs, three outputs."""
    rng = np.random.default_rng(n)
    frequency = np.geomspace(1, 1000, n // 2)
    blocks = [np.array([[-0.02 * w, w], [-w, -0.02 * w]]) for w in frequency]
    A = scipy.linalg.block_diag(*blocks)
    Q, _ = np.linalg.qr(rng.standard_normal((n, n)))
    weight = np.repeat(frequency, 2) ** -0.5
    B, C = rng.standard_normal((n, 2)) * weight[:, None], rng.standard_normal((3, n)) * weight
    return Q @ A @ Q.T, Q @ B, C @ Q.T, np.zeros((3, 2))


def timed(action):
    """Return the result and the seconds of the faster of two runs."""
    seconds = []
    for _ in range(2):
        start = time.perf_counter()
        result = action()
        seconds.append(time.perf_counter() - start)
    return result, min(seconds)


def main(orders: list[int]) -> int:
    print(
        f"{'states':>7} {'realize/s':>10} {'slycot/s':>10} {'ratio':>7} {'Schur/s':>9} {'Gramians/s':>11}"
        "  apart: values, response"
    )
    agree = True
    for n in orders:
        A, B, C, D = flexible_structure(n)
        small, own = timed(lambda: reduce_states(A, B, C, D, sampled=False, order=REDUCED))  # noqa: B023
        reference, other = timed(
            lambda: slycot.ab09ad("C", "B", "N", n, 2, 3, A.copy(), B.copy(), C.copy(), nr=REDUCED, tol=0.0)  # noqa: B023
        )
        (T, Q), schur = timed(lambda: scipy.linalg.schur(A))  # noqa: B023
        _, factors = timed(lambda: square_roots(T, Q.T @ B, C @ Q, sampled=False))  # noqa: B023
        count, a, b, c, values = reference
        w = np.geomspace(0.1, 1e4, 100)
        one = state_response(a, b, c, D, None, 1j * w)
        two = state_response(small.A, small.B, small.C, small.D, None, 1j * w)
        apart = (
            np.abs(values - small.hankel_singular_values).max() / values[0],
            gains(one - two).max() / gains(two).max(),
        )
        agree &= count == small.order and max(apart) <= AGREEMENT
        print(
            f"{n:>7} {own:>10.3f} {other:>10.3f} {other / own:>7.1f} {schur:>9.3f} {factors:>11.3f}  "
            f"{apart[0]:.1e}, {apart[1]:.1e}",
            flush=True,
        )
    return 0 if agree else 1


if __name__ == "__main__":
    sys.exit(main([int(word) for word in sys.argv[1:]] or [250, 500, 1000]))
