"""What estimation is asked for, and what it hands back."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]


@dataclass(frozen=True)
class Settings:
    """How a frequency response is estimated; None and "auto": decided from the record.

    Parameters
    ----------
    averaging : str
        "welch", "periodic", "stepped-sine" or "auto".
    estimator : str
        "h1": noise on the outputs; "h2": on the inputs; "hv": on both alike.
    window : str
        A name of ``realize.kernels.spectra.COSINES``; Welch averaging only.
    segment : int, optional
        Samples of a segment (Welch), or of a dwell (stepped sine).
    overlap : float
        Share of a segment that the next one repeats, 0 to 0.95; Welch averaging only.
    excitation_period : int, optional
        Samples of one period of the inputs.
    settling : float
        Seconds at the start of each record that are left out.
    """

    averaging: str = "auto"
    estimator: str = "h1"
    window: str = "hann"
    segment: int | None = None
    overlap: float = 0.5
    excitation_period: int | None = None
    settling: float = 0.0


@dataclass(frozen=True)
class Estimate:
    """A frequency response estimated from records.

    Parameters
    ----------
    frequency : [k] float
        Hz.
    response : [k][outputs][inputs] complex
    deviation : [k][outputs][inputs] float, optional
        One standard deviation of the complex response, the estimated bias by resolution included.
    coherence : [k][outputs][inputs] float, optional
        Ordinary for one input; partial for several.
    method : str
        What was done, in words.
    cautions : list of str
    details : dict
        Numbers behind the method.
    """

    frequency: Array
    response: ComplexArray
    deviation: Array | None
    coherence: Array | None
    method: str
    cautions: list[str] = field(default_factory=list)
    details: dict[str, Any] = field(default_factory=dict)


@dataclass(frozen=True)
class Record:
    """One run, scaled: inputs [samples][m], outputs [samples][p], the mean taken off."""

    inputs: Array
    outputs: Array
