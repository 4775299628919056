"""What a fit must keep: one record, in the units of the data, for every method.

``Structure`` is what the user asks. ``inside`` brings it to the scaled s plane that all methods work in.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from realize.errors import UsageError
from realize.kernels.structured_basis import Known

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]


@dataclass(frozen=True, eq=False)
class Structure:
    """Constraints on the model, in the units of the data.

    Parameters
    ----------
    relative_degree : int
        Every channel falls off at least like s^-N; sampled: its first N Markov parameters are zero.
    integrators : int
        Poles exactly at 0; sampled: at z = 1.
    fixed_poles, fixed_zeros : tuple of complex
        rad/s; sampled: values of z. Closed under conjugation; a repeated one as often as it is. Zeros are zeros of
        every channel.
    steady_state_gain : [outputs][inputs] float, optional
        Response at frequency 0, dead time aside.
    stable : bool
        False: free poles may be on the right; sampled: outside of the unit circle.
    symmetric : bool
        Reciprocal: the response is a symmetric matrix.
    dead_time : str
        Dead times to estimate, a name of ``realize.schema.ESTIMATED_DEAD_TIMES``; empty: none.
    """

    relative_degree: int = 0
    integrators: int = 0
    fixed_poles: tuple[complex, ...] = ()
    fixed_zeros: tuple[complex, ...] = ()
    steady_state_gain: Array | None = None
    stable: bool = True
    symmetric: bool = False
    dead_time: str = ""

    @property
    def plain(self) -> bool:
        """True where nothing is asked but a relative degree of 0 or 1, which needs no structured basis."""
        listed = self.integrators or self.fixed_poles or self.fixed_zeros
        return self.relative_degree < 2 and not listed and self.steady_state_gain is None and self.stable


@dataclass(frozen=True, eq=False)
class Inside:
    """A structure in the scaled s plane of a problem.

    Parameters
    ----------
    known : Known
    gain : [channels] float or None
    stable : bool
    """

    known: Known
    gain: Array | None = None
    stable: bool = True
    #: fixed poles as the user gave them (integrators included), in the order of ``known.poles``
    given_poles: ComplexArray = field(default_factory=lambda: np.zeros(0, complex))
    given_zeros: ComplexArray = field(default_factory=lambda: np.zeros(0, complex))


def check(structure: Structure, period: float | None) -> None:
    """Refuse constraints that contradict each other.

    Raises
    ------
    UsageError
    """
    origin = 0j if period is None else 1 + 0j
    if structure.relative_degree < 0 or structure.integrators < 0:
        raise UsageError("a relative degree and a number of integrators are whole numbers of zero or more")
    for name, roots in (("fixed pole", structure.fixed_poles), ("fixed zero", structure.fixed_zeros)):
        for root in roots:
            if not np.isfinite(root):
                raise UsageError(f"{name} {root} is not finite")
        ordered(roots, name)
    poles = [*structure.fixed_poles, *[origin] * structure.integrators]
    both = set(poles) & set(map(complex, structure.fixed_zeros))
    if both:
        raise UsageError(f"{min(both, key=abs):g} is fixed as a pole and as a zero; the two would cancel")
    if structure.steady_state_gain is not None:
        if origin in poles:
            raise UsageError("a steady-state gain with an integrator: the gain at frequency 0 is infinite; drop one")
        if origin in map(complex, structure.fixed_zeros) and np.any(structure.steady_state_gain):
            raise UsageError("a steady-state gain other than 0 with a fixed zero at frequency 0; drop one")
        if structure.symmetric and not np.array_equal(structure.steady_state_gain, structure.steady_state_gain.T):
            raise UsageError("a symmetric response with a steady-state gain that is not symmetric")
    if structure.symmetric and structure.dead_time not in ("", "auto"):
        raise UsageError("a symmetric response has one dead time for all channels: estimate it by auto")
    if structure.stable:
        for pole in structure.fixed_poles:
            if pole.real > 0 if period is None else abs(pole) > 1:
                raise UsageError(f"the fixed pole {pole:g} is unstable; allow unstable poles to keep it")


def ordered(roots: tuple[complex, ...], name: str) -> ComplexArray:
    """Return roots with conjugate pairs adjacent, the positive imaginary part first.

    Raises
    ------
    UsageError
        Where a member of a pair is missing.
    """
    left = [complex(root) for root in roots]
    result: list[complex] = []
    while left:
        root = left.pop(0)
        if root.imag == 0:
            result.append(complex(root.real, 0.0))
            continue
        if root.conjugate() not in left:
            raise UsageError(f"{name} {root:g} without its conjugate: list both members of a pair")
        left.remove(root.conjugate())
        result += [complex(root.real, abs(root.imag)), complex(root.real, -abs(root.imag))]
    return np.array(result, dtype=complex)


def inside(structure: Structure, period: float | None, shift: int, lift: NDArray[np.int64]) -> Inside:
    """Return the structure in the units of a problem.

    Parameters
    ----------
    structure : Structure
        Checked.
    period : float or None
    shift, lift : int, [channels] int
        Powers of two taken off the frequencies and the channels.
    """
    origin = 0j if period is None else 1 + 0j
    given_poles = ordered((*structure.fixed_poles, *[origin] * structure.integrators), "fixed pole")
    given_zeros = ordered(structure.fixed_zeros, "fixed zero")
    if period is None:
        poles, zeros, excess = _down(given_poles, shift), _down(given_zeros, shift), structure.relative_degree
    else:
        # z = infinity is s = c; z = -1 is s = infinity
        c = float(np.ldexp(1.0, -shift))
        for name, roots in (("pole", given_poles), ("zero", given_zeros)):
            if np.any(roots == -1):
                raise UsageError(f"a fixed {name} at z = -1 is not possible: lines there are left out of the fit")
        poles = c * (given_poles - 1) / (given_poles + 1)
        zeros = c * (given_zeros - 1) / (given_zeros + 1)
        zeros = np.concatenate([np.full(structure.relative_degree, complex(c)), zeros])
        excess = 0
    gain = structure.steady_state_gain
    scaled = None if gain is None else np.ldexp(np.asarray(gain, dtype=float).reshape(-1), -lift)
    return Inside(Known(poles, zeros, excess), scaled, structure.stable, given_poles, given_zeros)


def _down(values: ComplexArray, shift: int) -> ComplexArray:
    return np.ldexp(values.real, -shift) + 1j * np.ldexp(values.imag, -shift)
