"""What a change of coordinates of a state model gives back, and the units that every change takes out first."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from realize.errors import Refused

Array = NDArray[np.float64]


class NoTransform(Refused):
    """No change of coordinates leads from the states of this model to the form; its response may still have it."""


@dataclass(frozen=True)
class Setting:
    """What a form needs to know beside the matrices.

    Attributes
    ----------
    period : float or None
        Sampling period, s; None for continuous time.
    ordering : str
        Order of the blocks of a form that leaves it open: "speed" (slowest first), "damping" (least damped first) or
        "stability" (unstable first, and by speed inside).
    force : bool
        Give the form even where it ruins the model; without it a form may raise `Refused`.
    """

    period: float | None = None
    ordering: str = "speed"
    force: bool = False

    @property
    def sampled(self) -> bool:
        """True for sampled time."""
        return self.period is not None


@dataclass(frozen=True)
class Coordinates:
    """A state model in new coordinates, the transform there and the way back.

    With the old states x and the new states z: x = T z and z = S x, so A_new = S A T, B_new = S B, C_new = C T.

    Attributes
    ----------
    A, B, C, D : ndarray, shapes (n, n), (n, m), (p, n), (p, m)
    transform : ndarray, shape (n, n)
        T; its columns have the units of the old states.
    back : ndarray, shape (n, n)
        S, the inverse of T, computed by itself and never by inverting the rounded T.
    condition : float
        Spectral condition number of T after the rows were scaled to the sizes of the states (powers of two), so that
        it does not depend on the units.
    details : dict
        What the form says about the plant, ready for JSON: block sizes and what they mean, structure indices,
        separations.
    cautions : tuple of str
    """

    A: Array
    B: Array
    C: Array
    D: Array
    transform: Array
    back: Array
    condition: float
    details: dict[str, Any] = field(default_factory=dict)
    cautions: tuple[str, ...] = ()


@dataclass(frozen=True)
class Units:
    """A model with every unit taken out in powers of two, and how to put them back.

    A = 2^time X A' X^-1, B = 2^gain X B', C = 2^gain C' X^-1 with X = diag(2^states); all of it exact.

    Attributes
    ----------
    A, B, C : ndarray
        A', B', C': largest entries near 1, states balanced between themselves and against inputs and outputs.
    states : ndarray of int, shape (n,)
    time, gain : int
    """

    A: Array
    B: Array
    C: Array
    states: NDArray[np.int64]
    time: int
    gain: int

    def restored(
        self,
        A: Array,
        B: Array,
        C: Array,
        D: Array,
        transform: Array,
        back: Array,
        condition: float = 1.0,
        details: dict[str, Any] | None = None,
        cautions: tuple[str, ...] = (),
    ) -> Coordinates:
        """Return the coordinates with the units put back, which is exact.

        Parameters
        ----------
        A, B, C : ndarray
            The new model in the units of A', B', C'.
        D : ndarray
            As it was.
        transform, back : ndarray
            T' and S' = T'^-1 with x' = T' z; their rows and columns count in the units of A'.
        condition : float
            Spectral condition number of T'; 1 for an orthogonal one.
        details, cautions
            As in `Coordinates`.
        """
        with np.errstate(under="ignore", over="ignore"):
            return Coordinates(
                np.ldexp(A, self.time) + 0.0,
                np.ldexp(B, self.gain) + 0.0,
                np.ldexp(C, self.gain) + 0.0,
                D,
                np.ldexp(transform, self.states[:, None]) + 0.0,
                np.ldexp(back, -self.states[None, :]) + 0.0,
                condition,
                details or {},
                cautions,
            )


def take_units_out(A: Array, B: Array, C: Array, setting: Setting) -> Units:
    """Return the model in units of its own: states, time and gain scaled by powers of two, nothing rounded.

    Parameters
    ----------
    A : (n, n) array
    B : (n, m) array
    C : (p, n) array
    setting : Setting

    Raises
    ------
    Refused
        If the range of doubles does not hold the scaled model.
    """
    from realize.kernels.unit_scaling import scale_model

    own = scale_model(A, B, C, sampled=setting.sampled)
    # what inputs and outputs have is shared out evenly, so that B and C are of like size in the end
    shift, gain = (own.input - own.output) // 2, (own.input + own.output) // 2
    if not all(np.all(np.isfinite(matrix)) for matrix in (own.A, own.B, own.C)):
        raise Refused("the entries of A, B and C span more than the range of doubles; scale time and states first")
    return Units(own.A, own.B, own.C, own.states + shift, own.time, gain)


def modes(eigenvalues: NDArray[np.complex128], period: float | None) -> list[dict[str, float | None]]:
    """Return re, im, frequency (rad/s) and damping ratio of each eigenvalue, one entry for a conjugate pair.

    A sampled eigenvalue z counts as s = ln(z)/period: frequency |s|, damping -Re s/|s|; z = 0 has neither (None).
    """
    rows: list[dict[str, float | None]] = []
    for value in np.asarray(eigenvalues, dtype=complex).tolist():
        if value.imag < 0:
            continue
        frequency, damping = frequency_and_damping(np.array([value]), period)
        rows.append(
            {
                "re": value.real,
                "im": value.imag,
                "frequency": float(frequency[0]) if np.isfinite(frequency[0]) else None,
                "damping": float(damping[0]) if np.isfinite(damping[0]) else None,
            }
        )
    return rows


def frequency_and_damping(eigenvalues: NDArray[np.complex128], period: float | None) -> tuple[Array, Array]:
    """Return |s| in rad/s and the damping ratio -Re s/|s| of poles; infinite and 1 for z = 0, damping 0 at s = 0."""
    s = np.asarray(eigenvalues, dtype=complex)
    if period is not None:
        with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
            size, angle = np.log(np.abs(s)) / period, np.angle(s) / period
        gone = s == 0
        size, angle = np.where(gone, -1.0, size), np.where(gone, 0.0, angle)
    else:
        gone = np.zeros(s.shape, dtype=bool)
        size, angle = s.real, s.imag
    frequency = np.hypot(size, angle)
    damping = np.where(frequency > 0, -size / np.where(frequency > 0, frequency, 1.0), 0.0)
    return np.where(gone, np.inf, frequency), np.where(gone, 1.0, damping)
