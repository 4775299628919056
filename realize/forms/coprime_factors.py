"""Coprime factors of a state model over the stable plants, with their Bezout identity."""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from realize.errors import Refused, UsageError
from realize.models import Model, StateSpace
from realize.models.state_space import is_identity

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]


class CoprimeFactors(NamedTuple):
    """G = N M^-1 = left_M^-1 left_N with stable factors, U N + V M = I; F and L: state feedback and observer gain.

    A + B F and A + L C are stable. ``identity_error`` is the largest entry of U N + V M - I found, ``return_error`` the
    largest of N - G M relative to the largest entry of N at the same frequency.
    """

    N: StateSpace
    M: StateSpace
    left_N: StateSpace
    left_M: StateSpace
    U: StateSpace
    V: StateSpace
    F: Array
    L: Array
    identity_error: float
    return_error: float


def coprime_factors(
    model: Model, *, feedback_poles: ComplexArray | None = None, observer_poles: ComplexArray | None = None
) -> CoprimeFactors:
    """Return right and left coprime factors of a state model, normalised unless poles are given.

    Parameters
    ----------
    model : StateSpace
        Without a descriptor matrix.
    feedback_poles, observer_poles : [n] complex, optional
        Stable poles of A + B F and A + L C; both or none.

    Returns
    -------
    CoprimeFactors

    Raises
    ------
    UsageError
        If one list of poles is given without the other, or is not n stable poles.
    Refused
        If the model is no plain state model, or not stabilisable or detectable.

    References
    ----------
    .. [1] M. Vidyasagar, Control System Synthesis: A Factorization Approach, 1985 (from memory).
    .. [2] D. McFarlane, K. Glover, Robust Controller Design Using Normalized Coprime Factor Plant Descriptions, 1990
       (from memory).
    """
    if not isinstance(model, StateSpace) or not is_identity(model.E):
        raise Refused("coprime factors need a state model without E; convert to state-space first")
    A, B, C, D = (np.array(getattr(model, name)) for name in "ABCD")
    n, sampled = A.shape[0], model.time.sampled
    p, m = D.shape
    R: Array = np.eye(m)
    S: Array = np.eye(p)
    if (feedback_poles is None) != (observer_poles is None):
        raise UsageError("feedback_poles and observer_poles go together")
    if feedback_poles is None or observer_poles is None:
        F, R = _normalising(A, B, C, D, sampled)
        transposed, left = _normalising(A.T, C.T, B.T, D.T, sampled)
        L, S = transposed.T, np.array(left.T, dtype=np.float64)
    else:
        F = _placing(A, B, feedback_poles, sampled)
        L = _placing(A.T, C.T, observer_poles, sampled).T

    def made(a: Array, b: Array, c: Array, d: NDArray[Any]) -> StateSpace:
        return StateSpace(A=a.reshape(n, n), B=b, C=c, D=d, time=model.time)

    AF, AL = A + B @ F, A + L @ C
    for closed, what in ((AF, "stabilisable: a mode that no input reaches"), (AL, "detectable: a mode no output sees")):
        if not _stable(closed, sampled):
            raise Refused(f"the model is not {what} is not stable")
    # rows and columns of the doubly coprime factorisation, R and S normalise
    R_inverse = np.linalg.inv(R)
    factors = {
        "N": made(AF, B @ R, C + D @ F, D @ R),
        "M": made(AF, B @ R, F, R),
        "left_N": made(AL, B + L @ D, S @ C, S @ D),
        "left_M": made(AL, L, S @ C, S),
        "U": made(AL, L, R_inverse @ F, np.zeros((m, p))),
        "V": made(AL, -(B + L @ D), R_inverse @ F, R_inverse),
    }
    sizes = np.abs(np.linalg.eigvals(A)) if n else np.ones(1)
    w = np.unique(np.concatenate([sizes[sizes > 0], [1.0]]))
    w = np.array([0.01, 0.3, 1.0, 3.0]) if sampled else np.unique(np.outer(w, [0.1, 1.1, 10.0]))
    z = np.exp(1j * w) if sampled else 1j * w
    values = {name: factor.rational_part(z) for name, factor in factors.items()}
    identity = values["U"] @ values["N"] + values["V"] @ values["M"] - np.eye(m)
    with np.errstate(invalid="ignore", over="ignore"):
        back = values["N"] - model.rational_part(z) @ values["M"]
    size = np.abs(values["N"]).max(axis=(1, 2))
    usable = np.isfinite(back).all(axis=(1, 2)) & (size > 0)
    returned = (np.abs(back).max(axis=(1, 2))[usable] / size[usable]).max(initial=0.0)
    return CoprimeFactors(
        **factors, F=F, L=L, identity_error=float(np.abs(identity).max()), return_error=float(returned)
    )


def _stable(A: Array, sampled: bool) -> bool:
    values = np.linalg.eigvals(A) if A.size else np.zeros(0)
    return bool(np.all(np.abs(values) < 1) if sampled else np.all(values.real < 0))


def _normalising(A: Array, B: Array, C: Array, D: Array, sampled: bool) -> tuple[Array, Array]:
    """Return F and R with normalised factors: M* M + N* N = I."""
    import scipy.linalg

    n, m = B.shape
    weight = np.eye(m) + D.T @ D
    if n == 0:
        return np.zeros((m, 0)), np.asarray(np.linalg.inv(np.linalg.cholesky(weight)).T)
    solve = scipy.linalg.solve_discrete_are if sampled else scipy.linalg.solve_continuous_are
    try:
        X = solve(A, B, C.T @ C, weight, s=C.T @ D)
    except (np.linalg.LinAlgError, ValueError):
        raise Refused(
            "the Riccati equation has no stabilising solution: a mode on the edge of stability is not reached by the "
            "inputs or not seen by the outputs"
        ) from None
    if sampled:
        weight = weight + B.T @ X @ B
        F = -np.linalg.solve(weight, B.T @ X @ A + D.T @ C)
    else:
        F = -np.linalg.solve(weight, B.T @ X + D.T @ C)
    return F, np.asarray(np.linalg.inv(np.linalg.cholesky(weight)).T)


def _placing(A: Array, B: Array, poles: ComplexArray, sampled: bool) -> Array:
    """Return F that gives A + B F the poles."""
    import scipy.signal

    wanted = np.asarray(poles, dtype=complex).reshape(-1)
    inside = np.abs(wanted) < 1 if sampled else wanted.real < 0
    if wanted.size != A.shape[0] or not np.all(inside):
        raise UsageError(f"{wanted.size} poles: expected {A.shape[0]}, all stable")
    try:
        return -np.asarray(scipy.signal.place_poles(A, B, wanted).gain_matrix).real
    except ValueError as error:
        raise Refused(f"the poles cannot be placed: {error}") from None
