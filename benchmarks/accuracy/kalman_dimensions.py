"""Dimensions of the Kalman decomposition of sheared models, and what becomes of their response.

Integer models with states of all four kinds under integer shears up to a condition of 1e6, units of states, channels
and time changed by powers of two: their dimensions are exact ranks, computed here by themselves. Then the same models
in units that are no powers of two, so that every number is rounded: within rounding the dimensions are the same. Run
with the number of models:

    OMP_NUM_THREADS=1 python benchmarks/accuracy/kalman_dimensions.py 100
"""

from __future__ import annotations

import sys
import time

import flint
import numpy as np

import realize
from realize.forms.coordinates import Setting
from realize.forms.registry import TABLE
from realize.models import StateSpace

Array = np.ndarray
#: The pattern of A in Kalman's coordinates.
PATTERN = np.array([[1, 0, 1, 0], [1, 1, 1, 1], [0, 0, 1, 0], [0, 0, 1, 1]], dtype=bool)


def plant(seed: int) -> tuple[Array, Array, Array, float]:
    """Return an integer model of order 4 to 24 under integer shears, and the condition number of these together."""
    draw = np.random.default_rng(seed)
    sizes = draw.integers(0, 7, 4)
    sizes[0] += 4 - min(4, int(sizes.sum()))
    n, part = int(sizes.sum()), np.repeat(np.arange(4), sizes)
    m, p = (int(k) for k in draw.integers(1, 4, 2))
    A = draw.integers(-2, 3, (n, n)).astype(float)
    A[~PATTERN[part[:, None], part[None, :]]] = 0
    A[np.arange(n), np.arange(n)] = -draw.permutation(np.arange(1, 2 * n + 1))[:n]
    B, C = (draw.choice([-2.0, -1.0, 1.0, 2.0], size) for size in ((n, m), (p, n)))
    B[part >= 2], C[:, part % 2 == 1] = 0, 0
    T = np.eye(n)
    limit = 10.0 ** draw.uniform(1, 6)
    condition = 1.0
    for _ in range(20 * n):
        i, j = draw.choice(n, 2, replace=False)
        factor = float(draw.choice([-2, -1, 1, 2]))
        trial = T.copy()
        trial[i] += factor * trial[j]
        if float(np.linalg.cond(trial)) > limit:
            continue
        T, condition = trial, float(np.linalg.cond(trial))
        A[i] += factor * A[j]
        A[:, j] -= factor * A[:, i]
        B[i] += factor * B[j]
        C[:, j] -= factor * C[:, i]
        if condition > 0.3 * limit:
            break
    assert max(np.abs(A).max(), np.abs(B).max(), np.abs(C).max()) < 2.0**50
    return A, B, C, condition


def exact_dimensions(A: Array, B: Array, C: Array) -> tuple[int, ...]:
    """Return the four dimensions from exact ranks of the controllability and observability matrices."""
    n, m, p = A.shape[0], B.shape[1], C.shape[0]
    a, b, c = (flint.fmpz_mat([[int(x) for x in row] for row in matrix.tolist()]) for matrix in (A, B, C))
    reach, see = [b], [c]
    for _ in range(n - 1):
        reach.append(a * reach[-1])
        see.append(see[-1] * a)
    K = flint.fmpz_mat(n, n * m, [reach[j // m][i, j % m] for i in range(n) for j in range(n * m)])
    O = flint.fmpz_mat(n * p, n, [see[i // p][i % p, j] for i in range(n * p) for j in range(n)])
    r, o, both = K.rank(), O.rank(), (O * K).rank()
    return both, r - both, o - both, n - r - o + both


def in_other_units(A: Array, B: Array, C: Array, seed: int, powers: bool) -> tuple[Array, Array, Array]:
    """Return the model with states, channels and time in other units: powers of two, or rounded."""
    draw = np.random.default_rng(seed)
    x, u, y = (2.0 ** draw.integers(-20, 21, k) for k in (A.shape[0], B.shape[1], C.shape[0]))
    t = 2.0 ** int(draw.choice([-20, 0, 20]))
    if not powers:
        x, u, y, t = x * draw.uniform(0.5, 2, x.size), u * 0.3, y / 7, 0.1 * t
    return A * x[:, None] / x * t, B * x[:, None] * u, C / x * y[:, None]


def main(count: int) -> None:
    """Print one line a kind of numbers."""
    table = {True: [0, 0, 0, 0], False: [0, 0, 0, 0]}
    worst = {True: 0.0, False: 0.0}
    spent = 0.0
    for seed in range(count):
        A, B, C, condition = plant(seed)
        truth = exact_dimensions(A, B, C)
        for powers in (True, False):
            model = in_other_units(A, B, C, seed, powers)
            started = time.process_time()
            new = TABLE["kalman"].apply(*model, np.zeros((C.shape[0], B.shape[1])), Setting())
            spent += time.process_time() - started
            found = tuple(new.details["dimensions"].values())
            flagged = any("ambiguous" in words for words in new.cautions)
            row = table[powers]
            row[0] += found == truth and not flagged
            row[1] += found == truth and flagged
            row[2] += found != truth and flagged
            row[3] += found != truth and not flagged
            if found != truth:
                print(
                    f"seed {seed}, rounded: {not powers}: {found}, true {truth}, condition {condition:.0e}, {flagged}"
                )
            if seed % 5 == 0:
                made = realize.convert(
                    StateSpace(A=model[0], B=model[1], C=model[2]), "state-space", form="kalman", force=True
                )
                error = made.receipt.claim("peak-error").value or 0.0
                worst[powers] = max(worst[powers], error)
    print(
        f"{'numbers':<12}{'right':>8}{'right, ambiguous':>20}{'wrong, ambiguous':>20}{'wrong, unsaid':>16}{'error':>10}"
    )
    for powers, row in table.items():
        print(
            f"{'as they are' if powers else 'rounded':<12}{row[0]:>8}{row[1]:>20}{row[2]:>20}{row[3]:>16}"
            f"{worst[powers]:>10.1e}"
        )
    print(f"{spent / count / 2:.2f} s each")


if __name__ == "__main__":
    main(int(sys.argv[1]) if len(sys.argv) > 1 else 20)
