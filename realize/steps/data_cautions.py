"""What measured data give away about themselves: noise alone, no real plant, frequencies in a wrong unit."""

from __future__ import annotations

import numpy as np

from realize.models import FrequencyResponse

#: Fewer lines say nothing about what neighbours have in common.
FEWEST = 16
#: Mean |H[k+1] - H[k]|^2 over twice the variance: 1 for noise, near 0 for a response that the lines resolve.
UNRELATED = 0.6
#: Frequencies at least this far apart, with ends that are round numbers, look as if they were typed in as Hz.
ROUND_FROM, DECADES = 40.0, 10.0
#: At frequency 0, an imaginary part of so many deviations, or of this share of the size without them, is worth a word.
NOISE_REACHES, REAL_TO = 5.0, 0.01


def data_cautions(data: FrequencyResponse) -> list[str]:
    """Return cautions about a frequency response, before any model is fitted to it."""
    return [*_noise(data), *_constant(data), *_not_real(data), *unit_cautions(data)]


def _noise(data: FrequencyResponse) -> list[str]:
    H = data.response
    if H.shape[0] < FEWEST:
        return []
    top = np.max(np.abs(H), axis=0)
    alive = top > 0
    scaled = H / np.where(alive, top, 1.0)
    step = np.mean(np.abs(np.diff(scaled, axis=0)) ** 2, axis=0)
    spread = 2 * np.mean(np.abs(scaled - np.mean(scaled, axis=0)) ** 2, axis=0)
    # a constant has no spread beyond its rounding
    moves = alive & (spread > 1e-24)
    bad = np.argwhere(moves & (step > UNRELATED * spread))
    if not len(bad):
        return []
    where = ", ".join(f"output {i} from input {j}" for i, j in bad[:4]) + (", ..." if len(bad) > 4 else "")
    what = "" if H.shape[1:] == (1, 1) else f" ({where})"
    return [
        f"Neighbouring lines have nothing in common{what}: noise alone, or lines too far apart for the dead time or "
        "the resonances between them."
    ]


def _constant(data: FrequencyResponse) -> list[str]:
    H = data.response
    if H.shape[0] < 2:
        return []
    if np.all(H == H[:1]) and not np.any(H[0].imag):
        return ["The response is one real constant at all lines: a gain, and nothing to fit dynamics to."]
    same = np.all(H == H[:1], axis=0) & (H[0].imag != 0)
    if not np.any(same):
        return []
    i, j = (int(k) for k in np.argwhere(same)[0])
    return [
        f"Output {i} from input {j} is the complex constant {complex(H[0, i, j]):.6g} at all lines, which no real "
        "plant is: look at the phase of the instrument, and at what the columns hold."
    ]


def _not_real(data: FrequencyResponse) -> list[str]:
    """Return words where the response at frequency 0 has an imaginary part that its noise does not explain."""
    at = np.flatnonzero(data.frequency == 0)
    if not at.size:
        return []
    H = data.response[at[0]]
    known = data.deviation is not None and bool(np.all(data.deviation[at[0]] > 0))
    most = NOISE_REACHES * data.deviation[at[0]] if data.deviation is not None and known else REAL_TO * np.abs(H)
    bad = np.argwhere(np.abs(H.imag) > most)
    if not len(bad):
        return []
    i, j = (int(k) for k in bad[0])
    return [
        f"The response at frequency 0 is {complex(H[i, j]):.6g} (output {i}, input {j}), and that of a real plant is "
        "real: the model can meet the real part alone. Look at what the instrument wrote in that line, or leave it out."
    ]


def _is_round(value: float) -> bool:
    return value > 0 and float(f"{value:.1g}") == value


def unit_cautions(data: FrequencyResponse) -> list[str]:
    """Return words where Hz and rad/s may have been taken for each other."""
    found = []
    ends = data.frequency[data.frequency > 0]
    if ends.size < 2:
        return []
    low, high = float(ends[0]), float(ends[-1])
    if (
        data.frequency_unit == "rad/s"
        and high >= DECADES * low
        and high >= ROUND_FROM
        and _is_round(low)
        and _is_round(high)
    ):
        found.append(
            f"The sweep runs from {low:g} to {high:g} rad/s, round numbers: they look like Hz. If so, say so in the "
            'name of the column or in "frequency_unit".'
        )
    if data.frequency_unit == "Hz":
        round_low, round_high = (_nearly_round(value / (2 * np.pi)) for value in (low, high))
        if round_low and round_high and high >= DECADES * low and not (_nearly_round(low) and _nearly_round(high)):
            found.append(
                f"The sweep runs from {low:.6g} to {high:.6g} Hz, 2 pi times round numbers: they look like rad/s. If "
                'so, say so in the name of the column or in "frequency_unit".'
            )
    if data.time.sampled and data.frequency_unit == "rad/s":
        half = 0.5 / data.time.seconds
        if abs(high / half - 1) < 0.02 and data.frequency.size >= FEWEST:
            found.append(
                f"The last line, {high:.6g} rad/s, is half the sampling rate of {2 * half:.6g} Hz as if it were in Hz: "
                "look at the unit of the frequencies."
            )
    return found


def _nearly_round(value: float) -> bool:
    """True for one or two digits, to a millionth."""
    return value > 0 and abs(float(f"{value:.2g}") / value - 1) < 1e-6


def dead_time_caution(data: FrequencyResponse, seconds: float) -> str:
    """Return words where the slope of the phase is 2 pi times, or 1/(2 pi) of, a dead time that is given; '' if not.

    A dead time T turns the phase by T between lines that are 1 rad/s apart. The plant itself adds to that, so only a
    slope over the upper half of the lines that is within 5 % of the factor counts.
    """
    w = data.radians
    if w.size < FEWEST or not seconds > 0:
        return ""
    upper = slice(w.size // 2, None)
    H = data.response[upper].reshape(w[upper].size, -1)
    turn = np.angle(H[1:] * np.conj(H[:-1]))
    if np.max(np.abs(turn)) > 0.9 * np.pi:
        return ""
    slope = -float(np.median(turn / np.diff(w[upper])[:, None]))
    for factor, words in ((2 * np.pi, "2 pi times"), (1 / (2 * np.pi), "1/(2 pi) of")):
        if abs(slope / (factor * seconds) - 1) < 0.05:
            return (
                f"The phase falls as if the dead time were {slope:.4g} s, {words} the {seconds:.4g} s given: Hz and "
                "rad/s may have been taken for each other."
            )
    return ""
