"""Poles and zeros of a model, as accurate as a drawing needs them."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from realize.models import (
    MatrixFraction,
    Model,
    PoleResidue,
    SecondOrder,
    Sections,
    StateSpace,
    TransferFunction,
    ZeroPoleGain,
)

ComplexArray = NDArray[np.complex128]
#: Beyond this many states a drawing does without transmission zeros; the grid is refined by the response itself.
ZEROS_UP_TO = 60


def polynomial_roots(mantissa: NDArray[np.float64], exponent: NDArray[np.int64]) -> ComplexArray:
    """Return the roots of a polynomial with coefficients mantissa * 2^exponent, highest power first.

    The variable is scaled by a power of two that makes first and last coefficient alike in size, then the roots are the
    eigenvalues of the companion matrix.
    """
    present = np.flatnonzero(mantissa)
    if present.size == 0:
        return np.zeros(0, dtype=complex)
    first, last = int(present[0]), int(present[-1])
    at_zero = mantissa.size - 1 - last
    mantissa, exponent = mantissa[first : last + 1], exponent[first : last + 1]
    degree = mantissa.size - 1
    roots = np.zeros(0, dtype=complex)
    if degree:
        k = round((int(exponent[-1]) - int(exponent[0])) / degree)
        powers = np.arange(degree, -1, -1)
        scaled = exponent + k * powers
        coefficients = np.ldexp(mantissa, np.maximum(scaled - scaled.max(), -2000).astype(int))
        if coefficients[0] == 0:  # a root far beyond the others: the spread leaves the doubles
            coefficients = coefficients[np.flatnonzero(coefficients)[0] :]
        sigma = np.roots(coefficients).astype(complex)
        with np.errstate(over="ignore", under="ignore"):
            roots = np.ldexp(sigma.real, k) + 1j * np.ldexp(sigma.imag, k)
    return np.concatenate([roots, np.zeros(at_zero, dtype=complex)])


def _distinct_lists(lists: list[ComplexArray]) -> ComplexArray:
    """Return the lists joined, leaving out a list that equals an earlier one: channels that share a denominator."""
    kept: list[ComplexArray] = []
    for values in lists:
        if not any(np.array_equal(values, other) for other in kept):
            kept.append(values)
    return np.concatenate(kept) if kept else np.zeros(0, dtype=complex)


def _section_roots(model: Sections, row: int) -> ComplexArray:
    lists = []
    for section in model.sections:
        mantissa, exponent = np.frexp(section[row])
        lists.append(polynomial_roots(mantissa, exponent.astype(np.int64)))
    return np.concatenate(lists) if lists else np.zeros(0, dtype=complex)


def _channel_roots(model: TransferFunction, name: str) -> ComplexArray:
    p, m = model.shape
    pairs = [model.exact_or_double(name, i, j) for i in range(p) for j in range(m)]
    return _distinct_lists([polynomial_roots(*pair) for pair in pairs])


def _pencil_roots(A: NDArray[np.float64], E: NDArray[np.float64] | None) -> ComplexArray:
    import scipy.linalg

    if A.shape[0] == 0 or not np.all(np.isfinite(A)) or (E is not None and not np.all(np.isfinite(E))):
        return np.zeros(0, dtype=complex)
    if E is None:
        return np.linalg.eigvals(A).astype(complex)
    alpha, beta = scipy.linalg.eig(A, E, right=False, homogeneous_eigvals=True)
    # a quotient with a denominator at the level of its rounding is an infinite eigenvalue
    finite = np.abs(beta) > 100 * np.finfo(float).eps * A.shape[0] * np.abs(beta).max(initial=0.0)
    return (alpha[finite] / beta[finite]).astype(complex)


def poles_of(model: Model) -> ComplexArray:
    """Return the finite poles of a model (rad/s; of z for a sampled model), empty for data.

    Channels with different denominators list their poles one after the other; channels that share one list it once.
    """
    match model:
        case ZeroPoleGain():
            roots = _distinct_lists([values for row in model.poles for values in row])
        case PoleResidue():
            distinct = dict.fromkeys(model.poles.tolist())
            roots = np.array(
                [pole for pole in distinct for _ in range(int(model.powers[model.poles == pole].max()))], dtype=complex
            )
        case TransferFunction():
            roots = _channel_roots(model, "denominator")
        case Sections():
            roots = _section_roots(model, 1)
        case StateSpace():
            roots = _pencil_roots(model.A, model.E)
        case MatrixFraction():
            from realize.verification.views import double_poles

            roots = double_poles(model)
        case SecondOrder():
            n = model.order
            roots = _pencil_roots(model.pencil.A[:n, :n], model.pencil.E[:n, :n])
        case _:
            roots = np.zeros(0, dtype=complex)
    return roots[np.isfinite(roots)]


def zeros_of(model: Model) -> ComplexArray:
    """Return zeros of the channels where they are at hand, to place frequencies; empty where they are not."""
    match model:
        case ZeroPoleGain():
            roots = _distinct_lists([values for row in model.zeros for values in row])
        case TransferFunction():
            roots = _channel_roots(model, "numerator")
        case Sections():
            roots = _section_roots(model, 0)
        case StateSpace() if 0 < model.A.shape[0] <= ZEROS_UP_TO and model.D.size <= 9:
            n = model.A.shape[0]
            lists = []
            for i in range(model.D.shape[0]):
                for j in range(model.D.shape[1]):
                    system = np.block(
                        [[model.A, model.B[:, j : j + 1]], [model.C[i : i + 1], model.D[i : i + 1, j : j + 1]]]
                    )
                    below = np.zeros((n + 1, n + 1))
                    below[:n, :n] = np.eye(n) if model.E is None else model.E
                    lists.append(_pencil_roots(system, below))
            roots = np.concatenate(lists)
        case _:
            roots = np.zeros(0, dtype=complex)
    return roots[np.isfinite(roots)]


def continuous_equivalent(model: Model, roots: ComplexArray) -> ComplexArray:
    """Return roots of s: as they are in continuous time, ln(z) / T for a sampled model; roots at z = 0 are left out."""
    if not model.time.sampled:
        return roots
    return np.log(roots[roots != 0]) / model.time.seconds


@dataclass(frozen=True)
class Roots:
    """Poles and zeros of one model, computed once for all panels."""

    poles: ComplexArray
    zeros: ComplexArray


def roots_of(model: Model) -> Roots:
    """Return poles and zeros of a model; see `poles_of` and `zeros_of`."""
    return Roots(poles_of(model), zeros_of(model))
