"""Controllability, observability and companion forms of a state model, with exact transforms (Kailath 1980)."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any, Literal

import numpy as np
from numpy.typing import NDArray

from realize.errors import Refused
from realize.forms.coordinates import Coordinates, NoTransform, Setting

if TYPE_CHECKING:
    from realize.kernels.exact.bases import Basis, RationalStates

Array = NDArray[np.float64]
Side = Literal["input", "output"]
#: What a refused form points to.
INSTEAD = "use --form cascade (one channel), balanced or schur"


def condition_of(transform: Array, back: Array) -> float:
    """Return |D T| |T^-1 D^-1| in spectral norms, D the powers of two that bring the rows of T near 1.

    Both factors are given, so that conditions beyond 1e16 are still right in their first digits.
    """
    n = transform.shape[0]
    if n == 0:
        return 1.0
    rows = np.frexp(np.max(np.abs(transform), axis=1))[1]
    left, right = np.ldexp(transform, -rows[:, None]), np.ldexp(back, rows[None, :])
    # norms of matrices with entries near the ends of the range: in units of the largest entry
    exponents = [int(np.frexp(np.max(np.abs(part)))[1]) for part in (left, right)]
    norms = [float(np.linalg.norm(np.ldexp(part, -e), 2)) for part, e in zip((left, right), exponents, strict=True)]
    return float(np.ldexp(norms[0] * norms[1], exponents[0] + exponents[1]))


def rounded_coordinates(basis: Basis, details: dict[str, Any], cautions: tuple[str, ...] = ()) -> Coordinates:
    """Return an exact change of basis with every number rounded once.

    Raises
    ------
    Refused
        If a number lies beyond the range of doubles.
    """
    from realize.kernels.exact.bases import BeyondRange, rounded_matrix

    states = basis.states
    try:
        A, B, C, D, T, S = (
            rounded_matrix(matrix) for matrix in (states.A, states.B, states.C, states.D, basis.T, basis.S)
        )
    except BeyondRange as error:
        raise Refused(f"the form or its transform has {error}; scale time and gain first, or {INSTEAD}") from None
    with np.errstate(over="ignore"):
        condition = condition_of(T, S)
    return Coordinates(A, B, C, D, T, S, condition, details, cautions)


def spanned_companion(states: RationalStates, side: Side = "input") -> tuple[Basis, list[int]]:
    """Return the exact multi-input companion form (of the dual model for outputs) and the structure indices.

    Raises
    ------
    NoTransform
        If the model is not controllable (observable).
    """
    from realize.kernels.exact.bases import SingularBasis, companion_basis, crate

    try:
        chosen = crate(states.A, states.B)
    except SingularBasis as error:
        adjective, verb, stairs = (
            ("controllable", "reached", "reachable-staircase")
            if side == "input"
            else ("observable", "seen", "observable-staircase")
        )
        raise NoTransform(
            f"the model is not {adjective}: {error.rank} of its {error.states} states can be {verb} from the {side}s "
            f"(decided exactly), so that no transform leads to this form; use --form {stairs}, or take its minimal "
            "realization first"
        ) from None
    return companion_basis(states, chosen), chosen.indices


def _one(states: RationalStates, side: Side, form: str) -> None:
    count = states.B.ncols() if side == "input" else states.C.nrows()
    if count != 1:
        other = "multi-input-companion" if side == "input" else "observable-staircase"
        raise Refused(f"the {form} form needs one {side} and there are {count}; use modal or {other}")


def controllability_form(A: Any, B: Any, C: Any, D: Any, setting: Setting) -> Coordinates:
    """Return the controllability form of a model with one input: the basis b, A b, ..., A^(n-1) b.

        A = [0 0 -a_n; 1 0 ...; 0 1 -a_1],   B = e_1,   C = [C b, C A b, ..., C A^(n-1) b]

    with det(sI - A) = s^n + a_1 s^(n-1) + ... + a_n, so that C holds the Markov parameters [1]_. Every number is
    computed exactly and rounded once.

    Parameters
    ----------
    A : (n, n), B : (n, 1), C : (p, n), D : (p, 1)
        Arrays, nested lists of integer ratios, or rational matrices.
    setting : Setting
        Not used: continuous and sampled models have the same form.

    Returns
    -------
    Coordinates
        `details` holds ``controllability_indices``.

    Raises
    ------
    Refused
        If the model has several inputs or is not controllable, or a number is beyond the range of doubles.

    References
    ----------
    .. [1] T. Kailath, Linear Systems, Prentice-Hall 1980, section 2.3 (from memory).
    """
    from realize.kernels.exact.bases import controllability_basis, rational_states

    states = rational_states(A, B, C, D)
    _one(states, "input", "controllability")
    companion, indices = spanned_companion(states)
    return rounded_coordinates(controllability_basis(states, companion), {"controllability_indices": indices})


def observability_form(A: Any, B: Any, C: Any, D: Any, setting: Setting) -> Coordinates:
    """Return the observability form of a model with one output: the new states are y, y', ..., without the inputs.

        A = [0 1 0; 0 0 1; -a_n ... -a_1],   B = [C B; C A B; ...],   C = e_1'

    The dual of the controllability form: S = [C; C A; ...; C A^(n-1)], B holds the Markov parameters.

    Parameters, results and exceptions are those of `controllability_form`; `details` holds ``observability_indices``.
    """
    from realize.kernels.exact.bases import controllability_basis, dual, dual_basis, rational_states

    states = rational_states(A, B, C, D)
    _one(states, "output", "observability")
    turned = dual(states)
    companion, indices = spanned_companion(turned, "output")
    basis = dual_basis(controllability_basis(turned, companion))
    return rounded_coordinates(basis, {"observability_indices": indices})


def controllable_companion_form(A: Any, B: Any, C: Any, D: Any, setting: Setting) -> Coordinates:
    """Return the controllable companion form [-a; I 0], e_1 of a model with one input, with its transform.

    Parameters, results and exceptions are those of `controllability_form`.
    """
    from realize.kernels.exact.bases import rational_states

    states = rational_states(A, B, C, D)
    _one(states, "input", "controllable companion")
    basis, indices = spanned_companion(states)
    return rounded_coordinates(basis, {"controllability_indices": indices})


def observable_companion_form(A: Any, B: Any, C: Any, D: Any, setting: Setting) -> Coordinates:
    """Return the observable companion form [-a', [I; 0]], e_1' of a model with one output, with its transform.

    Parameters, results and exceptions are those of `observability_form`.
    """
    from realize.kernels.exact.bases import dual, dual_basis, rational_states

    states = rational_states(A, B, C, D)
    _one(states, "output", "observable companion")
    basis, indices = spanned_companion(dual(states), "output")
    return rounded_coordinates(dual_basis(basis), {"observability_indices": indices})


def multi_input_companion_form(A: Any, B: Any, C: Any, D: Any, setting: Setting) -> Coordinates:
    """Return the companion form of several inputs, with the controllability indices as sizes of its blocks.

    From the crate diagram of b_1..b_m, A b_1, ... the first independent columns are taken, k_j of them for input j. The
    block of input j has k_j states; only the first row of each block of A has coefficients (ones below its diagonal),
    and only these rows of B are not zero: 1 for the block's own input [1]_, [2]_. A state feedback and a change of the
    inputs take these rows away and leave chains of k_j integrators, the form of Brunovsky [3]_. One input gives the
    controllable companion form. Every number is computed exactly and rounded once.

    Parameters, results and exceptions are those of `controllability_form`, for any number of inputs.

    References
    ----------
    .. [1] D. G. Luenberger, Canonical forms for linear multivariable systems, IEEE Trans. Automat. Control 12 (1967)
           290-293 (from memory).
    .. [2] T. Kailath, Linear Systems, Prentice-Hall 1980, section 6.4 (from memory).
    .. [3] P. Brunovsky, A classification of linear controllable systems, Kybernetika 6 (1970) 173-188 (from memory).
    """
    from realize.kernels.exact.bases import rational_states

    states = rational_states(A, B, C, D)
    basis, indices = spanned_companion(states)
    return rounded_coordinates(basis, {"controllability_indices": indices})
