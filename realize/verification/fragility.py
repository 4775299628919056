"""Fragility: how far one rounding of a model's own numbers can move its response, to first order.

With u = 2^-53 and each number changed by at most u times itself, at one frequency ::

    transfer function    u (sum |b_k s^k| / |N| + sum |a_k s^k| / |D|)
    zero-pole-gain       u (1 + sum (|Re z| + |Im z|) / |s - z| + the same for poles)
    pole-residue         u (sum |r| / |s - p|^k + k |r| (|Re p| + |Im p|) / |s - p|^(k+1) + sum |d_k s^k|) / |G|
    sections             the sum over the sections of the transfer function's formula
    matrix fraction      u (sum |s^k N_k| + |G| sum |s^k D_k|) |D^-1| / |G|, right; a left one likewise
    second order         u (|C X| (|s^2 M| + |s D| + |K|) |X F| + |C X| |F| + sum |s^k C_k| |X F| + |G|) / |G(s)|,
                         X = (s^2 M + s D + K)^-1, C = P + s V + s^2 W
    state space          u (|C X| |B| + |C X| |A| |X B| + |C| |X B| + |D| (+ |s| |C X| |E| |X B|)) / |G|,
                         X = (sE - A)^-1

in Frobenius norms over the channels; the largest value over the frequencies of the band is reported.
"""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray

from realize.kernels.response import balanced_states, scaled_polynomial
from realize.kernels.schur_response import SchurResponse
from realize.models import (
    MatrixFraction,
    Model,
    PoleResidue,
    SecondOrder,
    Sections,
    StateSpace,
    TransferFunction,
    ZeroPoleGain,
)

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]
_U = np.finfo(float).eps / 2
#: From this order one Schur form serves all frequencies.
SCHUR_FROM = 60
#: Up to this many frequencies a descriptor is factored at each of them: a QZ decomposition costs more than so many.
FACTORED = 60
#: Up to this order all frequencies are solved at once.
SMALL = 12


def fragility(model: Model, frequency: Array) -> float | None:
    """Return the largest relative first-order response change for one rounding of every number, over the frequencies.

    Parameters
    ----------
    frequency : [k] float
        Angular frequencies, rad/s, none of them at a pole or zero on the axis.
    """
    points = model.time.points(frequency)
    with np.errstate(all="ignore"):
        value = _relative(model, points)
    value = value[np.isfinite(value)]
    return float(value.max()) if value.size else None


def fragility_at(model: Model, frequency: Array) -> Array:
    """Return the relative first-order response change at each frequency (rad/s); not a number at a pole on the axis."""
    with np.errstate(all="ignore"):
        return _relative(model, model.time.points(frequency))


#: Coefficients and powers of frequency within these exponents of two need no scaling.
_PLAIN = 400


def _plain_growth(coefficients: Array, points: ComplexArray) -> Array | None:
    """Return sum |c_k s^k| / |p(s)| by Horner's rule, or None where something could leave the range of doubles."""
    present = np.abs(coefficients[coefficients != 0])
    if present.size == 0 or not np.isfinite(coefficients).all():
        return None
    sizes = np.abs(points)
    reach = max(abs(np.log2(sizes.max(initial=1e-300))), abs(np.log2(max(sizes.min(initial=1.0), 1e-300))))
    if reach * coefficients.size + max(abs(np.log2(present.max())), abs(np.log2(present.min()))) > _PLAIN:
        return None
    value, total = np.zeros(points.size, dtype=complex), np.zeros(points.size)
    for c in coefficients.tolist():
        value, total = value * points + c, total * sizes + abs(c)
    return total / np.abs(value)


def _growth(mantissa: Array, exponent: NDArray[np.int64], points: ComplexArray) -> Array:
    """Return sum |c_k s^k| / |p(s)|."""
    bound = scaled_polynomial((mantissa, exponent), points)[2]
    return bound / (4 * mantissa.size * np.finfo(float).eps)


def _root_terms(roots: ComplexArray, points: ComplexArray) -> Array:
    size = np.abs(roots.real) + np.abs(roots.imag)
    return np.sum(np.where(size > 0, size[None, :] / np.abs(points[:, None] - roots[None, :]), 0.0), axis=1)


def _relative(model: Model, points: ComplexArray) -> Array:
    p, m = model.shape
    if isinstance(model, StateSpace):
        return _states(model, points)
    if isinstance(model, MatrixFraction):
        return _fraction(model, points)
    if isinstance(model, SecondOrder):
        return _second_order(model, points)
    if isinstance(model, TransferFunction) and model.shape == (1, 1) and not model.decimals:
        parts = [_plain_growth(line[0][0], points) for line in (model.numerator, model.denominator)]
        if parts[0] is not None and parts[1] is not None:
            return _U * (parts[0] + parts[1])
    if isinstance(model, Sections):
        total = np.full(points.size, 1.0)
        for section in model.sections:
            for row in section:
                lead = int(np.argmax(row != 0)) if np.any(row) else 2
                mantissa, exponent = np.frexp(row[lead:])
                total += _growth(mantissa, exponent.astype(np.int64), points)
        return _U * total
    response = model.rational_part(points)
    size = np.abs(response)
    if isinstance(model, PoleResidue):
        change = np.zeros(size.shape)
        distance = np.abs(points[:, None] - model.poles[None, :])
        weight = np.abs(model.poles.real) + np.abs(model.poles.imag)
        for k in range(model.poles.size):
            power = int(model.powers[k])
            factor = distance[:, k] ** -power * (1 + power * weight[k] / distance[:, k])
            change += factor[:, None, None] * np.abs(model.residues[k])
        part = np.zeros(size.shape)
        for matrix in model.direct:
            part = part * np.abs(points)[:, None, None] + np.abs(matrix)
        change += part
    else:
        change = np.zeros(size.shape)
        for i in range(p):
            for j in range(m):
                if isinstance(model, TransferFunction):
                    terms = _growth(*model.exact_or_double("numerator", i, j), points) + _growth(
                        *model.exact_or_double("denominator", i, j), points
                    )
                elif isinstance(model, ZeroPoleGain):
                    terms = 1 + _root_terms(model.zeros[i][j], points) + _root_terms(model.poles[i][j], points)
                else:
                    raise TypeError(model.kind)
                change[:, i, j] = np.where(size[:, i, j] > 0, terms * size[:, i, j], 0.0)
    return _U * _norm(change) / _norm(size)


def _norm(values: Array) -> Array:
    if values.shape[1:] == (1, 1):
        return values[:, 0, 0]
    top = values.max(axis=(1, 2), keepdims=True)
    scale = np.where(top > 0, top, 1.0)
    return np.sqrt(np.sum((values / scale) ** 2, axis=(1, 2))) * scale[:, 0, 0]


def _states(model: StateSpace, points: ComplexArray) -> Array:
    n = model.A.shape[0]
    if n == 0:
        return np.full(points.size, _U)
    if n > 200:
        points = points[:: max(1, points.size // 40)]
    large = model.large_response()
    if large is not None:
        return _large(large, model.D, points)
    A, B, C, E = model.A, model.B, model.C, model.E
    if n > SMALL or E is not None or not _even(A):
        A, B, C, E = balanced_states(A, B, C, E)
    if n <= SMALL:
        together = _together(A, B, C, model.D, E, points)
        if together is not None:
            return together
    a, b, c = np.abs(A), np.abs(B), np.abs(C)
    result = np.empty(points.size)
    for k, (s, right, left) in enumerate(_solutions(A, B, C, E, points)):
        if right is None or left is None:
            result[k] = np.nan
            continue
        value = C @ right + model.D
        row, column = np.abs(left), np.abs(right)
        change = row @ b + row @ a @ column + c @ column + np.abs(model.D)
        if E is not None:
            change = change + abs(s) * (row @ np.abs(E) @ column)
        size = np.linalg.norm(value)
        result[k] = _U * np.linalg.norm(change) / size if size > 0 else np.nan
    return result


def _fraction(model: MatrixFraction, points: ComplexArray) -> Array:
    result = np.full(points.size, np.nan)
    right = model.side == "right"
    for k, s in enumerate(points):
        (N, n), (D, d) = (
            (
                sum(M * s**e for e, M in zip(range(len(P) - 1, -1, -1), P, strict=True)),
                sum(np.abs(M) * abs(s) ** e for e, M in zip(range(len(P) - 1, -1, -1), P, strict=True)),
            )
            for P in (model.numerator, model.denominator)
        )
        try:
            inverse = np.linalg.inv(D)
        except np.linalg.LinAlgError:
            continue
        value = N @ inverse if right else inverse @ N
        change = (n + np.abs(value) @ d) @ np.abs(inverse) if right else np.abs(inverse) @ (n + d @ np.abs(value))
        size = np.linalg.norm(value)
        result[k] = _U * np.linalg.norm(change) / size if size > 0 else np.nan
    return result


def _large(large: SchurResponse, D: Array, points: ComplexArray) -> Array:
    """Return the relative changes of a large model, all points in the same products."""
    A, B, C = large.scaled
    right, left = large.solutions(points)
    (k, p, n), m = left.shape, right.shape[1]
    row, column = np.abs(left), np.abs(right).transpose(0, 2, 1)
    through = (row.reshape(k * p, n) @ np.abs(A)).reshape(k, p, n)
    change = row @ np.abs(B) + through @ column + np.abs(C) @ column + np.abs(D)
    size = np.linalg.norm((C @ right.transpose(0, 2, 1) + D).reshape(k, p * m), axis=1)
    return np.where(size > 0, _U * np.linalg.norm(change.reshape(k, p * m), axis=1) / size, np.nan)


def _second_order(model: SecondOrder, points: ComplexArray) -> Array:
    M, D, K, F, outputs, direct = model.arguments
    n = M.shape[0]
    if n > 100:
        points = points[:: max(1, points.size // 40)]
    result = np.full(points.size, np.nan)
    for k, s in enumerate(points.tolist()):
        powers = [1.0, s, s * s]
        P, C = (sum(w * part for w, part in zip(powers, parts, strict=True)) for parts in ((K, D, M), outputs))
        p, c = (
            sum(abs(w) * np.abs(part) for w, part in zip(powers, parts, strict=True)) for parts in ((K, D, M), outputs)
        )
        try:
            right, left = np.linalg.solve(P, F.astype(complex)), np.linalg.solve(P.T, C.T).T
        except np.linalg.LinAlgError:
            continue
        row, column = np.abs(left), np.abs(right)
        change = row @ p @ column + row @ np.abs(F) + c @ column + np.abs(direct)
        size = np.linalg.norm(C @ right + direct)
        result[k] = _U * np.linalg.norm(change) / size if size > 0 else np.nan
    return result


def _even(A: Array) -> bool:
    """Return whether the entries of a small matrix are so near in size that elimination needs no balancing."""
    sizes = [abs(entry) for row in A.tolist() for entry in row if entry]
    return not sizes or max(sizes) < 2.0**20 * min(sizes)


def _together(A: Array, B: Array, C: Array, D: Array, E: Array | None, points: ComplexArray) -> Array | None:
    """Return the relative changes of a small model at all points at once, or None if a point is a pole."""
    n = A.shape[0]
    pencil = points[:, None, None] * (np.eye(n) if E is None else E) - A
    try:
        inverse = np.linalg.solve(pencil, np.broadcast_to(np.eye(n), pencil.shape))
    except np.linalg.LinAlgError:
        return None
    right, left = inverse @ B, C @ inverse
    value = C @ right + D
    row, column = np.abs(left), np.abs(right)
    change = row @ np.abs(B) + row @ np.abs(A) @ column + np.abs(C) @ column + np.abs(D)
    if E is not None:
        change = change + np.abs(points)[:, None, None] * (row @ np.abs(E) @ column)
    return _U * _norm(change) / _norm(np.abs(value))


def _solutions(
    A: Array, B: Array, C: Array, E: Array | None, points: ComplexArray
) -> Iterator[tuple[complex, ComplexArray | None, ComplexArray | None]]:
    """Yield s, (sE - A)^-1 B and C (sE - A)^-1; None where singular. Large models by Schur form once."""
    n = A.shape[0]
    if n <= SCHUR_FROM:
        eye = np.eye(n) if E is None else E
        for s in points.tolist():
            try:
                pencil = s * eye - A
                yield s, np.linalg.solve(pencil, B), np.linalg.solve(pencil.T, C.T).T
            except np.linalg.LinAlgError:
                yield s, None, None
        return
    import scipy.linalg

    if E is not None and points.size <= FACTORED:
        for s in points.tolist():
            lu, order, info = scipy.linalg.lapack.zgetrf(s * E - A)
            if info != 0:
                yield s, None, None
                continue
            right = scipy.linalg.lapack.zgetrs(lu, order, B)[0]
            yield s, right, scipy.linalg.lapack.zgetrs(lu, order, C.T, trans=1)[0].T
        return
    if E is None:
        T, Q = scipy.linalg.schur(A.astype(complex), output="complex")
        Z, S = Q, None
    else:
        T, S, Q, Z = scipy.linalg.qz(A.astype(complex), E.astype(complex), output="complex")
    b, c = Q.conj().T @ B, C @ Z
    diagonal = np.arange(n)
    for s in points.tolist():
        if S is None:
            pencil = -T
            pencil[diagonal, diagonal] += s
        else:
            pencil = s * S - T
        if np.any(pencil[diagonal, diagonal] == 0):
            yield s, None, None
            continue
        right = scipy.linalg.solve_triangular(pencil, b, check_finite=False)
        left = scipy.linalg.solve_triangular(pencil, c.T, trans="T", check_finite=False).T
        yield s, Z @ right, left @ Q.conj().T
