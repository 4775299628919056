"""Orders of minimal realizations: exact and within rounding, beside control's and slycot's answers.

Integer models of order 11 to 40 with states that no input reaches and states that no output sees, under integer shears;
units of states and channels changed by 2^+-20, time by 2^+-20. The true order is known. Run with the number of models:

    OMP_NUM_THREADS=1 python benchmarks/accuracy/minimal_orders.py 40
"""

from __future__ import annotations

import sys
import time
import warnings

import numpy as np

from realize.forms.within_rounding import hidden_within
from realize.kernels.exact.order import minimal_order

EPS = 2.0**-52
Array = np.ndarray


def plant(seed: int) -> tuple[Array, Array, Array, int, float]:
    """Return an integer model, its order, and the condition number of the shears together."""
    draw = np.random.default_rng(seed)
    n = int(draw.integers(11, 41))
    visible = int(n * draw.uniform(0.4, 0.9))
    m, p = (int(k) for k in draw.integers(1, 4, 2))
    middle = visible + (n - visible) // 2
    A = np.diag(-draw.permutation(np.arange(1, 2 * n + 1))[:n]).astype(object)
    for i in range(n):
        for j in range(n):
            if (i < visible <= j < middle) or (i >= middle and j < visible) or (i < j < visible):
                A[i, j] = int(draw.integers(-1, 2))
    B = draw.choice([-2, -1, 1, 2], (n, m)).astype(object)
    C = draw.choice([-2, -1, 1, 2], (p, n)).astype(object)
    B[visible:middle], C[:, middle:] = 0, 0
    T = np.eye(n)
    for _ in range(int(n * draw.uniform(1, 4))):
        i, j = draw.choice(n, 2, replace=False)
        factor = int(draw.choice([-2, -1, 1, 2]))
        A[i] += factor * A[j]
        B[i] += factor * B[j]
        A[:, j] -= factor * A[:, i]
        C[:, j] -= factor * C[:, i]
        T[i] += factor * T[j]
    order = minimal_order(*([[(int(x), 1) for x in row] for row in part] for part in (A, B, C))).order
    # the generator's own count is an upper bound: small integers may hide more
    assert order <= visible
    return A.astype(float), B.astype(float), C.astype(float), order, float(np.linalg.cond(T))


def in_other_units(A: Array, B: Array, C: Array, seed: int) -> tuple[Array, Array, Array]:
    """Return the model with states, channels and time in other units, all powers of two."""
    draw = np.random.default_rng(seed)
    x, u, y = (2.0 ** draw.integers(-20, 21, k) for k in (A.shape[0], B.shape[1], C.shape[0]))
    return A * x[:, None] / x * 2.0 ** int(draw.choice([-20, 0, 20])), B * x[:, None] * u, C / x * y[:, None]


def rounded(A: Array, B: Array, C: Array, seed: int) -> tuple[Array, Array, Array]:
    """Return the model in units that are no powers of two: every number is rounded."""
    d = np.random.default_rng(seed).uniform(0.5, 2, A.shape[0])
    return 0.1 * A * d[:, None] / d, 0.3 * B * d[:, None], C / d / 7


def libraries(A: Array, B: Array, C: Array) -> tuple[int | None, int | None]:
    """Return the orders by slycot TB01PD and by control's minreal, at their default tolerances."""
    answers: list[int | None] = []
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        for which in ("slycot", "control"):
            try:
                if which == "slycot":
                    import slycot

                    n, m, p = A.shape[0], B.shape[1], C.shape[0]
                    b, c = np.zeros((n, max(m, p))), np.zeros((max(m, p), n))
                    b[:, :m], c[:p] = B, C
                    answers.append(int(slycot.tb01pd(n, m, p, A.copy(), b, c, job="M", equil="S", tol=0.0)[3]))
                else:
                    import control

                    made = control.minreal(control.ss(A, B, C, 0 * (C @ B)), verbose=False)
                    answers.append(int(made.nstates))
            except Exception:
                answers.append(None)
    return answers[0], answers[1]


def main(count: int) -> None:
    """Print one line a kind of question."""
    table = {"exact": [0, 0, 0, 0], "within rounding": [0, 0, 0, 0]}
    ambiguous = silent = 0
    spent = 0.0
    for seed in range(count):
        A, B, C, order, condition = plant(seed)
        scaled = in_other_units(A, B, C, seed)
        found = minimal_order(*([[x.as_integer_ratio() for x in row] for row in part.tolist()] for part in scaled))
        for name, model, own in (("exact", scaled, found.order), ("within rounding", rounded(A, B, C, seed), None)):
            threshold = 4 * A.shape[0] * EPS
            doubtful = False
            if own is None:
                started = time.process_time()
                hidden = hidden_within(*model, None, threshold, sampled=False)
                spent += time.process_time() - started
                own, doubtful = hidden.order, hidden.kept < 1e3 * threshold
            row = table[name]
            row[0] += 1
            row[1] += own == order
            for k, answer in enumerate(libraries(*model)):
                row[2 + k] += answer == order
            if name == "within rounding":
                ambiguous += doubtful
                if own != order:
                    silent += not doubtful
                    print(f"seed {seed}: order {order}, found {own}, condition {condition:.0e}, ambiguous: {doubtful}")
    print(f"{'right orders':<18}{'models':>8}{'realize':>9}{'slycot':>8}{'control':>9}")
    for name, row in table.items():
        print(f"{name:<18}{row[0]:>8}{row[1]:>9}{row[2]:>8}{row[3]:>9}")
    print(
        f"within rounding: {ambiguous} called ambiguous, {silent} wrong and not so called, {spent / count:.2f} s each"
    )


if __name__ == "__main__":
    main(int(sys.argv[1]) if len(sys.argv) > 1 else 20)
