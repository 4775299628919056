"""Companion forms: the coefficients of a transfer function as entries (Kailath 1980, Linear Systems, section 2.1)."""

from __future__ import annotations

from fractions import Fraction

import numpy as np
from numpy.typing import NDArray

from realize.forms.tuned_coupling import to_double

Array = NDArray[np.float64]


def _normal(
    numerators: list[list[Fraction]], denominator: list[Fraction]
) -> tuple[list[Fraction], list[list[Fraction]], list[Fraction]]:
    n = len(denominator) - 1
    lead = denominator[0]
    a = [value / lead for value in denominator[1:]]
    rows, direct = [], []
    for numerator in numerators:
        b = [Fraction(0)] * (n + 1 - len(numerator)) + [value / lead for value in numerator]
        direct.append(b[0])
        rows.append([b[k + 1] - b[0] * a[k] for k in range(n)])
    return a, rows, direct


def controllable_companion(
    numerators: list[list[Fraction]], denominator: list[Fraction]
) -> tuple[Array, Array, Array, Array]:
    """Return A, B, C, D in controllable companion form for one input: A = [-a; I 0], B = e1.

    Every entry is the correctly rounded exact value.

    Parameters
    ----------
    numerators : [outputs] lists of Fraction
        Highest power first, no longer than the denominator.
    denominator : list of Fraction
        Common denominator, n + 1 coefficients.
    """
    a, rows, direct = _normal(numerators, denominator)
    n = len(a)
    A = np.zeros((n, n))
    A[:1, :] = [[to_double(-value) for value in a]] if n else np.zeros((1, 0))[:1]
    A[1:, :-1] += np.eye(max(n - 1, 0))
    B = np.zeros((n, 1))
    B[:1] = 1.0
    C = np.array([[to_double(value) for value in row] for row in rows]).reshape(len(rows), n)
    return A, B, C, np.array([[to_double(value)] for value in direct])


def observable_companion(
    numerators: list[list[Fraction]], denominator: list[Fraction]
) -> tuple[Array, Array, Array, Array]:
    """Return A, B, C, D in observable companion form for one output; numerators are those of the inputs."""
    A, B, C, D = controllable_companion(numerators, denominator)
    return A.T.copy(), C.T.copy(), B.T.copy(), D.T.copy()
