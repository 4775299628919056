"""Matrix fractions, descriptor and second-order models: worst errors of conversions against exact solves at points.

Run: OMP_NUM_THREADS=1 python benchmarks/accuracy/kinds.py [--runs N]
Every row is a family of invented plants. The error is the largest relative difference, over a few points off the axis,
between result and source, both evaluated by exact rational elimination in this file; beside it what the receipt claims
and, where `control` has the conversion, the same error of its result.
"""

from __future__ import annotations

import argparse
import warnings
from collections.abc import Callable
from fractions import Fraction

import numpy as np
from flint import fmpq, fmpq_mat

import realize
from realize.errors import RealizeError

POINTS = (fmpq(1, 3), fmpq(7, 5), fmpq(12))


def exact(values: np.ndarray) -> list[list[fmpq]]:
    """Return a matrix of doubles as rationals."""
    return [[fmpq(*Fraction(float(x)).as_integer_ratio()) for x in row] for row in values]


def solved(pencil: list[list[fmpq]], right: list[list[fmpq]], left: list[list[fmpq]]) -> np.ndarray:
    """Return left pencil^-1 right in doubles."""
    value = fmpq_mat(left) * fmpq_mat(pencil).solve(fmpq_mat(right))
    return np.array([[float(Fraction(int(x.p), int(x.q))) for x in row] for row in value.tolist()])


def combined(parts: list[list[list[fmpq]]], s: fmpq) -> list[list[fmpq]]:
    """Return sum of parts[k] s^k."""
    rows, columns = len(parts[0]), len(parts[0][0])
    return [
        [sum((part[i][j] * s**k for k, part in enumerate(parts)), fmpq(0)) for j in range(columns)] for i in range(rows)
    ]


def value_at(model: realize.StateSpace, s: fmpq) -> np.ndarray:
    """Return the response of a model at a real point by exact elimination."""
    if isinstance(model, realize.SecondOrder):
        pencil = combined([exact(model.stiffness), exact(model.damping), exact(model.mass)], s)
        outputs = combined(
            [exact(model.position_output), exact(model.velocity_output), exact(model.acceleration_output)], s
        )
        return solved(pencil, exact(model.input), outputs) + model.direct
    if isinstance(model, realize.MatrixFraction):
        N, D = (combined([exact(part) for part in values[::-1]], s) for values in (model.numerator, model.denominator))
        unit = exact(np.eye(len(D)))
        return solved(D, unit, N) if model.side == "right" else solved(D, N, unit)
    if isinstance(model, realize.StateSpace):
        if not model.A.size:
            return model.D
        E = np.eye(model.A.shape[0]) if model.E is None else model.E
        return solved(combined([exact(-model.A), exact(E)], s), exact(model.B), exact(model.C)) + model.D
    return model.evaluate(complex(Fraction(int(s.p), int(s.q)))).real


def chain(rng: np.random.Generator, spread: float = 0.0) -> realize.SecondOrder:
    """Return masses in a row with springs and dampers, two forces and two positions."""
    n = int(rng.integers(2, 7))
    K = np.diag(rng.uniform(1, 4, n)) * 100
    K[0, 0] += 50
    for k in range(n - 1):
        K[k : k + 2, k : k + 2] += 80 * np.array([[1, -1], [-1, 1]])
    M = np.diag(10.0 ** rng.uniform(-spread, spread, n))
    F, P = np.zeros((n, 2)), np.zeros((2, n))
    F[0, 0] = F[-1, 1] = P[0, 0] = P[1, -1] = 1.0
    return realize.SecondOrder(mass=M, damping=0.02 * K, stiffness=K, input=F, position_output=P)


def constrained(rng: np.random.Generator, index: int) -> realize.StateSpace:
    """Return two masses joined by a rigid rod, the constraint on acceleration, velocity or position: index 1, 2, 3."""
    m, k, d = rng.uniform(0.5, 2, 2), rng.uniform(10, 50, 2), rng.uniform(0.1, 1, 2)
    G = np.array([[1.0, -1.0]])
    E = np.diag([1.0, 1.0, m[0], m[1], 0.0])
    A = np.zeros((5, 5))
    A[:2, 2:4] = np.eye(2)
    A[2:4, :2], A[2:4, 2:4], A[2:4, 4:] = -np.diag(k), -np.diag(d), -G.T
    if index == 3:
        A[4, :2] = G
    elif index == 2:
        A[4, 2:4] = G
    else:
        E[4, 2:4] = G
    return realize.StateSpace(A=A, B=[[0], [0], [1], [0], [0]], C=[[1, 0, 0, 0, 0]], D=[[0]], E=E)


def matrix(rng: np.random.Generator) -> realize.StateSpace:
    """Return a plant with two inputs, two outputs and up to eight states."""
    n = int(rng.integers(2, 9))
    A = np.round(rng.standard_normal((n, n)), 3) - 2 * np.eye(n)
    return realize.StateSpace(
        A=A, B=np.round(rng.standard_normal((n, 2)), 3), C=np.round(rng.standard_normal((2, n)), 3)
    )


def derivative(rng: np.random.Generator) -> realize.TransferFunction:
    """Return a controller with an ideal derivative."""
    p, i, d = rng.uniform(0.1, 10, 3)
    return realize.TransferFunction(numerator=[d, p, i], denominator=[1.0, 0.0])


ROWS: tuple[tuple[str, Callable[[np.random.Generator], object], str, dict[str, str]], ...] = (
    ("second-order to states", chain, "state-space", {}),
    ("second-order, masses over 12 decades", lambda rng: chain(rng, 6.0), "state-space", {}),
    ("second-order to coefficients", chain, "transfer-function", {}),
    ("constraint, index 1, to states", lambda rng: constrained(rng, 1), "state-space", {}),
    ("constraint, index 2, to coefficients", lambda rng: constrained(rng, 2), "transfer-function", {}),
    ("constraint, index 3, to states", lambda rng: constrained(rng, 3), "state-space", {}),
    ("ideal derivative to states", derivative, "state-space", {}),
    ("states to a right fraction", matrix, "matrix-fraction", {"side": "right"}),
    ("states to a left fraction", matrix, "matrix-fraction", {"side": "left"}),
)


def of_control(source: object) -> object:
    """Return the transfer function that `control` makes of a plain state model, or None."""
    import control

    if not isinstance(source, realize.StateSpace) or source.E is not None:
        return None
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            return control.ss2tf(control.ss(source.A, source.B, source.C, source.D))
    except Exception:  # whatever the library raises is its own failure
        return None


def main() -> None:
    """Print the table."""
    parser = argparse.ArgumentParser(description=__doc__.split("\n")[0])
    parser.add_argument("--runs", type=int, default=20)
    runs = parser.parse_args().runs
    print(f"{'family':40}{'plants':>7}{'worst error':>13}{'peak-error':>12}{'refused':>9}{'control':>10}")
    for name, make, to, options in ROWS:
        rng = np.random.default_rng(7)
        worst = claimed = rival = 0.0
        refused = 0
        for _ in range(runs):
            source = make(rng)
            try:
                made = realize.convert(source, to, **options)  # type: ignore[arg-type]
            except RealizeError:
                refused += 1
                continue
            other = of_control(source)
            for s in POINTS:
                true, found = value_at(source, s), value_at(made.model, s)  # type: ignore[arg-type]
                worst = max(worst, float(np.abs(found - true).max() / np.abs(true).max()))
                if other is not None:
                    theirs = np.atleast_2d(other(complex(Fraction(int(s.p), int(s.q))))).real  # type: ignore[operator]
                    rival = max(rival, float(np.abs(theirs - true).max() / np.abs(true).max()))
            claim = made.receipt.claim("peak-error")
            claimed = max(claimed, np.inf if claim.infinite else claim.value or 0.0)
        print(
            f"{name:40}{runs:7}{worst:13.1e}{claimed:12.1e}{refused:9}{rival if rival else float('nan'):10.1e}",
            flush=True,
        )


if __name__ == "__main__":
    main()
