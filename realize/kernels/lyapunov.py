"""Factors of Gramians straight from the real Schur form, in matrix products.

With T upper quasi-triangular and T'X + X T + C'C = 0, the factor R of X = R'R and two companions,

    V = C R^-1   and   M = R T R^-1,   M + M' = -V'V,

are found together without inverting anything: M is upper quasi-triangular, its diagonal blocks have closed forms and
everything above them is -V_i'V_j. For T = [T1 T12; 0 T2] the row of blocks R12 solves a Sylvester equation with M1 and
T2, and what is left is the same problem for T2 with C2 - V1 R12. The Gramian itself is never formed [1]_, [2]_, and the
recursion spends its time in matrix products [3]_.

.. [1] S. J. Hammarling, Numerical solution of the stable, non-negative definite Lyapunov equation, IMA J. Numer. Anal.
       2 (1982) 303-323.
.. [2] D. Kressner, Block variants of Hammarling's method for solving Lyapunov equations, ACM Trans. Math. Softw. 34
       (2008) 1.
.. [3] I. Jonsson, B. Kagstrom, Recursive blocked algorithms for solving triangular systems, ACM Trans. Math. Softw. 28
       (2002) 392-435.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import scipy.linalg
import scipy.linalg.lapack
from numpy.typing import NDArray

Array = NDArray[np.float64]

#: Up to this size the level-2 library routine beats the recursion (measured between 24 and 64: flat).
LEAF = 40
#: Columns up to this length are treated as plain numbers at the leaves.
SHORT = 8


class NotStable(ValueError):
    """A Gramian was asked of a matrix with an eigenvalue outside the stability region."""


class SingularEquation(NotStable):
    """Two matrices have an eigenvalue in common to working precision; a Gramian's is then on the boundary."""


def _cut(T: Array, low: int, high: int) -> int:
    """Return a place near the middle of low..high that cuts no 2 x 2 block of T."""
    middle = (low + high) // 2
    if T[middle, middle - 1] != 0:
        middle = middle + 1 if middle + 1 < high else middle - 1
    return middle


def quasi_triangular_sylvester(A: Array, B: Array, F: Array, *, transposed: bool, sign: int) -> Array:
    """Solve op(A) X + sign X B = F for upper quasi-triangular A and B by recursive blocked substitution.

    Parameters
    ----------
    A : (m, m) array
        Upper quasi-triangular; op(A) is A, or its transpose with `transposed`.
    B : (n, n) array
        Upper quasi-triangular.
    F : (m, n) array
        Right-hand side; left unchanged.
    transposed : bool
    sign : {1, -1}

    Returns
    -------
    (m, n) array

    Raises
    ------
    ValueError
        If A and -sign B have an eigenvalue in common, to working precision.

    References
    ----------
    Jonsson & Kagstrom, reference 3 of the module.
    """
    X = np.array(F, dtype=float)
    if X.size:
        _substitute(A, B, X, transposed, sign)
    return X


def _substitute(A: Array, B: Array, X: Array, transposed: bool, sign: int) -> None:
    m, n = X.shape
    # a side of one block cannot be split, and then the other one is short enough for one call
    if max(m, n) <= LEAF or (m >= n and m <= 2) or (n > m and n <= 2):
        solution, scale, info = scipy.linalg.lapack.dtrsyl(A, B, X, trana="T" if transposed else "N", isgn=sign)
        if info != 0 or scale == 0.0:
            raise SingularEquation("the Sylvester equation is singular to working precision")
        X[:] = solution if scale == 1.0 else solution / scale
        return
    if m >= n:
        k = _cut(A, 0, m)
        if transposed:
            _substitute(A[:k, :k], B, X[:k], transposed, sign)
            X[k:] -= A[:k, k:].T @ X[:k]
            _substitute(A[k:, k:], B, X[k:], transposed, sign)
        else:
            _substitute(A[k:, k:], B, X[k:], transposed, sign)
            X[:k] -= A[:k, k:] @ X[k:]
            _substitute(A[:k, :k], B, X[:k], transposed, sign)
        return
    k = _cut(B, 0, n)
    _substitute(A, B[:k, :k], X[:, :k], transposed, sign)
    X[:, k:] -= sign * (X[:, :k] @ B[:k, k:])
    _substitute(A, B[k:, k:], X[:, k:], transposed, sign)


def schur_eigenvalues(T: Array) -> NDArray[np.complex128]:
    """Return the eigenvalues of a standardised real Schur form in the order of its diagonal."""
    n = T.shape[0]
    values = np.diagonal(T).astype(complex)
    if n > 1:
        below, above = np.diagonal(T, -1), np.diagonal(T, 1)
        first = np.flatnonzero(below != 0)
        mean = (values[first].real + values[first + 1].real) / 2
        half = (values[first].real - values[first + 1].real) / 2
        # square roots before the product: entries near 1e-200 stay apart from zero
        product = np.sqrt(np.abs(above[first])) * np.sqrt(np.abs(below[first]))
        opposite = np.sign(above[first]) * np.sign(below[first]) < 0
        size = np.maximum(np.abs(half), product)
        size[size == 0] = 1.0
        inside = (half / size) ** 2 + np.where(opposite, -1.0, 1.0) * (product / size) ** 2
        root = np.sqrt(inside.astype(complex)) * size
        values[first], values[first + 1] = mean + root, mean - root
    return values


def shifted_solutions(T: Array, points: NDArray[np.complex128], F: Array) -> Array:
    """Return the Frobenius norms of (point I - T)^-1 F at some points, in one blocked substitution.

    Parameters
    ----------
    T : (n, n) array
        Real Schur form.
    points : (k,) complex array
    F : (n, m) array

    Returns
    -------
    (k,) array

    Raises
    ------
    ValueError
        If a point is an eigenvalue of T to working precision.
    """
    k, m = points.size, F.shape[1]
    # (x + i y)(a + i b) - T (x + i y) = f: two real columns stand for a complex one, blocks [a b; -b a] for a + i b
    shifts = np.zeros((2 * k * m, 2 * k * m))
    even = np.arange(0, 2 * k * m, 2)
    repeated = np.repeat(points, m)
    shifts[even, even] = shifts[even + 1, even + 1] = -repeated.real
    shifts[even, even + 1], shifts[even + 1, even] = -repeated.imag, repeated.imag
    right = np.zeros((T.shape[0], 2 * k * m))
    right[:, even] = -np.tile(F, (1, k))
    solved = quasi_triangular_sylvester(T, shifts, right, transposed=False, sign=1)
    return np.sqrt(np.square(solved).sum(axis=0).reshape(k, 2 * m).sum(axis=1))


def observability_factor(T: Array, C: Array) -> tuple[Array, Array, Array]:
    """Return (R, V, M) with T'X + X T + C'C = 0, X = R'R, C = V R, R T = M R, for a stable upper quasi-triangular T.

    Parameters
    ----------
    T : (n, n) array
        Real Schur form, every eigenvalue with a negative real part.
    C : (p, n) array

    Returns
    -------
    R : (n, n) array
        Block upper triangular (the rows of a complex pair fill their 2 x 2 block).
    V : (p, n) array
    M : (n, n) array
        Upper quasi-triangular, M + M' = -V'V where no row of R is zero.

    Raises
    ------
    NotStable
        If an eigenvalue has a real part that is not negative.

    References
    ----------
    Hammarling and Kressner, references 1 and 2 of the module.
    """
    n = T.shape[0]
    R, M, V = np.zeros((n, n)), np.zeros((n, n)), np.zeros(C.shape)
    if n == 0:
        return R, V, M
    if not np.all(schur_eigenvalues(T).real < 0):
        raise NotStable("an eigenvalue has a real part that is not negative")
    if C.shape[0] <= n:
        _factor(T, np.array(C, dtype=float), R, V, M, 0, n)
        return R, V, M
    basis, left = np.linalg.qr(C)
    V = np.zeros((n, n))
    _factor(T, left, R, V, M, 0, n)
    return R, basis @ V, M


def _factor(T: Array, C: Array, R: Array, V: Array, M: Array, low: int, high: int) -> None:
    """Fill the rows and columns low..high of R, V and M; C holds what the rows above have left."""
    if high - low == 1:
        _real_block(T, C, R, V, M, low)
        return
    if high - low == 2 and T[low + 1, low] != 0:
        _pair_block(T, C, R, V, M, low)
        return
    middle = _cut(T, low, high)
    one, two = slice(low, middle), slice(middle, high)
    _factor(T, C, R, V, M, low, middle)
    known = R[one, one] @ T[one, two] + V[:, one].T @ C[:, two]
    np.negative(known, out=known)
    _substitute(M[one, one], T[two, two], known, True, 1)
    R[one, two] = known
    C[:, two] -= V[:, one] @ known
    _factor(T, C, R, V, M, middle, high)
    M[one, two] = -(V[:, one].T @ V[:, two])


def _real_block(T: Array, C: Array, R: Array, V: Array, M: Array, j: int) -> None:
    pole = float(T[j, j])
    column = C[:, j]
    size = math.hypot(*column.tolist()) if column.size <= SHORT else float(np.linalg.norm(column))
    M[j, j] = pole
    if size > 0.0:
        speed = math.sqrt(-2.0 * pole)
        R[j, j] = size / speed
        V[:, j] = column / size * speed


def _pair_block(T: Array, C: Array, R: Array, V: Array, M: Array, j: int) -> None:
    """One complex pair a +- i mu: scaled to the normal matrix [a mu; -mu a], rotated until its Gramian is diagonal.

    With w = c1 + i c2 and S = sum |w|^2, Z = sum w^2 the Gramian has trace S / (-2 a), axis difference
    -Z / (2 (a + i mu)) and determinant (4 a^2 |c1 x c2|^2 + S^2 mu^2) / (16 a^2 |a + i mu|^2): sums of positive terms.
    """
    basis, part = None, C[:, j : j + 2]
    if part.shape[0] > SHORT:
        basis, part = np.linalg.qr(part)
    a = 0.5 * (float(T[j, j]) + float(T[j + 1, j + 1]))
    b, c = float(T[j, j + 1]), float(T[j + 1, j])
    mu = math.copysign(math.sqrt(abs(b)) * math.sqrt(abs(c)), b)
    ratio = math.sqrt(abs(c)) / math.sqrt(abs(b))
    # a few plain numbers: faster than arrays of length one or two
    one, two = part[:, 0].tolist(), [ratio * x for x in part[:, 1].tolist()]
    size = math.hypot(*one, *two)
    M[j, j] = M[j + 1, j + 1] = a
    if size == 0.0:
        M[j, j + 1], M[j + 1, j] = mu, -mu
        return
    one, two = [x / size for x in one], [x / size for x in two]
    square = _dot(one, one) - _dot(two, two) + 2j * _dot(one, two)
    difference = -square / (2.0 * complex(a, mu))
    half = 0.5 * math.atan2(difference.imag, difference.real)
    cosine, sine = math.cos(half), math.sin(half)
    first = [cosine * x + sine * y for x, y in zip(one, two, strict=True)]
    second = [cosine * y - sine * x for x, y in zip(one, two, strict=True)]
    lengths = math.hypot(*first), math.hypot(*second)
    # |c1 x c2| through the part of one vector that is orthogonal to the longer one
    long, short, length = (first, second, lengths[0]) if lengths[0] >= lengths[1] else (second, first, lengths[1])
    along = _dot(long, short) / length**2
    across = length * math.hypot(*(y - x * along for x, y in zip(long, short, strict=True)))
    modulus = math.hypot(a, mu)
    large = 0.5 * (1.0 / (-2.0 * a) + abs(difference))
    root_determinant = math.hypot(2.0 * (a / modulus) * across, mu / modulus) / (-4.0 * a)
    root_one = math.sqrt(large)
    root_two = root_determinant / root_one
    speed = math.sqrt(-2.0 * a)
    R[j, j], R[j, j + 1] = size * root_one * cosine, size * root_one * sine / ratio
    R[j + 1, j], R[j + 1, j + 1] = -size * root_two * sine, size * root_two * cosine / ratio
    for k, vector, norm in ((j, first, lengths[0]), (j + 1, second, lengths[1])):
        if norm > 0.0:
            turned = [x / norm * speed for x in vector]
            V[:, k] = turned if basis is None else basis @ turned
    M[j, j + 1], M[j + 1, j] = mu * root_one / root_two, -mu * root_two / root_one


def _dot(one: list[float], two: list[float]) -> float:
    return sum(x * y for x, y in zip(one, two, strict=True))


def bilinear_schur(T: Array, B: Array, C: Array) -> tuple[Array, Array, Array, float]:
    """Return the continuous model with the same Gramians as a sampled one in real Schur form, and a sign.

    (sign T + I)^-1 (sign T - I), sqrt(2) (sign T + I)^-1 B, sqrt(2) C (sign T + I)^-1. T and -T have the same Gramians
    (T X T' is the same); the sign whose poles stay farther from the point that goes to infinity is taken.
    """
    n = T.shape[0]
    identity = np.eye(n)
    poles = schur_eigenvalues(T)
    sign = 1.0 if np.min(np.abs(poles + 1)) >= np.min(np.abs(poles - 1)) else -1.0
    mapped = np.linalg.solve(sign * T + identity, np.hstack([sign * T - identity, math.sqrt(2.0) * B])).astype(float)
    right = np.linalg.solve((sign * T + identity).T, math.sqrt(2.0) * C.T).T.astype(float)
    return _quasi_triangular(mapped[:, :n], T), mapped[:, n:], right, sign


def _quasi_triangular(matrix: Array, pattern: Array) -> Array:
    """Return the matrix with what is zero below the diagonal of the pattern set to zero."""
    result = np.triu(matrix, -1)
    single = np.flatnonzero(np.diagonal(pattern, -1) == 0)
    result[single + 1, single] = 0.0
    return result


@dataclass(frozen=True)
class Companion:
    """An upper quasi-triangular M with M + M' = -V'V, kept by its diagonal blocks and V alone.

    Attributes
    ----------
    diagonals : (3, n) array
        Main diagonal; what stands right of it, and below it, inside the 2 x 2 blocks (zero elsewhere).
    V : (p, n) array
    """

    diagonals: Array
    V: Array

    @classmethod
    def of(cls, M: Array, V: Array) -> Companion:
        """Return what is kept of M."""
        diagonals = np.zeros((3, M.shape[0]))
        diagonals[0], diagonals[2, :-1] = np.diagonal(M), np.diagonal(M, -1)
        diagonals[1, :-1] = np.where(diagonals[2, :-1] != 0, np.diagonal(M, 1), 0.0)
        return cls(diagonals, V)

    def full(self) -> Array:
        """Return M."""
        M = np.triu(-(self.V.T @ self.V), 1)
        n = M.shape[0]
        np.fill_diagonal(M, self.diagonals[0])
        pairs = np.flatnonzero(self.diagonals[2, : n - 1])
        M[pairs, pairs + 1], M[pairs + 1, pairs] = self.diagonals[1, pairs], self.diagonals[2, pairs]
        return M


@dataclass(frozen=True)
class SquareRoots:
    """Square roots of both Gramians of a stable model T, B, C, and the model as they see it.

    Attributes
    ----------
    L, R : (n, n) arrays
        Controllability Gramian L L', observability Gramian R'R.
    of_left, of_right : (n, n) arrays, or what stands for them
        N, or the companion of its transpose; M.
    input : (n, m) array
        B = L input.
    output : (p, n) array
        C = output R.
    """

    L: Array
    R: Array
    of_left: Array | Companion
    input: Array
    of_right: Array | Companion
    output: Array

    @property
    def N(self) -> Array:
        """T L = L N."""
        return self.of_left if isinstance(self.of_left, np.ndarray) else np.ascontiguousarray(self.of_left.full().T)

    @property
    def M(self) -> Array:
        """R T = M R."""
        return self.of_right if isinstance(self.of_right, np.ndarray) else self.of_right.full()


def square_roots(T: Array, B: Array, C: Array, *, sampled: bool) -> SquareRoots:
    """Return square roots of the Gramians of a model in real Schur form, with their companions.

    Parameters
    ----------
    T : (n, n) array
        Real Schur form, stable.
    B : (n, m) array
    C : (p, n) array
    sampled : bool
        Stein instead of Lyapunov equations, by the bilinear map: T X T' - X + B B' = 0.

    Returns
    -------
    SquareRoots

    Raises
    ------
    NotStable
        If an eigenvalue lies on or outside the boundary of the stability region.
    """
    n = T.shape[0]
    if n == 0:
        nothing = np.zeros((0, 0))
        return SquareRoots(nothing, nothing, nothing, B, nothing, C)
    sign = 1.0
    if sampled:
        if not np.all(np.abs(schur_eigenvalues(T)) < 1):
            raise NotStable("an eigenvalue lies on or outside the unit circle")
        T, B, C, sign = bilinear_schur(T, B, C)
    R, output, M = observability_factor(T, C)
    right: Array | Companion = M
    if not sampled:
        # two large matrices less while singular values are computed
        right = Companion.of(M, output)
        del M
    # the dual: reversed transpose of T is upper quasi-triangular again
    dual, inputs, K = observability_factor(np.ascontiguousarray(T.T[::-1, ::-1]), np.ascontiguousarray(B.T[:, ::-1]))
    if sampled:
        # back through the map: contractive because M + M' <= 0
        right, output = cayley_back(M, output, sign, triangular=True)
        K, inputs = cayley_back(K, inputs, sign, triangular=True)
    left = K.T if sampled else Companion.of(K, inputs)
    del K
    return SquareRoots(np.ascontiguousarray(dual.T[::-1]), R, left, inputs.T, right, output)


def cayley_back(M: Array, V: Array, sign: float = 1.0, *, triangular: bool) -> tuple[Array, Array]:
    """Return the companions of a sampled model from those of its continuous image: sign (I - M)^-1 (I + M), and for V.

    Parameters
    ----------
    M : (k, k) array
        M + M' <= 0, so that I - M is well away from singular.
    V : (p, k) array
    sign : {1, -1}
    triangular : bool
        M is upper quasi-triangular, and so is the result.
    """
    identity = np.eye(M.shape[0])
    inner = np.linalg.solve(identity - M, identity + M).astype(float)
    if triangular:
        inner = _quasi_triangular(inner, M)
    return sign * inner, V @ (inner + identity) / math.sqrt(2.0)


def schur_gramian_factors(T: Array, B: Array, C: Array, *, sampled: bool) -> tuple[Array, Array]:
    """Return (L, R) with controllability Gramian L L' and observability Gramian R'R of a model in real Schur form.

    Parameters, exceptions and method are those of `square_roots`.
    """
    roots = square_roots(T, B, C, sampled=sampled)
    return roots.L, roots.R


def gramian_factors(A: Array, B: Array, C: Array, *, sampled: bool) -> tuple[Array, Array]:
    """Return (L, R) with controllability Gramian L L' and observability Gramian R'R.

    A L L' + L L' A' + B B' = 0 and A'R'R + R'R A + C'C = 0 (sampled: A L L'A' - L L' + B B' = 0, likewise R).

    Parameters
    ----------
    A : (n, n) array
    B : (n, m) array
    C : (p, n) array
    sampled : bool

    Returns
    -------
    L, R : (n, n) arrays

    Raises
    ------
    NotStable
        If A is not stable.
    """
    if A.shape[0] == 0:
        return np.zeros((0, 0)), np.zeros((0, 0))
    T, Q = scipy.linalg.schur(A, output="real", check_finite=False)
    L, R = schur_gramian_factors(T, Q.T @ B, C @ Q, sampled=sampled)
    return Q @ L, R @ Q.T
