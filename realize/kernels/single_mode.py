"""The mode nearest to a start that an elementwise relative change of a state model hides, and how small the change is.

A mode s with left vector w is unreachable after a change |dA| <= eta |A|, |dB| <= eta |B| (zeros stay zero) exactly if
w' [A + dA - s I, B + dB] = 0. For given s and w the smallest such eta is the elementwise backward error ::

    eta(s, w) = max_j |r_j| / (|w|' |[A, B]|)_j,    r = w' [A - s I, B],

for complex changes (Oettli & Prager 1964, applied to one row); it does not depend on the units of states, inputs and
time. It is made small over s and w by singular vectors of the columns weighted with the denominators [2]_ [3]_.

.. [1] W. Oettli, W. Prager, Compatibility of approximate solution of linear equations with given error bounds for
       coefficients and right-hand sides, Numer. Math. 6 (1964) 405-409.
.. [2] R. Eising, Between controllable and uncontrollable, Syst. Control Lett. 4 (1984) 263-264.
.. [3] C. C. Paige, Properties of numerical algorithms related to computing controllability, IEEE Trans. Automat.
       Control 26 (1981) 130-138.
"""

from __future__ import annotations

import math

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

#: Smallest denominators, relative to the largest, in the steps of the search over s and w.
FLOORS = (1e-6, 1e-6, 1e-9, 1e-9, 1e-12, 1e-12, 1e-15, 1e-15)
#: Steps without gain that end the search.
PATIENCE = 3
#: Entries of w this small, relative to the largest, are tried as zeros: rounding leaves something where nothing is.
CLEARED = (0.0, 1e-13, 1e-10, 1e-7)
#: Denominators of zero columns, relative to the largest: what has no number cannot be changed.
NO_NUMBER = 1e-30


def nearest_mode(
    M: Array,
    s: complex,
    w: ComplexArray,
    enough: float,
    free: Array | None = None,
    found: Array | None = None,
) -> tuple[float, complex, ComplexArray]:
    """Return the smallest backward error found from a start, with its s and w.

    Parameters
    ----------
    M : (n, n + m) array
        [A, B].
    s, w : complex and (n,) array
        Where to start; a real s stays real.
    enough : float
        An error this small ends the search.
    free : (n, q) array, optional
        Orthonormal basis of the space that w lies in; everything unless given.
    found : (n, k) array, optional
        Vectors found before, whose rows the residual may use.
    """
    n, sizes = M.shape[0], np.abs(M)
    F = np.zeros((n, 0)) if found is None else found
    real = s.imag == 0
    w = w.real.astype(complex) if real and np.linalg.norm(w.real) > 0.5 * np.linalg.norm(w) else w
    best, best_s, best_w = math.inf, s, w
    # a w that is orthogonal to these lies in the free space
    outside = np.zeros((n, 0))
    if free is not None and free.shape[1] < n:
        outside = np.linalg.qr(free, mode="complete")[0][:, free.shape[1] :]
    unit = np.eye(n, M.shape[1])
    idle = 0
    for floor in FLOORS:
        before = best
        for small in CLEARED:
            trial = np.where(np.abs(w) > small * np.abs(w).max(), w, 0.0)
            error, trial_s = _backward_error(M, sizes, F, trial, real)
            if error < best:
                best, best_s, best_w = error, trial_s, trial
        idle = idle + 1 if best > 0.5 * before else 0
        if best <= enough or idle == PATIENCE or not np.isfinite(best):
            break
        w, s = best_w, best_s
        D = np.abs(w) @ sizes
        D = np.maximum(D, floor * D.max())
        N, lean = (M - s * unit) / D, np.concatenate([w, np.zeros(M.shape[1] - n)]) / D
        if F.shape[1]:
            span = _allowed_rows(F, D)
            N, lean = N - (N @ span) @ span.T, lean - span @ (span.T @ lean)
        # Gauss & Newton for w and s together; w moves orthogonally to itself and to what was found before
        N = np.hstack([N, outside, w.conj()[:, None]])
        # entries that are zero stay zero; rows of like size, so that rounding of the large ones drowns no others
        live = w != 0
        size = np.abs(N).max(axis=1)[live]
        scale = 1 / np.where(size > 0, size, 1.0)
        edge = float(np.abs(lean).max()) or 1.0
        table = np.vstack([N[live] * scale[:, None], np.pad(-lean / edge, (0, N.shape[1] - lean.size))])
        right = -(w @ N)
        right[-1] = 0.0
        if real:
            table, right = table.real, right.real
        move = scipy.linalg.lstsq(table.T, right, lapack_driver="gelsy", check_finite=False)[0]
        w = w.astype(complex)
        w[live] += move[:-1] * scale
        w = w / np.linalg.norm(w)
        s = s + move[-1] / edge
    return best, best_s, best_w.astype(complex)


def _allowed_rows(F: Array, D: Array) -> Array:
    """Return an orthonormal basis of the weighted rows of F'[I, 0], which a residual may have a share of."""
    rows = np.zeros((D.size, F.shape[1]))
    rows[: F.shape[0]] = F
    basis: Array = np.linalg.qr(rows / D[:, None])[0]
    return basis


def _backward_error(M: Array, sizes: Array, F: Array, w: ComplexArray, real: bool) -> tuple[float, complex]:
    """Return the elementwise backward error of a left vector, and the eigenvalue that fits it best."""
    n = M.shape[0]
    D = np.abs(w) @ sizes
    top = D.max(initial=0.0)
    if top == 0:
        # nothing there depends on this state, and it on nothing
        return 0.0, 0j
    weight = np.maximum(D, NO_NUMBER * top)
    a, b = w @ M, np.concatenate([w, np.zeros(M.shape[1] - n)])
    noise = 4 * np.finfo(float).eps * np.abs(b)
    if F.shape[1]:
        span = _allowed_rows(F, weight)
        scaled = np.stack([a / weight, b / weight])
        a, b = (scaled - (scaled @ span) @ span.T) * weight
    x, y = a / weight, b / weight
    below = np.vdot(y, y).real
    s = complex(np.vdot(y, x) / below) if below > 0 else 0j
    s = complex(s.real, 0.0) if real else s
    r = np.abs(a - s * b)
    # where there is no number to change, the residual has to be nothing but rounding
    r = np.where((D == 0) & (r <= noise * abs(s)), 0.0, r)
    if np.any((D == 0) & (r > 0)):
        return math.inf, s
    error = np.divide(r, D, out=np.zeros(r.shape), where=D > 0)
    return float(error.max()), s
