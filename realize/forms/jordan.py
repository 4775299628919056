"""Real Jordan form with multiplicities that are decided exactly."""

from __future__ import annotations

from typing import Any

import numpy as np

from realize.errors import Refused
from realize.forms.controllability import condition_of
from realize.forms.coordinates import Coordinates, Setting, modes


def jordan_form(A: Any, B: Any, C: Any, D: Any, setting: Setting) -> Coordinates:
    """Return the real Jordan form of the matrices as they are given, to the last bit.

    One block for each chain: J = lambda I + N with ones above the diagonal for a real eigenvalue; for a pair
    a +- j b the same with [[a, -b], [b, a]] and 2 x 2 identities. Multiplicities come from the exact characteristic
    polynomial and exact ranks, eigenvalues are correctly rounded, and the transform is computed in balls of rising
    precision and rounded once [1]_. Each chain is scaled so that its inputs and outputs are of like size, and the
    largest entry of its last row of B is positive (its second entry zero for a pair); of its first column of C where
    that row is zero.

    Parameters
    ----------
    A : (n, n), B : (n, m), C : (p, n), D : (p, m)
        Arrays, nested lists of integer ratios, or rational matrices.
    setting : Setting

    Returns
    -------
    Coordinates
        `details` holds ``blocks``: first state, size (states), chain (length), eigenvalue with frequency (rad/s) and
        damping ratio.

    Raises
    ------
    Refused
        If a number lies beyond the range of doubles.

    References
    ----------
    .. [1] F. R. Gantmacher, The Theory of Matrices, vol. 1, Chelsea 1959, chapter VII (from memory).
    """
    from realize.kernels.exact.bases import BeyondRange, rational_states, rounded_matrix
    from realize.kernels.exact.jordan import Unsettled
    from realize.kernels.exact.jordan import jordan_form as exact_form

    states = rational_states(A, B, C, D)
    try:
        form = exact_form(states)
        direct = rounded_matrix(states.D)
    except BeyondRange as error:
        raise Refused(f"the Jordan form has {error}; scale time and gain first, or use --form schur") from None
    except Unsettled as error:
        raise Refused(f"{error}: eigenvalues lie too close together; use --form modal or schur") from None
    blocks, start = [], 0
    for block in form.blocks:
        size = block.size * (1 if block.root.real else 2)
        eigenvalue = modes(np.array([block.root.value]), setting.period)[0]
        blocks.append({"first": start, "size": size, "chain": block.size, **eigenvalue})
        start += size
    with np.errstate(over="ignore"):
        condition = condition_of(form.T, form.S)
    return Coordinates(form.A, form.B, form.C, direct, form.T, form.S, condition, {"blocks": blocks})
