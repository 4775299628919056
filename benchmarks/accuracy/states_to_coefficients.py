"""State space -> coefficients: how many are correctly rounded, structural zeros, relative degree; beside others.

Run: python benchmarks/accuracy/states_to_coefficients.py [--alone]
The truth comes from determinants of integer matrices at n + 1 points (bordered ones for the numerator) and Newton
interpolation: another road than the one that is judged. A plant whose fraction cancels exactly would show as not right.
The others run in a child process with a time limit.
"""

from __future__ import annotations

import sys
import time
from collections.abc import Iterator
from fractions import Fraction
from typing import Any

import flint
import numpy as np
from independent import Child, control_coefficients, scipy_coefficients

import realize

OTHERS = {"scipy": scipy_coefficients, "control": control_coefficients}


def plants() -> Iterator[tuple[str, realize.StateSpace]]:
    """Yield (name, state model) of order 10 to 100."""
    rng = np.random.default_rng(3)
    for n in (10, 20, 40, 60, 100):
        A = rng.standard_normal((n, n)) / np.sqrt(n) - 1.5 * np.eye(n)
        yield f"random dense {n}", realize.StateSpace(A=A, B=rng.standard_normal((n, 1)), C=rng.standard_normal((1, n)))
    for n in (10, 20, 40, 60, 100):
        A = np.diag(-2.0 * np.ones(n)) + np.diag(np.ones(n - 1), 1) + np.diag(np.ones(n - 1), -1)
        A[-1, -1] = -1.0
        yield f"RC ladder {n}", realize.StateSpace(A=1000.1 * A, B=1000.1 * np.eye(n)[:, :1], C=np.eye(n)[-1:])
    for n in (10, 20, 40, 60):
        value = 1.1 + 0.3 * np.sin(np.arange(n))
        A = np.diag(-1 / value[:-1], 1) + np.diag(1 / value[1:], -1)
        A[0, 0], A[-1, -1] = -0.7, -0.9
        yield f"LC ladder {n}", realize.StateSpace(A=A, B=np.eye(n)[:, :1], C=np.eye(n)[-1:])
    for n in (10, 20, 40):
        c = np.real(np.poly(-np.geomspace(0.1, 100.0, n)))
        A = np.vstack([-c[1:], np.eye(n)[:-1]])
        yield f"companion {n}", realize.StateSpace(A=A, B=np.eye(n)[:, :1], C=np.eye(n)[-1:])
    for count in (5, 10, 20, 50):
        w = 10.0 * np.cumsum(1 + 0.3 * np.sin(2.4 * np.arange(count)))
        stiffness, gyration = np.diag(w**2), np.diag(0.01 * w)
        A = np.block([[np.zeros((count, count)), np.eye(count)], [-stiffness, -gyration]])
        shape = np.cos(np.arange(count))
        B = np.concatenate([np.zeros(count), shape])[:, None]
        yield f"flexible {2 * count}", realize.StateSpace(A=A, B=B, C=np.concatenate([shape, np.zeros(count)])[None])


def integer(matrix: Any, scale: int) -> flint.fmpz_mat:
    """Return the entries times a power of two, all integers."""
    rows = [[int(Fraction(float(x)) * scale) for x in row] for row in np.atleast_2d(matrix)]
    return flint.fmpz_mat(rows)


def truth(model: realize.StateSpace) -> tuple[list[Fraction], list[Fraction]]:
    """Return exact numerator and denominator, highest power first, by interpolation of integer determinants."""
    n = model.A.shape[0]
    bits = max(Fraction(float(x)).denominator.bit_length() - 1 for M in (model.A, model.B, model.C) for x in M.flat)
    scale = 1 << bits
    # with A' = 2^k A: det(tI - A') at t = 0..n; the bordered determinant for the numerator
    A, B, C = integer(model.A, scale), integer(model.B, scale), integer(model.C, scale)
    D = Fraction(float(model.D[0, 0]))
    points, below, above = list(range(n + 1)), [], []
    for t in points:
        pencil = flint.fmpz_mat([[(t if i == j else 0) - int(A[i, j]) for j in range(n)] for i in range(n)])
        below.append(flint.fmpq(pencil.det()))
        bordered = [[int(pencil[i, j]) for j in range(n)] + [int(B[i, 0])] for i in range(n)]
        bordered.append([-int(C[0, j]) for j in range(n)] + [0])
        above.append(flint.fmpq(flint.fmpz_mat(bordered).det()))
    n_poly, d_poly = interpolated(points, above), interpolated(points, below)
    # t = 2^k s: the coefficient of t^j is that of s^j times 2^(k (n - j)); B and C bring 2^(2k), one of them with t
    result = []
    for poly, extra in ((n_poly, 1), (d_poly, 0)):
        c = [Fraction(int(x.p), int(x.q)) for x in poly.coeffs()]
        c += [Fraction(0)] * (n + 1 - len(c))
        result.append([c[j] / Fraction(scale) ** (n - j + extra) for j in range(n, -1, -1)])
    numerator = [x + D * y for x, y in zip(*result, strict=True)]
    return numerator, result[1]


def interpolated(points: list[int], values: list[Any]) -> flint.fmpq_poly:
    """Return the polynomial through the points by Newton's divided differences."""
    table = list(values)
    for k in range(1, len(points)):
        for i in range(len(points) - 1, k - 1, -1):
            table[i] = (table[i] - table[i - 1]) / (points[i] - points[i - k])
    result = flint.fmpq_poly([table[-1]])
    for k in range(len(points) - 2, -1, -1):
        result = result * flint.fmpq_poly([-points[k], 1]) + flint.fmpq_poly([table[k]])
    return result


def nearest(value: Fraction) -> float:
    """Return the nearest double, infinite past the range."""
    try:
        return value.numerator / value.denominator
    except OverflowError:
        return np.inf if value > 0 else -np.inf


def judged(found: tuple[Any, Any], wanted: tuple[list[Fraction], list[Fraction]]) -> tuple[int, int, int, int, float]:
    """Return coefficients right to the last bit, structural zeros kept, zeros in all, relative degree, worst error."""
    right = zeros = of_zeros = 0
    worst = 0.0
    degrees = []
    n = len(wanted[1])
    lead = float(np.atleast_1d(found[1])[np.flatnonzero(np.atleast_1d(found[1]))[0]])
    for values, exact in zip(found, wanted, strict=True):
        values = np.atleast_1d(np.asarray(values, dtype=float)) / (lead if lead != 1.0 else 1.0)
        values = np.concatenate([np.zeros(n - values.size), values])
        degrees.append(n - 1 - int(np.flatnonzero(values)[0]) if values.any() else -1)
        for x, y in zip(values.tolist(), exact, strict=True):
            right += x == nearest(y)
            if y == 0:
                of_zeros += 1
                zeros += x == 0
            elif np.isfinite(x):
                worst = max(worst, float(abs(Fraction(x) - y) / abs(y)))
            else:
                worst = np.inf
    return right, zeros, of_zeros, degrees[1] - degrees[0], worst


def main() -> None:
    """Print one line a plant: right / coefficients, zeros kept / zeros, relative degree, worst relative error."""
    child = Child(60.0)
    names = [] if "--alone" in sys.argv else list(OTHERS)
    heads = "".join(f"{name:>34}" for name in ["realize", *names])
    print(f"{'plant':18}{'degree':>7}{'ms':>8}{heads}   (right, zeros kept, relative degree, worst relative error)")
    all_right = True
    for name, model in plants():
        wanted = truth(model)
        start = time.perf_counter()
        made = realize.convert(model, "transfer-function").model
        seconds = time.perf_counter() - start
        assert isinstance(made, realize.TransferFunction)
        count = 2 * len(wanted[1])
        exact_degree = next(k for k, x in enumerate(wanted[0]) if x)
        columns = []
        for other in ["realize", *names]:
            if other == "realize":
                happened, value = "done", (made.numerator[0][0], made.denominator[0][0])
            else:
                happened, value = child.call(OTHERS[other], model.A, model.B, model.C, model.D)
            if happened != "done":
                columns.append(happened)
                continue
            right, zeros, of_zeros, degree, worst = judged(value, wanted)
            columns.append(f"{right:4d}/{count:<4d}{zeros:4d}/{of_zeros:<4d}{degree:4d}{worst:10.1e}")
            if other == "realize":
                all_right = all_right and right == count and degree == exact_degree
        print(f"{name:18}{exact_degree:7d}{1e3 * seconds:8.0f}{''.join(f'{c:>34}' for c in columns)}", flush=True)
    child.close()
    print("every coefficient correctly rounded" if all_right else "NOT EVERY COEFFICIENT CORRECTLY ROUNDED")


if __name__ == "__main__":
    main()
