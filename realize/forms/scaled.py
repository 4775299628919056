"""Scaled coordinates: every state in a unit of its own, a power of two."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from realize.errors import Refused
from realize.forms.coordinates import Array, Coordinates, Setting, take_units_out
from realize.kernels.response import balancing_scale

Exponents = NDArray[np.int64]
Rule = Callable[[Array, Array, Array, Setting], Exponents]
#: Rounds in which a rule for exponents comes to rest, or begins to go in a circle; two or three are usual.
ROUNDS = 30


def _spread(*matrices: Array) -> float:
    """Return the largest over the smallest nonzero entry."""
    sizes = np.abs(np.concatenate([matrix.reshape(-1) for matrix in matrices]))
    sizes = sizes[sizes > 0]
    if not sizes.size:
        return 1.0
    mantissa, exponent = np.frexp(np.array([sizes.max(), sizes.min()]))
    power = min(int(exponent[0] - exponent[1]), 1023)
    return float(np.ldexp(mantissa[0] / mantissa[1], power))


class _Scaling:
    """A model with its states in units 2^k, and how even it is."""

    def __init__(self, A: Array, B: Array, C: Array, exponents: Exponents) -> None:
        k = self.exponents = exponents
        with np.errstate(under="ignore", over="ignore"):
            self.A = np.ldexp(A, k[None, :] - k[:, None])
            self.B, self.C = np.ldexp(B, -k[:, None]), np.ldexp(C, k[None, :])
            #: True where nothing was rounded
            self.exact = (
                np.array_equal(np.ldexp(self.A, k[:, None] - k[None, :]), A)
                and np.array_equal(np.ldexp(self.B, k[:, None]), B)
                and np.array_equal(np.ldexp(self.C, -k[None, :]), C)
            )
        self.spread = _spread(self.A, self.B, self.C)
        self.key = self.A.tobytes() + self.B.tobytes() + self.C.tobytes()


def _by_their_units(A: Array, B: Array, C: Array, setting: Setting) -> Exponents:
    """A, B and C count alike, whatever the units of time, inputs and outputs."""
    return take_units_out(A, B, C, setting).states


def _as_they_are(A: Array, B: Array, C: Array, setting: Setting) -> Exponents:
    """A, B and C are weighed as they are."""
    n, m, p = A.shape[0], B.shape[1], C.shape[0]
    border = np.zeros((n + m + p, n + m + p))
    border[:n, :n], border[:n, n : n + m], border[n + m :, :n] = np.abs(A), np.abs(B), np.abs(C)
    exponents: Exponents = np.frexp(balancing_scale(border)[:n])[1].astype(np.int64) - 1
    return exponents


def _at_rest(rule: Rule, A: Array, B: Array, C: Array, start: Exponents, setting: Setting) -> _Scaling:
    """Return where a rule leads when it is used again and again; the most even member where it goes in a circle."""
    seen = [_Scaling(A, B, C, start)]
    for _ in range(ROUNDS):
        here = seen[-1]
        try:
            more = rule(here.A, here.B, here.C, setting)
        except Refused:
            return here
        following = _Scaling(A, B, C, here.exponents + more)
        if not np.any(more) or not following.exact:
            return here
        keys = [scaling.key for scaling in seen]
        if following.key in keys:
            seen = seen[keys.index(following.key) :]
            break
        seen.append(following)
    return min(seen, key=lambda scaling: (scaling.spread, scaling.key))


def scaled_states(A: Array, B: Array, C: Array, D: Array, setting: Setting) -> Coordinates:
    """Scale the states by powers of two so that rows and columns of [A B; C 0] are of like size.

    x_i = 2^k_i z_i. Nothing is rounded: a scaling that would leave the range of normal doubles is not used. A model
    that was scaled before stays as it is.

    Parameters
    ----------
    A : (n, n) array
    B : (n, m) array
    C : (p, n) array
    D : (p, m) array
    setting : Setting

    Returns
    -------
    Coordinates
        Details: ``exponents`` k, and the ``spread`` (largest over smallest nonzero entry of A, B, C) before and after.

    References
    ----------
    .. [1] B. N. Parlett, C. Reinsch, Balancing a matrix for calculation of eigenvalues and eigenvectors, Numer. Math.
           13 (1969) 293-304 (from memory).
    """
    n = A.shape[0]

    def best(start: Exponents) -> _Scaling:
        # which of the rules is more even depends on the plant; of two alike the one that changes nothing
        found = [_at_rest(rule, A, B, C, start, setting) for rule in (_by_their_units, _as_they_are)]
        return min(found, key=lambda scaling: (scaling.spread, bool(np.any(scaling.exponents != start))))

    chosen = best(np.zeros(n, dtype=np.int64))
    for _ in range(ROUNDS):
        other = best(chosen.exponents)
        if other.spread >= chosen.spread:
            break
        chosen = other
    k = chosen.exponents
    details = {"exponents": k.tolist(), "spread": {"before": _spread(A, B, C), "after": chosen.spread}}
    transform, back = np.diag(np.ldexp(1.0, k)), np.diag(np.ldexp(1.0, -k))
    return Coordinates(chosen.A, chosen.B, chosen.C, D, transform, back, 1.0, details)
