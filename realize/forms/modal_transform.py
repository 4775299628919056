"""The transform that leads from the states of a model to its modal form from partial fractions, by eigenvectors."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

from realize.forms.controllability import condition_of
from realize.forms.coordinates import Array, Setting, take_units_out

#: Relative residual of A T = T A_new, B = T B_new, C T = C_new up to which a transform is worth its name.
WORTH = 1e-9


@dataclass(frozen=True)
class ModalTransform:
    """x = T z and z = S x, with the condition number and the largest relative residual of the three equations."""

    transform: Array
    back: Array
    condition: float
    residual: float


def modal_transform(
    A: Array, B: Array, C: Array, modal: tuple[Array, Array, Array], setting: Setting
) -> ModalTransform | str:
    """Return the transform from the states of a model to its modal form with simple poles, or why there is none.

    With right and left eigenvectors v, w of A, w v = 1, and C v = c for the rows c and columns b of the modal form, the
    columns of T are v, for a pair 2 Re v and -2 Im v of (C = 2 Re c, -2 Im c), and the rows of S are w.

    Parameters
    ----------
    A : (n, n), B : (n, m), C : (p, n) arrays
        The source.
    modal : (A, B, C)
        Of blocks 1 x 1 and [[a, -b], [b, a]] without coupling.
    setting : Setting
    """
    n, (own_A, own_B, own_C) = A.shape[0], modal
    if own_A.shape[0] != n:
        return f"the modal form has {own_A.shape[0]} states and the source {n}: modes that cancel are left out"
    if n == 0:
        return ModalTransform(np.eye(0), np.eye(0), 1.0, 0.0)
    pairs: list[tuple[int, complex]] = []
    start = 0
    while start < n:
        wide = start + 1 < n and own_A[start + 1, start] != 0
        pairs.append((start, complex(own_A[start, start], own_A[start + 1, start] if wide else 0.0)))
        start += 2 if wide else 1
    rest = own_A.copy()
    for at, value in pairs:
        size = 2 if value.imag else 1
        rest[at : at + size, at : at + size] = 0.0
    if np.any(rest) or len({value for _, value in pairs}) < len(pairs):
        return "a pole repeats, so that eigenvectors do not tell one state from another"
    units = take_units_out(A, B, C, setting)
    values, left, right = scipy.linalg.eig(units.A, left=True, right=True, check_finite=False)
    values = np.ldexp(values.real, units.time) + 1j * np.ldexp(values.imag, units.time)
    T, S = np.zeros((n, n)), np.zeros((n, n))
    free = np.ones(n, dtype=bool)
    for at, value in sorted(pairs, key=lambda pair: abs(pair[1])):
        nearest = int(np.argmin(np.where(free, np.abs(values - value), np.inf)))
        free[nearest] = False
        v, w = right[:, nearest], left[:, nearest].conj()
        if value.imag:
            # a pair: the eigenvalue below the axis is taken as well
            free[int(np.argmin(np.where(free, np.abs(values - value.conjugate()), np.inf)))] = False
        if value.imag:
            b, c = own_B[at] + 1j * own_B[at + 1], 0.5 * (own_C[:, at] - 1j * own_C[:, at + 1])
        else:
            b, c = own_B[at].astype(complex), own_C[:, at].astype(complex)
            v, w = v.real.astype(complex), w.real.astype(complex)
        along = w @ v
        if along == 0:
            return "an eigenvalue is defective in doubles, so that it has no eigenvectors"
        w = w / along
        # the length and the turn of v from the side that shows the mode better
        seen, reached = units.C @ v * 2.0**units.gain, w @ units.B * 2.0**units.gain
        shown = float(np.linalg.norm(units.C @ v)) / max(float(np.linalg.norm(v)), 1e-300)
        driven = float(np.linalg.norm(w @ units.B)) / max(float(np.linalg.norm(w)), 1e-300)
        if max(shown, driven) == 0:
            return "a mode is neither reached nor seen"
        factor = (
            np.vdot(seen, c) / np.vdot(seen, seen)
            if shown >= driven
            else np.vdot(reached, reached) / np.vdot(reached, b)
        )
        if not np.isfinite(factor) or factor == 0:
            return "a mode is not reached or not seen"
        v, w = v * factor, w / factor
        if value.imag:
            T[:, at], T[:, at + 1] = 2 * v.real, -2 * v.imag
            S[at], S[at + 1] = w.real, w.imag
        else:
            T[:, at], S[at] = v.real, w.real
    return _judged(units.A, units.B, units.C, modal, T, S, units.states, units.time, units.gain)


def _judged(
    A: Array,
    B: Array,
    C: Array,
    modal: tuple[Array, Array, Array],
    T: Array,
    S: Array,
    states: NDArray[np.int64],
    time: int,
    gain: int,
) -> ModalTransform | str:
    own_A = np.ldexp(modal[0], -time)
    # columns of like size, so that every mode counts
    size = np.frexp(np.max(np.abs(T), axis=0))[1]
    even = np.ldexp(T, -size[None, :])
    own_A = np.ldexp(own_A, size[:, None] - size[None, :])
    own_B, own_C = np.ldexp(modal[1], size[:, None] - gain), np.ldexp(modal[2], -size[None, :] - gain)
    residual = 0.0
    for here, there in ((A @ even, even @ own_A), (even @ own_B, B), (C @ even, own_C)):
        largest = max(float(np.linalg.norm(here)), float(np.linalg.norm(there)))
        if largest > 0:
            residual = max(residual, float(np.linalg.norm(here - there)) / largest)
    if not residual <= WORTH:
        return f"its eigenvectors in doubles satisfy A T = T A_new to {residual:.1e} only"
    transform, back = np.ldexp(T, states[:, None]), np.ldexp(S, -states[None, :])
    if not (np.all(np.isfinite(transform)) and np.all(np.isfinite(back))):
        return "the transform lies beyond the range of doubles"
    return ModalTransform(transform, back, condition_of(transform, back), residual)
