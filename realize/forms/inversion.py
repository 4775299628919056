"""When a mass or descriptor matrix may be inverted, and doing it: only where that is harmless, with its condition."""

from __future__ import annotations

from collections.abc import Sequence
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

#: Condition number, after scaling of rows and columns by powers of two, up to which a matrix is inverted: at most three
#: of sixteen digits are at stake.
HARMLESS = 1e3
#: Largest size whose inverse is applied in exact arithmetic, each entry rounded once.
EXACT_SIZE = 40


class Verdict(NamedTuple):
    """What a matrix is: identity, diagonal, well-conditioned, ill-conditioned or singular; its condition number."""

    kind: str
    condition: float

    @property
    def harmless(self) -> bool:
        """True where the inverse may be applied."""
        return self.kind in ("identity", "diagonal", "well-conditioned")


def equilibrated(E: Array) -> Array:
    """Return E with rows and columns scaled by powers of two until each has its largest entry in [1/2, 1)."""
    scaled = np.array(E, dtype=float)
    for _ in range(8):
        before = scaled
        for axis in (1, 0):
            top = np.abs(scaled).max(axis=axis, keepdims=True)
            shift = np.where(top > 0, -np.frexp(top)[1], 0)
            scaled = np.ldexp(scaled, shift)
        if np.array_equal(scaled, before):
            break
    return scaled


def judged(E: Array) -> Verdict:
    """Return what a square matrix is; the condition number is that of the equilibrated matrix, in the 2-norm.

    The inverse of a diagonal matrix divides each row of the equations by one number, so that every entry of the result
    is rounded once, whatever the spread of the diagonal is.
    """
    n = E.shape[0]
    if np.array_equal(E, np.eye(n)):
        return Verdict("identity", 1.0)
    diagonal = np.diagonal(E)
    if not np.any(E - np.diag(diagonal)):
        return Verdict("diagonal", 1.0) if np.all(diagonal != 0) else Verdict("singular", np.inf)
    values = np.linalg.svd(equilibrated(E), compute_uv=False)
    if values[-1] <= n * np.finfo(float).eps * values[0]:
        return Verdict("singular", float(values[0] / values[-1]) if values[-1] > 0 else np.inf)
    condition = float(values[0] / values[-1])
    return Verdict("well-conditioned" if condition <= HARMLESS else "ill-conditioned", condition)


def growth(E: Array, right: Sequence[Array], solved: Sequence[Array]) -> float:
    """Return how much a rounding of the entries of X = E^-1 R moves a row of R, relative to that row: max |E||X| / |R|.

    It is 1 for a diagonal E. Rows that belong to very different units make it large although E is well-conditioned once
    it is scaled: what small rows said is then lost beside the large ones. Zero rows are left out.
    """
    worst = 1.0
    with np.errstate(over="ignore", invalid="ignore", under="ignore"):
        for R, X in zip(right, solved, strict=True):
            if R.size == 0:
                continue
            size = np.abs(R).max(axis=1)
            moved = (np.abs(E) @ np.abs(X)).max(axis=1)[size > 0] / size[size > 0]
            worst = max(worst, float(np.nan_to_num(moved, nan=np.inf).max(initial=1.0)))
    return worst


def divided_out(E: Array, right: Sequence[Array], *, rows_count: bool = True) -> tuple[Verdict, list[Array] | None]:
    """Return what E is, and E^-1 R for each R where that is harmless: condition and growth at most HARMLESS.

    Parameters
    ----------
    rows_count : bool
        False where the rows are mixtures already (after an orthogonal transform): the condition alone decides.
    """
    verdict = judged(E)
    if not verdict.harmless:
        return verdict, None
    solved = applied_inverse(E, right)
    if solved is None:
        return verdict, None
    grown = growth(E, right, solved)
    if rows_count and grown > HARMLESS:
        return Verdict("ill-conditioned", grown), None
    return verdict, solved


def applied_inverse(E: Array, right: Sequence[Array]) -> list[Array] | None:
    """Return E^-1 X for each X, or None where an entry would leave the range of doubles.

    A diagonal matrix divides; up to EXACT_SIZE the solve is exact, each entry rounded once; larger ones by LU with
    partial pivoting of the row-scaled matrix.
    """
    n = E.shape[0]
    diagonal = np.diagonal(E)
    found: list[Array] = []
    with np.errstate(over="ignore", under="ignore", divide="ignore", invalid="ignore"):
        if not np.any(E - np.diag(diagonal)):
            for X in right:
                value = X / diagonal[:, None]
                if not np.all(np.isfinite(value)) or np.any((value == 0) != (X == 0)):
                    return None
                found.append(value)
            return found
    if n <= EXACT_SIZE:
        return _exactly(E, right)
    top = np.abs(E).max(axis=1)
    shift = np.where(top > 0, -np.frexp(top)[1], 0)[:, None]
    import scipy.linalg

    factors = scipy.linalg.lu_factor(np.ldexp(E, shift))
    for X in right:
        value = scipy.linalg.lu_solve(factors, np.ldexp(X, shift))
        if not np.all(np.isfinite(value)):
            return None
        found.append(value)
    return found


def _exactly(E: Array, right: Sequence[Array]) -> list[Array] | None:
    from flint import fmpq, fmpq_mat

    from realize.kernels.exact.numbers import nearest

    def exact(matrix: Array) -> fmpq_mat:
        return fmpq_mat([[fmpq(*entry.as_integer_ratio()) for entry in row] for row in matrix.tolist()])

    joined = np.hstack(right)
    solved = exact(E).solve(exact(joined)).tolist()
    value = np.array([[nearest(entry) for entry in row] for row in solved]).reshape(joined.shape)
    if not np.all(np.isfinite(value)):
        return None
    parts: list[Array] = np.split(value, np.cumsum([X.shape[1] for X in right])[:-1], axis=1)
    return parts
