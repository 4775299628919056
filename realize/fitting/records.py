"""What a fit hands back."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]


@dataclass(frozen=True)
class Candidate:
    """One order that was tried.

    Parameters
    ----------
    order : int
    rms : float
        Relative misfit: sqrt(sum |misfit|^2 / sum |H|^2) in the scaled channels (each channel's largest value near 1).
    weighted : float
        RMS of misfit / deviation in the search (up to a common factor where the size of the noise is not known).
    criterion : float
        Bayesian information criterion; the lowest wins, only differences within one fit have a meaning.
    kept : bool
    """

    order: int
    rms: float
    weighted: float
    criterion: float
    kept: bool


@dataclass(frozen=True)
class PoleRow:
    """One real pole or one pair.

    Parameters
    ----------
    frequency : float
        |pole|, rad/s; sampled: |ln z| / period.
    damping : float
        Damping ratio: 1 for a real pole.
    dominance : float
        Largest share of this pole (with its conjugate) in a channel: largest |contribution| on the data's frequencies
        relative to the channel's largest |H|.
    index : int
        Place of the pole, the first of a pair, in ``poles``.
    pair : bool
    """

    frequency: float
    damping: float
    dominance: float
    index: int
    pair: bool


@dataclass(frozen=True)
class Noise:
    """How the deviations were got (``given``, ``coherence``, ``estimated``), and their RMS relative to that of H."""

    basis: str
    level: float


@dataclass(frozen=True)
class Worst:
    """Largest misfit of one channel at one frequency, relative to that channel's largest |H|."""

    value: float
    line: int
    output: int
    input: int
    frequency: float


@dataclass(frozen=True, eq=False)
class Factored:
    """Channels as products, gain prod(s - zeros) / prod(s - poles): a structure that partial fractions cannot hold.

    Parameters
    ----------
    zeros : tuple of [..] complex
        One list a channel, row by row.
    gain : [outputs][inputs] float
    """

    zeros: tuple[ComplexArray, ...]
    gain: Array


@dataclass(frozen=True, eq=False)
class Fit:
    """A rational model of a measured response: sum residues[j] / (s - poles[j])^powers[j] + direct, sampled: in z.

    Parameters
    ----------
    poles : [n] complex
        Stable unless asked otherwise; pairs exactly conjugate and adjacent, the positive imaginary part first.
    residues : [n][outputs][inputs] complex
    direct : [outputs][inputs] float
    order : int
        Number of poles (each may need as many states as its residue matrix has rank).
    method : str
    misfit : [k][outputs][inputs] complex
        Model minus data, as evaluated from poles, residues and direct.
    rms : float
        sqrt(sum |misfit|^2 / sum |H|^2).
    worst : Worst
    weighted : float
        RMS of misfit / deviation, deviation given or estimated: 1 = as large as the noise.
    noise : Noise
    candidates : tuple of Candidate
    pole_table : tuple of PoleRow
        By increasing frequency.
    cautions : tuple of str
    powers : [n] int
        1 but for fixed poles that repeat.
    factors : Factored or None
        With fixed zeros or a relative degree above 1: the model is this, and residues are its rounded partial
        fractions.
    """

    poles: ComplexArray
    residues: ComplexArray
    direct: Array
    order: int
    method: str
    misfit: ComplexArray
    rms: float
    worst: Worst
    weighted: float
    noise: Noise
    candidates: tuple[Candidate, ...]
    pole_table: tuple[PoleRow, ...]
    cautions: tuple[str, ...]
    powers: NDArray[np.int64]
    factors: Factored | None = None
