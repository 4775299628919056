"""Convert, minimise, reduce and fit linear plant models, with a receipt for every result.

Everything is imported when it is first used, so that ``import realize`` costs nothing.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

from realize._version import __version__
from realize.later import names_at_home

if TYPE_CHECKING:
    from realize.batch import Summary, run
    from realize.conversions.matrix_fraction import bezout_identity
    from realize.errors import ClaimFailed, InputError, RealizeError, Refused, UsageError
    from realize.files import read, write
    from realize.forms.coprime_factors import CoprimeFactors, coprime_factors
    from realize.interop import from_library, to_arrays, to_library
    from realize.models import (
        DeadTime,
        FrequencyResponse,
        ImpulseResponse,
        MatrixFraction,
        Offset,
        PoleResidue,
        Ports,
        SecondOrder,
        Sections,
        Signal,
        StateSpace,
        TimeBase,
        TimeRecord,
        TransferFunction,
        ZeroPoleGain,
    )
    from realize.schema import Claim, Receipt
    from realize.steps import Conversion, compare, convert, explain, fit, history, inspect, minimal, reduce
    from realize.steps.hankel import HankelValues, hankel_singular_values
    from realize.verification.feedback import gap_distance, stability_margin
    from realize.verification.margins import LoopMargins, loop_margins
    from realize.verification.norms import h2_norm, hankel_norm, largest_gain

_HOMES = {
    "realize.batch": ("Summary", "run"),
    "realize.conversions.matrix_fraction": ("bezout_identity",),
    "realize.forms.coprime_factors": ("CoprimeFactors", "coprime_factors"),
    "realize.errors": ("ClaimFailed", "InputError", "RealizeError", "Refused", "UsageError"),
    "realize.files": ("read", "write"),
    "realize.interop": ("from_library", "to_arrays", "to_library"),
    "realize.models": (
        "DeadTime",
        "FrequencyResponse",
        "ImpulseResponse",
        "MatrixFraction",
        "Offset",
        "PoleResidue",
        "Ports",
        "SecondOrder",
        "Sections",
        "Signal",
        "StateSpace",
        "TimeBase",
        "TimeRecord",
        "TransferFunction",
        "ZeroPoleGain",
    ),
    "realize.schema": ("Claim", "Receipt"),
    "realize.steps": ("Conversion", "compare", "convert", "explain", "fit", "history", "inspect", "minimal", "reduce"),
    "realize.steps.hankel": ("HankelValues", "hankel_singular_values"),
    "realize.verification.feedback": ("gap_distance", "stability_margin"),
    "realize.verification.margins": ("LoopMargins", "loop_margins"),
    "realize.verification.norms": ("h2_norm", "hankel_norm", "largest_gain"),
}

__all__ = [
    "Claim",
    "ClaimFailed",
    "Conversion",
    "CoprimeFactors",
    "DeadTime",
    "FrequencyResponse",
    "HankelValues",
    "ImpulseResponse",
    "InputError",
    "LoopMargins",
    "MatrixFraction",
    "Offset",
    "PoleResidue",
    "Ports",
    "RealizeError",
    "Receipt",
    "Refused",
    "SecondOrder",
    "Sections",
    "Signal",
    "StateSpace",
    "Summary",
    "TimeBase",
    "TimeRecord",
    "TransferFunction",
    "UsageError",
    "ZeroPoleGain",
    "__version__",
    "bezout_identity",
    "compare",
    "convert",
    "coprime_factors",
    "explain",
    "fit",
    "from_library",
    "gap_distance",
    "h2_norm",
    "hankel_norm",
    "hankel_singular_values",
    "inspect",
    "largest_gain",
    "loop_margins",
    "minimal",
    "read",
    "reduce",
    "run",
    "stability_margin",
    "to_arrays",
    "to_library",
    "write",
]


__getattr__ = names_at_home(__name__, _HOMES)


def __dir__() -> list[str]:
    return __all__
