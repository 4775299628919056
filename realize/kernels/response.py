"""Values of rational functions at complex points, each kind in its own structure, safe against overflow.

No function here forms polynomial coefficients of a model that does not have them.
"""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from realize.kernels.trust import POINT_OPERATIONS, SECTION_OPERATIONS, corrected

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]
#: Mantissas in [0.5, 1) and binary exponents: numbers of any size.
Scaled = tuple[Array, NDArray[np.int64]]


def scaled_polynomial(polynomial: Scaled, points: ComplexArray) -> tuple[ComplexArray, NDArray[np.int64], Array]:
    """Return mantissa, binary exponent and relative rounding bound of a polynomial at complex points.

    Coefficients (highest power first) are mantissa * 2^exponent. Each point is written as sigma * 2^k with |sigma|
    near 1, and the terms are scaled by the largest of them, so that nothing overflows. The bound is on the error
    relative to the value: gamma_2n * sum |terms| / |value| (Higham, Accuracy and Stability of Numerical Algorithms,
    2002, section 5.1), times 2 for the complex products.
    """
    mantissa, exponent = polynomial
    degree = mantissa.size - 1
    size = np.maximum(np.abs(points.real), np.abs(points.imag))
    k = np.where(size > 0, np.frexp(size)[1], 0).astype(np.int64)
    sigma = np.ldexp(points.real, -k) + 1j * np.ldexp(points.imag, -k)
    powers = np.arange(degree, -1, -1)
    exponents = exponent[None, :] + k[:, None] * powers[None, :]
    present = mantissa != 0
    if not present.any():
        return np.zeros(points.size, dtype=complex), np.zeros(points.size, dtype=np.int64), np.zeros(points.size)
    top = exponents[:, present].max(axis=1)
    shift = np.maximum(exponents - top[:, None], -2000)
    terms = np.where(present[None, :], np.ldexp(np.broadcast_to(mantissa, shift.shape), shift), 0.0)
    value = np.zeros(points.size, dtype=complex)
    total = np.zeros(points.size)
    magnitude = np.abs(sigma)
    for j in range(degree + 1):
        value = value * sigma + terms[:, j]
        total = total * magnitude + np.abs(terms[:, j])
    with np.errstate(divide="ignore", invalid="ignore"):
        bound = 4 * (degree + 1) * np.finfo(float).eps * total / np.abs(value)
    return value, top, np.where(total == 0, 0.0, bound)


def scaled_quotient(
    numerator: tuple[ComplexArray, NDArray[np.int64]], denominator: tuple[ComplexArray, NDArray[np.int64]]
) -> ComplexArray:
    """Return the quotient of two scaled values; infinite where the denominator is zero."""
    value, top = numerator
    below, bottom = denominator
    with np.errstate(divide="ignore", invalid="ignore", over="ignore", under="ignore"):
        quotient = value / below
        result = _ldexp(quotient, top - bottom)
    result = np.where((below == 0) & (value != 0), np.inf + 0j, result)
    return np.where((below == 0) & (value == 0), complex(np.nan, np.nan), result)


def _ldexp(values: ComplexArray, exponent: NDArray[np.int64]) -> ComplexArray:
    limited = np.clip(exponent, -5000, 5000).astype(np.int64)
    with np.errstate(over="ignore", under="ignore", invalid="ignore"):
        result = np.empty(values.shape, dtype=complex)
        result.real = np.ldexp(values.real, limited)
        result.imag = np.ldexp(values.imag, limited)
    return result


def polynomial_ratio(numerator: Scaled, denominator: Scaled, points: ComplexArray) -> tuple[ComplexArray, Array]:
    """Return numerator / denominator at complex points, and a bound on the relative error of each value.

    Coefficients are mantissas and exponents, highest power first.
    """
    above = scaled_polynomial(numerator, points)
    below = scaled_polynomial(denominator, points)
    values = scaled_quotient(above[:2], below[:2])
    return values, np.where(np.isnan(values), np.inf, above[2] + below[2])


def _scaled_product(factors: ComplexArray) -> tuple[ComplexArray, NDArray[np.int64]]:
    """Return the product along the last axis as mantissa and exponent."""
    value = np.ones(factors.shape[0], dtype=complex)
    total = np.zeros(factors.shape[0], dtype=np.int64)
    for j in range(factors.shape[1]):
        # the factor is brought near 1 before the product, so that a difference of 1e300 s is no overflow
        factor = factors[:, j]
        size = np.maximum(np.abs(factor.real), np.abs(factor.imag))
        k = np.where(size > 0, np.frexp(size)[1], 0).astype(np.int64)
        value = value * _ldexp(factor, -k)
        size = np.maximum(np.abs(value.real), np.abs(value.imag))
        again = np.where(size > 0, np.frexp(size)[1], 0).astype(np.int64)
        value = _ldexp(value, -again)
        total += k + again
    return value, total


def root_ratio(
    zeros: ComplexArray,
    poles: ComplexArray,
    gain: float,
    points: ComplexArray,
    rounded_zeros: bool = False,
    rounded_poles: bool = False,
) -> tuple[ComplexArray, Array]:
    """Return gain * prod(s - zeros) / prod(s - poles), and a bound on the relative error of each value.

    Differences of doubles have full relative accuracy; where the roots themselves are rounded from decimals, that
    rounding relative to the distance is added.
    """
    above, top = _scaled_product(points[:, None] - zeros[None, :])
    below, bottom = _scaled_product(points[:, None] - poles[None, :])
    mantissa, exponent = np.frexp(gain)
    values = scaled_quotient((above * mantissa, top + int(exponent)), (below, bottom))
    bound = np.full(points.size, 4.0 * (zeros.size + poles.size + 1))
    for roots, rounded in ((zeros, rounded_zeros), (poles, rounded_poles)):
        if rounded:
            size = np.abs(roots.real) + np.abs(roots.imag)
            with np.errstate(divide="ignore", invalid="ignore"):
                share = size[None, :] / np.abs(points[:, None] - roots[None, :])
            bound = bound + np.where(size > 0, share, 0.0).sum(axis=1)
    return values, np.where(np.isnan(values) | np.isnan(bound), np.inf, bound * np.finfo(float).eps)


def scaled_step(
    so_far: tuple[ComplexArray, NDArray[np.int64]], factor: tuple[ComplexArray, NDArray[np.int64]]
) -> tuple[ComplexArray, NDArray[np.int64]]:
    """Return the product of two scaled values with its mantissa near 1."""
    part, top = _near_one(*factor)
    # two factors within [0.5, 2] never leave the range, however many follow
    return _near_one(so_far[0] * part, so_far[1] + top)


def _near_one(value: ComplexArray, exponent: NDArray[np.int64]) -> tuple[ComplexArray, NDArray[np.int64]]:
    size = np.maximum(np.abs(value.real), np.abs(value.imag))
    k = np.where(size > 0, np.frexp(size)[1], 0).astype(np.int64)
    return _ldexp(value, -k), exponent + k


def section_product(sections: Array, gain: float, points: ComplexArray) -> tuple[ComplexArray, Array]:
    """Return gain * product of sections [k][2][3] at complex points, and relative error bounds."""
    above = (
        np.full(points.size, np.frexp(gain)[0], dtype=complex),
        np.full(points.size, int(np.frexp(gain)[1]), dtype=np.int64),
    )
    below = np.ones(points.size, dtype=complex), np.zeros(points.size, dtype=np.int64)
    bound = np.zeros(points.size)
    for numerator, denominator in sections:
        for row, target in ((numerator, 0), (denominator, 1)):
            lead = int(np.argmax(row != 0)) if np.any(row) else 2
            mantissa, exponent = np.frexp(row[lead:])
            part, top, error = scaled_polynomial((mantissa, exponent.astype(np.int64)), points)
            bound = bound + error + 4 * np.finfo(float).eps
            if target == 0:
                above = scaled_step(above, (part, top))
            else:
                below = scaled_step(below, (part, top))
    values = scaled_quotient(above, below)
    return values, np.where(np.isnan(values), np.inf, bound)


def partial_fractions(
    poles: ComplexArray, residues: ComplexArray, powers: NDArray[np.int64], direct: Array, points: ComplexArray
) -> tuple[ComplexArray, Array]:
    """Return sum residues / (s - poles)^powers + polynomial part (highest power first), and relative error bounds.

    The bound, one a point and for the worst channel, is eps (8 + 2 power + 2 sqrt(n)) sum |terms| / |value|: rounding
    errors of a sum of n terms grow like sqrt(n) (Higham & Mary 2019, "A new approach to probabilistic rounding error
    analysis").

    Returns
    -------
    values : [k][outputs][inputs]
        Infinite at the poles.
    bound : [k]
    """
    values = np.zeros((points.size, *direct.shape[1:]), dtype=complex)
    total = np.zeros(values.shape)
    with np.errstate(over="ignore", under="ignore", invalid="ignore", divide="ignore"):
        for matrix in direct:
            values = values * points[:, None, None] + matrix
            total = total * np.abs(points)[:, None, None] + 2 * direct.shape[0] * np.abs(matrix)
        if poles.size:
            basis = (points[:, None] - poles[None, :]) ** -powers[None, :].astype(float)
            hit = (points[:, None] == poles[None, :]).any(axis=1)
            basis[hit] = 0.0
            flat = residues.reshape(poles.size, -1)
            values += (basis @ flat).reshape(values.shape)
            weight = 8 + 2 * powers + 2 * math.sqrt(poles.size)
            total += (np.abs(basis) @ (weight[:, None] * np.abs(flat))).reshape(values.shape)
            values[hit] = np.inf
        ratio = np.finfo(float).eps * total / np.abs(values)
    ratio = np.where(total == 0, 0.0, np.where(np.isnan(ratio), np.inf, ratio))
    return values, ratio.max(axis=(1, 2), initial=0.0)


#: Up to this size a dense model is solved point by point, keeping the structure of its entries.
DIRECT_SIZE = 48


def state_response(A: Array, B: Array, C: Array, D: Array, E: Array | None, points: ComplexArray) -> ComplexArray:
    """Return C (sE - A)^-1 B + D at complex points: [k][outputs][inputs]; see `state_evaluator`."""
    return state_evaluator(A, B, C, D, E)(points)


def state_evaluator(A: Array, B: Array, C: Array, D: Array, E: Array | None) -> Callable[[ComplexArray], ComplexArray]:
    """Return a function of complex points that gives C (sE - A)^-1 B + D: [k][outputs][inputs].

    Models in cascade coordinates are evaluated section by section (`realize.kernels.cascade_response`), in exact
    arithmetic where doubles lose more than TRUSTED. In others the states are scaled by powers of two first. Small
    models and block triangular ones are solved with their own entries, so that zeros stay zeros; the rest by complex
    Schur form once, then substitution at all points together.
    """
    n = A.shape[0]
    direct = np.array(D, dtype=complex)

    def around(part: Callable[[ComplexArray], ComplexArray]) -> Callable[[ComplexArray], ComplexArray]:
        return lambda points: part(points) + direct if points.size else np.empty((0, *direct.shape), dtype=complex)

    if n == 0:
        return lambda points: np.broadcast_to(direct, (points.size, *direct.shape)).copy()
    if E is None and not np.any(np.triu(A, 2)):
        from realize.kernels.cascade_response import CascadeResponse, cascades_of

        chains = cascades_of(A, B, C, direct.real)
        if chains is not None:
            in_doubles = CascadeResponse(chains, direct.shape)
            operations = POINT_OPERATIONS + SECTION_OPERATIONS * in_doubles.order
            return lambda points: corrected(*in_doubles(points), points, operations, in_doubles.exact)
    A, B, C, E = balanced_states(A, B, C, E)
    if n <= DIRECT_SIZE:
        chunk = max(1, 4_000_000 // (n * n))

        def solved(points: ComplexArray) -> ComplexArray:
            return np.concatenate(
                [_direct_solve(A, B, C, E, points[k : k + chunk]) for k in range(0, points.size, chunk)]
            )

        return around(solved)
    blocks = triangular_blocks(A) if E is None else None
    if blocks is not None:
        lower, sizes = blocks
        order = slice(None) if lower else slice(None, None, -1)
        a, b, c = A[order, order].astype(complex), B[order], C[:, order]
        sizes = sizes if lower else sizes[::-1]
        return around(lambda points: _block_substitution(a, b, c, sizes, points))
    # upper triangular, read backwards, is lower triangular
    import scipy.linalg

    if E is None:
        T, Q = scipy.linalg.schur(A.astype(complex), output="complex")
        a, b, c = np.ascontiguousarray(T[::-1, ::-1]), (Q.conj().T @ B)[::-1], (C @ Q)[:, ::-1]
        return around(lambda points: _block_substitution(a, b, c, [1] * n, points))
    S, T, Q, Z = scipy.linalg.qz(A.astype(complex), E.astype(complex), output="complex")
    a, e = np.ascontiguousarray(S[::-1, ::-1]), np.ascontiguousarray(T[::-1, ::-1])
    b, c = (Q.conj().T @ B)[::-1], (C @ Z)[:, ::-1]
    return around(lambda points: _block_substitution(a, b, c, [1] * n, points, e))


def balanced_states(A: Array, B: Array, C: Array, E: Array | None) -> tuple[Array, Array, Array, Array | None]:
    """Return the model with its states scaled by powers of two (exact) so that rows and columns are of like size."""
    pattern = np.abs(A) if E is None else np.abs(A) + np.abs(E)
    if not np.all(np.isfinite(pattern)):
        return A, B, C, E
    if pattern.shape[0] == 0:
        return A, B, C, E
    scale = balancing_scale(pattern)
    if np.all(scale == 1):
        return A, B, C, E
    with np.errstate(over="ignore", under="ignore"):
        scaled = (
            A / scale[:, None] * scale,
            B / scale[:, None],
            C * scale,
            None if E is None else E / scale[:, None] * scale,
        )
    for before, after in zip((A, B, C, E), scaled, strict=True):
        if before is not None and after is not None:
            if not np.all(np.isfinite(after)) or np.any((after == 0) != (before == 0)):
                return A, B, C, E
    return scaled


def balancing_scale(pattern: Array) -> Array:
    """Return powers of two d for which rows and columns of pattern[i, j] d[j] / d[i] have like norms, diagonal aside.

    Parlett & Reinsch 1969, "Balancing a matrix for calculation of eigenvalues and eigenvectors"; without permutation.

    Parameters
    ----------
    pattern : (n, n) array
        Not negative.
    """
    n = pattern.shape[0]
    work = np.array(pattern)
    np.fill_diagonal(work, 0.0)
    if n > DIRECT_SIZE:
        import scipy.linalg

        return scipy.linalg.lapack.dgebal(work, scale=1, permute=0)[3]
    scale = np.ones(n)
    for _ in range(20):
        rows, columns = work.max(axis=1, initial=0.0), work.max(axis=0, initial=0.0)
        usable = (rows > 0) & (columns > 0)
        worst = np.where(usable, np.abs(np.log2(np.where(usable, rows, 1)) - np.log2(np.where(usable, columns, 1))), 0)
        if worst.max(initial=0.0) <= 2:
            break
        for i in np.flatnonzero(worst > 2).tolist():
            row, column = float(work[i].max()), float(work[:, i].max())
            if not (row > 0 and column > 0):
                # what stood there has left the range of doubles meanwhile
                continue
            if not math.isfinite(row + column):
                return np.ones(n)
            # row / f and column * f meet at f = sqrt(row / column); logarithms first: the quotient may overflow
            step = round((math.log2(row) - math.log2(column)) / 2)
            if step:
                factor = math.ldexp(1.0, max(min(step, 1000), -1000))
                work[i] /= factor
                work[:, i] *= factor
                scale[i] *= factor
        if not (np.all(np.isfinite(work)) and np.all(np.isfinite(scale)) and np.all(scale > 0)):
            return np.ones(n)
    return scale


def _direct_solve(A: Array, B: Array, C: Array, E: Array | None, points: ComplexArray) -> ComplexArray:
    n = A.shape[0]
    pencil = points[:, None, None] * (np.eye(n) if E is None else E) - A
    right = np.broadcast_to(B.astype(complex), (points.size, *B.shape))
    with np.errstate(over="ignore", under="ignore", invalid="ignore", divide="ignore"):
        try:
            x = np.linalg.solve(pencil, right)
        except np.linalg.LinAlgError:
            x = np.empty((points.size, *B.shape), dtype=complex)
            for k in range(points.size):
                try:
                    x[k] = np.linalg.solve(pencil[k], B)
                except np.linalg.LinAlgError:
                    x[k] = np.inf
        values = np.einsum("pn,knm->kpm", C, x) if C.shape[0] * B.shape[1] == 1 else C @ x
    singular = ~np.isfinite(x).all(axis=(1, 2))
    values[singular] = np.inf
    return values


def triangular_blocks(A: Array) -> tuple[bool, list[int]] | None:
    """Return (lower?, block sizes) if the matrix is block triangular with blocks of one or two, else None."""
    n = A.shape[0]
    for lower in (True, False):
        a = A if lower else A.T
        if np.any(np.triu(a, 2)):
            continue
        above = np.diagonal(a, 1) != 0
        if np.any(above[:-1] & above[1:]):
            continue
        sizes = []
        k = 0
        while k < n:
            size = 2 if k < n - 1 and above[k] else 1
            sizes.append(size)
            k += size
        return lower, sizes
    return None


def _block_substitution(
    a: ComplexArray,
    b: NDArray,
    c: NDArray,
    sizes: list[int],
    points: ComplexArray,
    e: ComplexArray | None = None,
) -> ComplexArray:
    """Solve (s e - a) x = b for block lower triangular a, e with blocks of one or two, at all points; return c x."""
    n, m = b.shape
    values = np.zeros((points.size, c.shape[0], m), dtype=complex)
    chunk = max(1, 8_000_000 // (n * m))
    for start in range(0, points.size, chunk):
        s = points[start : start + chunk]
        x = np.zeros((n, s.size, m), dtype=complex)
        flat = x.reshape(n, -1)
        with np.errstate(over="ignore", under="ignore", invalid="ignore", divide="ignore"):
            k = 0
            for size in sizes:
                rows = slice(k, k + size)
                right = np.broadcast_to(b[rows, None, :], (size, s.size, m)).astype(complex)
                if k:
                    right = right + (a[rows, :k] @ flat[:k]).reshape(size, s.size, m)
                    if e is not None:
                        right = right - s[None, :, None] * (e[rows, :k] @ flat[:k]).reshape(size, s.size, m)
                if size == 1:
                    pivot = (s if e is None else s * e[k, k]) - a[k, k]
                    x[k] = right[0] / pivot[:, None]
                    x[k, pivot == 0] = np.inf
                else:
                    pencil = np.empty((s.size, 2, 2), dtype=complex)
                    pencil[:] = -a[rows, rows]
                    pencil[:, 0, 0] += s
                    pencil[:, 1, 1] += s
                    x[rows] = _solve_two(pencil, right)
                k += size
        part = np.einsum("pn,nkm->kpm", c, x) if np.all(np.isfinite(x)) else _guarded(c, x)
        values[start : start + chunk] = part
    return values


def _solve_two(pencil: ComplexArray, right: ComplexArray) -> ComplexArray:
    """Solve 2 x 2 systems by elimination with row exchange: pencil [k][2][2], right [2][k][m]."""
    swap = np.abs(pencil[:, 1, 0]) > np.abs(pencil[:, 0, 0])
    top = np.where(swap[:, None], pencil[:, 1], pencil[:, 0])
    low = np.where(swap[:, None], pencil[:, 0], pencil[:, 1])
    r_top = np.where(swap[:, None], right[1], right[0])
    r_low = np.where(swap[:, None], right[0], right[1])
    factor = low[:, 0] / top[:, 0]
    pivot = low[:, 1] - factor * top[:, 1]
    second = (r_low - factor[:, None] * r_top) / pivot[:, None]
    first = (r_top - top[:, 1, None] * second) / top[:, 0, None]
    return np.stack([first, second])


def _guarded(c: NDArray, x: ComplexArray) -> ComplexArray:
    bad = ~np.isfinite(x).all(axis=(0, 2))
    values = np.einsum("pn,nkm->kpm", c, np.where(np.isfinite(x), x, 0))
    values[bad] = np.inf
    return values
