"""Low-rank factors of Gramians from shifted solutions, several shifts at a time, without eigenvalues.

With stable S and a row e, X solves A X + X (S o I) = W (e o I) where o is the Kronecker product with the inputs; one
column block of X for each shift. If R is the factor of the Gramian of S and e, R S = M R, e = V R and M + M' = -V'V,
then Z = X (R^-1 o I) satisfies

    A Z = W (V o I) - Z (M o I),     A Z Z' + Z Z'A' + W W' = U U',     U = W + Z (V' o I),

so that U takes the place of W for the next shifts. That is the alternating direction iteration [1]_, [2]_ with a whole
group of shifts as one step. All steps together: A L = L N + U V and B = L F + U with N + N' = -F F'.

.. [1] J.-R. Li, J. White, Low rank solution of Lyapunov equations, SIAM J. Matrix Anal. Appl. 24 (2002) 260-280
       (from memory).
.. [2] P. Benner, P. Kurschner, J. Saak, Self-generating and efficient shift parameters in ADI methods for large
       Lyapunov and Sylvester equations, ETNA 43 (2014) 142-162 (from memory).
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

from realize.kernels.hessenberg import ShiftedHessenberg
from realize.kernels.lyapunov import observability_factor

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

#: Shifts of one group: at most so many solutions at a time.
GROUP = 8
#: A shift joins a group only while the columns of R^-1 stay below this: digits are lost in proportion.
LIKENESS = 100.0
#: Factors with more columns than this fraction of the order are left to the real Schur form.
FRACTION = 0.35
#: What is left may grow on the way by this factor at most: digits are lost in proportion.
GROWTH = 100.0


@dataclass(frozen=True)
class LowRankFactor:
    """A P + P A' + B B' = U U' with P = L L', A L = L N + U V and B = L F + U.

    Attributes
    ----------
    L, N, F : (n, k), (k, k), (k, m) arrays
    U : (n, m) array
        What is left of B.
    left_out : float
        Estimated norm of the factor of the solution for U U', the columns that L lacks: at most |U| times the root of
        the trace of the solution for B B' = I, which one random vector estimates; twice that is taken.
    """

    L: Array
    N: Array
    F: Array
    U: Array
    left_out: float


def _group(candidates: ComplexArray, nearest: float) -> ComplexArray | None:
    """Choose shifts among estimated eigenvalues: each where those chosen before damp least."""
    left = candidates[(candidates.real <= -nearest) & (candidates.imag >= 0)]
    if left.size == 0:
        return None
    weight = np.zeros(left.size)
    chosen: list[complex] = []
    # first the one that is hardest to reach with another
    index = int(np.argmin(np.abs(left.real) / np.abs(left)))
    while len(chosen) < GROUP:
        chosen.append(complex(left[index]))
        for shift in {chosen[-1], chosen[-1].conjugate()}:
            with np.errstate(divide="ignore"):
                weight += np.log(np.abs(left - shift)) - np.log(np.abs(left + shift.conjugate()))
        index = int(np.argmax(weight))
        # the next one may not be too much like the others
        trial = [*chosen, complex(left[index])]
        if weight[index] < -5.0 or _likeness(np.array(trial)) > LIKENESS:
            break
    return np.array(chosen)


def _realised(shifts: ComplexArray) -> tuple[Array, Array]:
    """Return S and e with a real block for each shift and its conjugate."""
    sizes = np.where(shifts.imag == 0, 1, 2)
    k = int(sizes.sum())
    S, e = np.zeros((k, k)), np.zeros((1, k))
    at = 0
    for shift, size in zip(shifts.tolist(), sizes.tolist(), strict=True):
        S[at : at + size, at : at + size] = (
            shift.real if size == 1 else [[shift.real, shift.imag], [-shift.imag, shift.real]]
        )
        e[0, at] = 1.0
        at += size
    return S, e


def _likeness(shifts: ComplexArray) -> float:
    """Return the norm of R^-1 when the responses exp(p t) of the shifts and their conjugates have length 1."""
    every = np.concatenate([shifts, shifts[shifts.imag != 0].conj()])
    root = np.sqrt(-2 * every.real)
    gram = -np.outer(root, root) / (every[:, None] + every.conj())
    least = float(np.linalg.eigvalsh(gram)[0])
    return least**-0.5 if least > 0 else math.inf


def low_rank_factor(
    solver: ShiftedHessenberg, B: Array, start: ComplexArray, *, nearest: float, tolerance: float, proof: float
) -> LowRankFactor | None:
    """Return a factor of the Gramian of H and B, or None where columns are many or eigenvalues near the axis.

    Shifts are eigenvalues of H seen by the latest columns, the stable ones. A random vector runs along:
    for a left eigenvector v of length 1 and eigenvalue x, v' of what is left of it is v' of it times a product of
    (x - conj p) / (x + p), which is not below 1 if x is unstable. So what is left of a vector with entries of variance
    1 stays above d n^1/2 unless H is stable, but for a chance of n^3/2 d. Shifts keep a distance from the axis, so that
    an eigenvalue within rounding of it cannot vanish by being hit exactly.

    Parameters
    ----------
    solver : ShiftedHessenberg
    B : (n, m) array
    start : complex array
        First estimates of eigenvalues.
    nearest : float
        Smallest distance of a shift from the axis.
    tolerance : float
        What L may lack, relative to it (Frobenius norms).
    proof : float
        What may be left of the random vector, relative to its length.

    Returns
    -------
    LowRankFactor or None
    """
    n, m = B.shape
    W = np.hstack([B, np.random.default_rng(n).standard_normal((n, 1))])
    H = solver.matrix
    blocks: list[Array] = []
    steps: list[tuple[Array, Array]] = []
    candidates = start
    inverse, size, columns, first = 0.0, 0.0, 0, float(np.linalg.norm(B))
    while True:
        left = float(np.linalg.norm(W[:, :m])), float(np.linalg.norm(W[:, m:])) / math.sqrt(n)
        lacks = 2 * left[0] * math.sqrt(inverse)
        if columns and lacks <= tolerance * math.sqrt(size) and left[1] <= proof:
            break
        if not max(left[0] / first, left[1]) <= GROWTH or _hopeless(columns, left[0] / first, tolerance, FRACTION * n):
            return None
        shifts = _group(candidates, nearest)
        if shifts is None:
            return None
        S, e = _realised(shifts)
        k = S.shape[0]
        columns += k * m
        # one real column for a real shift, real and imaginary part of a pair
        real = [part for x, shift in zip(solver.solve(shifts, W), shifts, strict=True) for part in _parts(x, shift)]
        R, V, M = observability_factor(S, e)
        Z = scipy.linalg.solve(R.T, np.stack(real).reshape(k, -1), check_finite=False).reshape(k, m + 1, n)
        W = W + np.tensordot(V[0], Z, 1).T
        inverse += float(np.linalg.norm(Z[:, m]) ** 2)
        size += float(np.linalg.norm(Z[:, :m]) ** 2)
        blocks.append(np.ascontiguousarray(Z[:, :m]).reshape(k * m, n).T)
        steps.append((M, V))
        basis = scipy.linalg.qr(np.hstack([blocks[-1], Z[:, m].T]), mode="economic", check_finite=False)[0]
        candidates = np.linalg.eigvals(basis.T @ (H @ basis)).astype(complex)
    eye = np.eye(m)
    V = np.hstack([np.kron(step[1], eye) for step in steps])
    N = -np.tril(V.T @ V)
    at = 0
    for M, _ in steps:
        size = M.shape[0] * m
        N[at : at + size, at : at + size] = np.kron(M.T, eye)
        at += size
    return LowRankFactor(np.hstack(blocks), N, -V.T, W[:, :m], lacks)


def _parts(x: ComplexArray, shift: complex) -> list[Array]:
    return [x.real] if shift.imag == 0 else [x.real, x.imag]


def _hopeless(columns: int, left: float, tolerance: float, most: float) -> bool:
    """Say whether the decay so far, in proportion, leads to too many columns."""
    if columns > most:
        return True
    if columns < most / 4:
        return False
    return left >= 1 or math.log(tolerance) / math.log(left) * columns > 1.5 * most
