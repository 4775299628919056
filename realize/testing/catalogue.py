"""Named plants with known answers: small, exact, and each hard in one way. Tests and examples iterate them.

The answers follow from the formulas by which the plants are made; none was computed with this package.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

from realize.models import Model, StateSpace, TimeBase, TransferFunction, ZeroPoleGain


@dataclass(frozen=True)
class Known:
    """A plant with what is known of it.

    Attributes
    ----------
    name, says : str
        What to call it, and what is hard about it.
    make : callable
        Gives the model.
    order, minimal_order : int
    poles : tuple of (complex, multiplicity)
        Of the model as given, hidden ones included; of a transfer matrix as often as the McMillan degree counts them.
    stable : bool
    fails : tuple of str
        Kinds whose doubles cannot carry it: a conversion to them ends with a failed claim.
    """

    name: str
    says: str
    make: Callable[[], Model]
    order: int
    minimal_order: int
    poles: tuple[tuple[complex, int], ...]
    stable: bool
    fails: tuple[str, ...] = ()


def _ladder() -> StateSpace:
    """Two RC sections: dv1/dt = -2 v1 + v2 + u, dv2/dt = v1 - v2; poles (-3 +- sqrt(5))/2."""
    return StateSpace(A=[[-2.0, 1.0], [1.0, -1.0]], B=[[1.0], [0.0]], C=[[0.0, 1.0]])


CATALOGUE: dict[str, Known] = {
    known.name: known
    for known in (
        Known("constant", "no states", lambda: TransferFunction(numerator=[3.0], denominator=[2.0]), 0, 0, (), True),
        Known(
            "integrator",
            "a pole at the origin",
            lambda: TransferFunction(numerator=[1.0], denominator=[1.0, 0.0]),
            1,
            1,
            ((0j, 1),),
            False,
        ),
        Known(
            "repeated pole",
            "1/(s+1)^5",
            lambda: TransferFunction(numerator=[1.0], denominator=[1.0, 5.0, 10.0, 10.0, 5.0, 1.0]),
            5,
            5,
            ((-1 + 0j, 5),),
            True,
        ),
        Known(
            "notch on the axis",
            "zeros exactly at +-3j",
            lambda: TransferFunction(numerator=[1.0, 0.0, 9.0], denominator=[1.0, 6.0, 25.0]),
            2,
            2,
            ((-3 + 4j, 1), (-3 - 4j, 1)),
            True,
        ),
        Known(
            "undamped pair",
            "poles exactly at +-2j",
            lambda: TransferFunction(numerator=[1.0], denominator=[1.0, 0.0, 4.0]),
            2,
            2,
            ((2j, 1), (-2j, 1)),
            False,
        ),
        Known(
            "hidden pole",
            "(s+1)/((s+1)(s+2)): one pole is not seen",
            lambda: TransferFunction(numerator=[1.0, 1.0], denominator=[1.0, 3.0, 2.0]),
            2,
            1,
            ((-1 + 0j, 1), (-2 + 0j, 1)),
            True,
        ),
        Known(
            "far apart",
            "time scales twelve decades apart",
            lambda: ZeroPoleGain(zeros=[], poles=[-1e-3, -1.0, -1e9], gain=1e6),
            3,
            3,
            ((-1e-3 + 0j, 1), (-1 + 0j, 1), (-1e9 + 0j, 1)),
            True,
            # the residues have to sum to zero twice over for the roll-off, and doubles cannot make them
            ("pole-residue",),
        ),
        Known(
            "sampled double integrator",
            "two poles at z = 1, a zero at z = -1 (Astrom & Wittenmark, zero-order hold of 1/s^2, from memory)",
            lambda: TransferFunction(
                numerator=[0.5, 0.5], denominator=[1.0, -2.0, 1.0], time=TimeBase("sampled", period=1.0)
            ),
            2,
            2,
            ((1 + 0j, 2),),
            False,
        ),
        Known(
            "delays",
            "two poles at z = 0",
            lambda: TransferFunction(
                numerator=[1.0, 2.0], denominator=[1.0, 0.0, 0.0], time=TimeBase("sampled", rate="1000")
            ),
            2,
            2,
            ((0j, 2),),
            True,
        ),
        Known(
            "ladder",
            "two RC sections as states",
            _ladder,
            2,
            2,
            ((-(3 - 5**0.5) / 2 + 0j, 1), (-(3 + 5**0.5) / 2 + 0j, 1)),
            True,
        ),
        Known(
            "small units",
            "[[1, 0], [0, 1e-18]]/(s+1): a channel in small units is a channel",
            lambda: TransferFunction(numerator=[[[1.0], [0.0]], [[0.0], [1e-18]]], denominator=[[[1.0, 1.0]] * 2] * 2),
            2,
            2,
            ((-1 + 0j, 2),),
            True,
        ),
    )
}
