"""What a fit hands back."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from realize.kernels.structured_solution import Chain

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]


def _nothing() -> Array:
    """Return what stands in a record without error bars."""
    return np.zeros(0)


def _no_shape() -> ComplexArray:
    return np.zeros(0, dtype=complex)


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
    held_out : float or None
        RMS of misfit / deviation at each line when it is left out of the fit; None: not looked at.
    correlation : float or None
        Of the weighted misfit between neighbouring lines: far from 0 where modes are missing.
    spread : float or None
        Largest deviation of a pole relative to its distance from the axis.
    cancelling : int or None
        Modes whose residue may be noise.
    """

    order: int
    rms: float
    weighted: float
    criterion: float
    kept: bool
    held_out: float | None = None
    correlation: float | None = None
    spread: float | None = None
    cancelling: int | None = None


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
    frequency_deviation, damping_deviation : float
        One standard deviation; infinite where the data do not determine it, 0 for the damping of a real pole.
    rank : int
        Of the residue: how many states (pairs of states) the mode takes.
    strength : float
        Distance of the residue from zero in its own deviations, sqrt(r^T covariance^-1 r).
    cancelling : bool
        Whether the residue may be noise: pole and zeros cancel as far as the data tell.
    output_shape, input_shape : [outputs], [inputs] complex
        The residue's column at its largest entry, and its row there, each divided by that entry.
    output_shape_deviation, input_shape_deviation : [outputs], [inputs] float
        sqrt of the mean |error|^2.
    """

    frequency: float
    damping: float
    dominance: float
    index: int
    pair: bool
    frequency_deviation: float = np.inf
    damping_deviation: float = np.inf
    rank: int = 0
    strength: float = np.inf
    cancelling: bool = False
    output_shape: ComplexArray = field(default_factory=_no_shape)
    output_shape_deviation: Array = field(default_factory=_nothing)
    input_shape: ComplexArray = field(default_factory=_no_shape)
    input_shape_deviation: Array = field(default_factory=_nothing)


@dataclass(frozen=True)
class Bars:
    """What stands behind the error bars.

    Parameters
    ----------
    level : float or None
        Deviation of the errors in units of those that weighted the fit; None where no degree of freedom is left.
    basis : str
        "information" (inverse Fisher information) or "sandwich" (some variances are enlarged to what the misfit shows).
    freedom : int
        Numbers in the data less numbers fitted.
    correlation : float
        Of the weighted misfit between neighbouring lines.
    white : bool
        Whether the misfit is independent from line to line, as far as a dozen lags tell.
    independent : bool
        Whether it is independent between channels.
    enlarged : bool
        Whether the misfit is larger than the given deviations, and the bars are enlarged with it.
    growth : float
        Largest factor by which a sandwich enlarges a bar.
    """

    level: float | None
    basis: str
    freedom: int
    correlation: float
    white: bool
    independent: bool
    enlarged: bool
    growth: float


@dataclass(frozen=True)
class Outlier:
    """One line of one channel that misfits beyond chance: its misfit in deviations, and its weight (1: as others)."""

    line: int
    output: int
    input: int
    frequency: float
    size: float
    weight: float


@dataclass(frozen=True)
class ChannelRow:
    """Misfit of one channel: RMS relative to its RMS response, in deviations, and its largest relative to its peak."""

    output: int
    input: int
    rms: float
    weighted: float
    worst: float
    frequency: float


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
    chain : Chain or None
        The same with what all channels have in common as one factor; channels row by row.
    """

    zeros: tuple[ComplexArray, ...]
    gain: Array
    chain: Chain | None = None


@dataclass(frozen=True)
class DeadTimeRow:
    """One estimated dead time and its standard deviation (None where it is a whole number of periods), s.

    ``output`` and ``input``: the channels that it acts on, None for all.
    """

    seconds: float
    deviation: float | None
    output: int | None = None
    input: int | None = None


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
    bars : Bars or None
        None: no error bars were made; the deviations below are empty then.
    channels : tuple of ChannelRow
    outliers : tuple of Outlier
        By decreasing size.
    response_deviation : [k][outputs][inputs] float
        Of the fitted response at the data's lines: sqrt of the mean |error|^2.
    residue_deviation : [n][outputs][inputs] float
    direct_deviation : [outputs][inputs] float
    gain, gain_deviation : [outputs][inputs] float
        Steady-state gain of the model (at frequency 0, z = 1).
    deviation : [k][outputs][inputs] float
        What weighted the misfit: given or estimated, infinite for lines left out.
    dead_time : [outputs][inputs] float or None
        Estimated with the fit, s; the poles, residues and factors are those of the rest.
    dead_times : tuple of DeadTimeRow
        The estimates that it is made of.
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
    bars: Bars | None = None
    channels: tuple[ChannelRow, ...] = ()
    outliers: tuple[Outlier, ...] = ()
    response_deviation: Array = field(default_factory=_nothing)
    residue_deviation: Array = field(default_factory=_nothing)
    direct_deviation: Array = field(default_factory=_nothing)
    gain: Array = field(default_factory=_nothing)
    gain_deviation: Array = field(default_factory=_nothing)
    deviation: Array = field(default_factory=_nothing)
    dead_time: Array | None = None
    dead_times: tuple[DeadTimeRow, ...] = ()
