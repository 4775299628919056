"""Controller and observer Hessenberg coordinates."""

from __future__ import annotations

from realize.forms.coordinates import Array, Coordinates, Setting, take_units_out
from realize.kernels.staircase import controller_hessenberg


def controller_hessenberg_states(A: Array, B: Array, C: Array, D: Array, setting: Setting) -> Coordinates:
    """Rotate the states so that B is upper triangular on top of zeros and A has as many subdiagonals as inputs.

    With one input A is upper Hessenberg and B a multiple of the first unit vector [1]_. No rank is decided.

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
        Details: ``subdiagonals`` of A that can be nonzero.

    References
    ----------
    .. [1] P. Van Dooren, M. Verhaegen, On the use of unitary state-space transformations, in Linear Algebra and Its
           Role in Systems Theory, AMS Contemp. Math. 47 (1985) 447-463 (from memory).
    """
    units = take_units_out(A, B, C, setting)
    H, b, Q = controller_hessenberg(units.A, units.B)
    details = {"subdiagonals": min(B.shape[1], max(A.shape[0] - 1, 0))}
    return units.restored(H, b, units.C @ Q, D, Q, Q.T.copy(), details=details)


def observer_hessenberg_states(A: Array, B: Array, C: Array, D: Array, setting: Setting) -> Coordinates:
    """Rotate the states so that C is a triangle behind zeros and A has as many subdiagonals as there are outputs.

    The dual of the controller Hessenberg form, states in reverse order: with one output A is upper Hessenberg and C a
    multiple of the last unit vector [1]_.

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
        Details: ``subdiagonals`` of A that can be nonzero.

    References
    ----------
    .. [1] Van Dooren & Verhaegen 1985, as in `controller_hessenberg_states`.
    """
    units = take_units_out(A, B, C, setting)
    H, c, Q = controller_hessenberg(units.A.T.copy(), units.C.T.copy())
    Q = Q[:, ::-1].copy()
    details = {"subdiagonals": min(C.shape[0], max(A.shape[0] - 1, 0))}
    return units.restored(H.T[::-1, ::-1].copy(), Q.T @ units.B, c.T[:, ::-1].copy(), D, Q, Q.T.copy(), details=details)
