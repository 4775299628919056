"""Hankel singular values of large models whose Gramians have a low rank, without a Schur form."""

from __future__ import annotations

import math

import numpy as np
import scipy.linalg.lapack
from numpy.typing import NDArray

from realize.kernels.alternating_directions import LowRankFactor, low_rank_factor
from realize.kernels.balancing import EPS, HankelFactors, backward_error, balanced_part
from realize.kernels.hessenberg import ShiftedHessenberg
from realize.kernels.leading_part import trimmed
from realize.kernels.lyapunov import SquareRoots, cayley_back

Array = NDArray[np.float64]

#: From this order on it pays to try; below, the real Schur form is as quick.
FROM_ORDER = 600
#: Eigenvalues nearer to the axis than this fraction of the norm are left to the real Schur form and its examination.
NEAREST = 1e-5
#: What may be left of a random vector: stability is wrong with a chance of n^3/2 times this.
PROOF = 1e-11
#: Size of the corners of the Hessenberg form whose eigenvalues start the iteration.
CORNER = 40
#: How many frequencies tell what rounding in A does to the response.
SENSITIVE_FREQUENCIES = 24


def low_rank_factors(A: Array, B: Array, C: Array, *, sampled: bool) -> HankelFactors | None:
    """Return Gramian factors and Hankel singular values of a stable model, or None where this is no shorter way.

    Hessenberg form, then alternating directions for both Gramians; a sampled model through the bilinear map. None
    unless the model is found stable with every eigenvalue well away from the boundary, and the factors are narrow.

    All values share one error: what the backward error of the Hessenberg form and of the solutions does to the response
    (as for the real Schur form, see `realize.kernels.balancing`); the rounding of the product; what the factors lack.

    Parameters
    ----------
    A : (n, n) array
        Scaled.
    B : (n, m) array
    C : (p, n) array
    sampled : bool

    Returns
    -------
    HankelFactors or None
    """
    n = A.shape[0]
    if n < FROM_ORDER or not np.any(B) or not np.any(C) or (B.shape[1] + C.shape[0]) * 40 > n:
        return None
    own = A, B, C
    if sampled:
        try:
            A, B, C = _mapped(A, B, C)
        except np.linalg.LinAlgError:
            return None
    tolerance = math.sqrt(n) * EPS
    reduced, tau, _ = scipy.linalg.lapack.dgehrd(A, lwork=64 * n)
    H = np.triu(reduced, -1)
    nearest = NEAREST * math.sqrt(float(np.abs(H).sum(axis=0).max()) * float(np.abs(H).sum(axis=1).max()))
    corners = H[:CORNER, :CORNER], H[-CORNER:, -CORNER:]
    start = np.concatenate([np.linalg.eigvals(corner) for corner in corners]).astype(complex)
    reflections = np.asfortranarray(reduced[1:, :-1])
    found: list[LowRankFactor] = []
    for matrix, right in ((H, B), (np.ascontiguousarray(H.T[::-1, ::-1]), C.T)):
        right = _turned(reflections, tau, right, back=True)
        right = right[::-1] if found else right
        try:
            one = low_rank_factor(
                ShiftedHessenberg(matrix), right, start, nearest=nearest, tolerance=tolerance, proof=PROOF
            )
        except (np.linalg.LinAlgError, ValueError):
            return None
        if one is None:
            return None
        found.append(one)
    first, second = found
    L = _turned(reflections, tau, first.L, back=False)
    R = _turned(reflections, tau, second.L[::-1], back=False).T
    left_out = float(np.linalg.norm(R)) * first.left_out + float(np.linalg.norm(L)) * second.left_out
    product = tolerance * float(np.linalg.norm(R)) * float(np.linalg.norm(L))
    N, inputs, M, outputs = first.N, first.F, second.N.T, second.F.T
    if sampled:
        M, outputs = cayley_back(M, outputs, triangular=False)
        K, inputs = cayley_back(N.T, inputs.T, triangular=False)
        N, inputs = K.T, inputs.T
    roots = SquareRoots(L, R, N, inputs, M, outputs)
    U, values, Zt = np.linalg.svd(R @ L, full_matrices=False)
    short = trimmed(U, values, Zt.T, product + left_out, n)
    factors = HankelFactors(roots, short.values, short.left, short.right, np.zeros(n), 0.0)
    response = _sensitivity(factors, own, sampled)
    errors = np.full(n, product + left_out + short.rest + response)
    return HankelFactors(roots, short.values, short.left, short.right, errors, response)


def _mapped(A: Array, B: Array, C: Array) -> tuple[Array, Array, Array]:
    """Return (A + I)^-1 (A - I), sqrt(2) (A + I)^-1 B, sqrt(2) C (A + I)^-1: a continuous model, the same Gramians."""
    n = A.shape[0]
    shifted = A + np.eye(n)
    lower, pivots, info = scipy.linalg.lapack.dgetrf(shifted)
    if info != 0:
        raise np.linalg.LinAlgError("A + I is singular")
    solved = scipy.linalg.lapack.dgetrs(lower, pivots, np.hstack([A - np.eye(n), math.sqrt(2.0) * B]))[0]
    left = scipy.linalg.lapack.dgetrs(lower, pivots, math.sqrt(2.0) * C.T, trans=1)[0].T
    return np.ascontiguousarray(solved[:, :n]), solved[:, n:], left


def _turned(reflections: Array, tau: Array, columns: Array, *, back: bool) -> Array:
    """Return Q'X (back) or Q X for the reflections of a Hessenberg form."""
    result = np.array(columns, order="F")
    result[1:] = scipy.linalg.lapack.dormqr(
        "L", "T" if back else "N", reflections, tau, result[1:], lwork=64 * max(result.shape)
    )[0]
    return result


def _sensitivity(factors: HankelFactors, model: tuple[Array, Array, Array], sampled: bool) -> float:
    """Return what the backward error does to the response, seen by the balanced states that stand clear."""
    values = factors.values
    clear = int(np.count_nonzero(values[: factors.left.shape[1]] > values[0] * 1e-12)) if values.size else 0
    if clear == 0:
        return 0.0
    part = balanced_part(factors, clear)
    poles = np.linalg.eigvals(part.A).astype(complex)
    distance = np.abs(np.abs(poles) - 1) if sampled else np.abs(poles.real)
    near = poles[np.argsort(distance, kind="stable")]
    near = near[near.imag >= 0][:SENSITIVE_FREQUENCIES]
    points = np.exp(1j * np.angle(near)) if sampled else 1j * near.imag
    pencil = points[:, None, None] * np.eye(clear) - part.A
    state = np.linalg.solve(pencil, np.broadcast_to(part.B.astype(complex), (points.size, *part.B.shape)))
    costate = np.linalg.solve(
        pencil.transpose(0, 2, 1), np.broadcast_to(part.C.T.astype(complex), (points.size, *part.C.T.shape))
    )
    gram = part.V.T @ part.V, part.W.T @ part.W
    sizes = [
        np.sqrt(np.maximum(np.einsum("kim,ij,kjm->k", x.conj(), one, x).real, 0.0))
        for x, one in ((state, gram[0]), (costate, gram[1]))
    ]
    return backward_error(model[0]) * float(np.max(sizes[0] * sizes[1], initial=0.0))
