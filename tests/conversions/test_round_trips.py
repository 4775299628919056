"""Through every ordered pair of parametric kinds and back: the same model, to the precision that its numbers allow.

Every number that a conversion writes is rounded once, so that the response moves by at most about the fragility of what
is written: the response change for one rounding of every number, to first order, over the same band. There and back
these add up: fragility of the kind in between and of the kind at the end, and of the numbers they were made from. The
factor of 50 covers what the first order at some frequencies does not (entries made from two rounded numbers, peaks
between frequencies, second order), the 1e-13 a few roundings at fragility one. The errors are those of exact arithmetic
at frequencies that no conversion knows.
"""

from __future__ import annotations

from itertools import permutations
from typing import Any

import numpy as np
import pytest
import scipy.signal

from realize.errors import Refused
from realize.models import Model, StateSpace, TimeBase, TransferFunction, ZeroPoleGain
from realize.schema import UNIVERSAL_KINDS
from realize.steps import convert
from realize.steps.receipts import probe_frequencies
from realize.verification import Pair, View, fragility
from realize.verification.pair import frobenius

CLOCK = TimeBase("sampled", rate="1000")


def closed(roots: Any) -> list[complex]:
    roots = np.asarray(roots, dtype=complex)
    real = [complex(r.real) for r in roots if abs(r.imag) <= 1e-12 * abs(r)]
    return real + [z for r in roots if r.imag > 1e-12 * abs(r) for z in (complex(r), complex(r).conjugate())]


def designed(design: Any, **more: Any) -> ZeroPoleGain:
    z, p, k = design
    return ZeroPoleGain(zeros=closed(z), poles=closed(p), gain=float(k), **more)


def light(count: int, damping: float) -> ZeroPoleGain:
    w = 1.7 ** np.arange(count)
    upper = w * (-damping + 1j * np.sqrt(1 - damping**2))
    between = np.sqrt(w[1:] * w[:-1]) * (-damping + 1j * np.sqrt(1 - damping**2))
    return ZeroPoleGain(zeros=closed([*between, *between.conj()]), poles=closed([*upper, *upper.conj()]), gain=0.3)


SINGLE: dict[str, Model] = {
    "fourth order": TransferFunction(numerator=[1.0, 2.0, 5.0], denominator=[1.0, 3.0, 7.0, 2.0, 0.3]),
    "Butterworth 8 at 1 kHz": designed(scipy.signal.butter(8, 2e3 * np.pi, analog=True, output="zpk")),
    "elliptic band-pass 10": designed(
        scipy.signal.ellip(5, 0.5, 50, [1.0, 3.0], "bandpass", analog=True, output="zpk")
    ),
    "light modes": light(6, 1e-3),
    "time scales 1e-6..1e6": ZeroPoleGain(zeros=[-3e-3], poles=[-1e-6, -0.3, -70.0, -1e6], gain=7.0),
    "in nanoseconds": designed(scipy.signal.butter(4, 2e9 * np.pi, analog=True, output="zpk")),
    "integrator": TransferFunction(numerator=[1.0, 0.1], denominator=[1.0, 0.7, 0.0]),
    "triple pole": ZeroPoleGain(zeros=[-0.3], poles=[-1.1, -1.1, -1.1], gain=0.1),
    "unstable": ZeroPoleGain(zeros=[2.0], poles=[0.3, -1.3 + 2.2j, -1.3 - 2.2j], gain=-0.7),
    "feed-through": TransferFunction(numerator=[0.3, 1.0, 2.0], denominator=[1.0, 0.2, 0.7]),
    "improper": TransferFunction(numerator=[0.3, 1.0, 2.0, 0.1], denominator=[1.0, 0.7]),
    "sampled Butterworth 6": designed(scipy.signal.butter(6, 0.1, output="zpk"), time=CLOCK),
    "sampled Chebyshev 4, slow": designed(scipy.signal.cheby1(4, 1, 0.004, output="zpk"), time=CLOCK),
    "delays": TransferFunction(numerator=[0.3, 0.7], denominator=[1.0, -0.3, 0.0, 0.0], time=CLOCK),
}

SEVERAL: dict[str, Model] = {
    "two by two": TransferFunction(
        numerator=[[[1.0], [2.0, 1.0]], [[0.7], [3.0]]],
        denominator=[[[1.0, 1.1], [1.0, 2.0, 5.0]], [[1.0, 0.3], [1.0, 1.1]]],
    ),
    "two by two states": StateSpace(
        A=[[0.0, 1.0, 0.0], [-2.0, -0.3, 1.0], [0.1, 0.0, -4.0]],
        B=[[0.0, 1.0], [1.0, 0.0], [1.0, 1.0]],
        C=[[1.0, 0.0, 0.5], [0.0, 1.0, 0.0]],
        D=[[0.0, 0.0], [0.3, 0.0]],
    ),
    "sampled, two by two": TransferFunction(
        numerator=[[[1.0], [0.25, 1.0]], [[0.1], [0.7]]],
        denominator=[[[1.0, -0.5], [1.0, -1.0, 0.5]], [[1.0, 0.3], [1.0, -0.5]]],
        time=CLOCK,
    ),
}


def error_of(source: Model, result: Model, w: np.ndarray) -> float:
    """Return the largest relative error over frequencies, exact."""
    difference, size = Pair(View(source), View(result)).sizes(w)
    return float(np.max(frobenius(difference) / frobenius(size)))


def round_trip(source: Model, first: str, second: str) -> None:
    start = convert(source, first).model
    there = convert(start, second).model
    back = convert(there, first).model
    assert back.kind == first and back.shape == source.shape
    w = probe_frequencies(source, 25)[1::2] * 1.0000007
    fragile = [fragility(model, w) or 0.0 for model in (start, there, back)]
    if not max(fragile) < 1e-2:
        pytest.skip(f"doubles cannot hold it: fragility {max(fragile):.1e}")
    limit = 50 * sum(fragile) + 1e-13
    assert error_of(start, there, w) <= limit
    assert error_of(start, back, w) <= limit
    if source.shape == (1, 1) and first not in ("pole-residue",) and second != "pole-residue":
        # a sum of residues has no exact relative degree; everything else keeps its order
        assert back.order == start.order


@pytest.mark.parametrize(("first", "second"), list(permutations(UNIVERSAL_KINDS, 2)))
@pytest.mark.parametrize("name", SINGLE)
def test_single_channels(name: str, first: str, second: str) -> None:
    try:
        round_trip(SINGLE[name], first, second)
    except Refused as reason:
        assert str(reason)
        pytest.skip(str(reason))


@pytest.mark.parametrize(
    ("first", "second"), [pair for pair in permutations(UNIVERSAL_KINDS, 2) if "sections" not in pair]
)
@pytest.mark.parametrize("name", SEVERAL)
def test_several_channels(name: str, first: str, second: str) -> None:
    round_trip(SEVERAL[name], first, second)


def test_the_limit_can_fail() -> None:
    """One coefficient off by 1e-10 is seen."""
    source = SINGLE["fourth order"]
    other = TransferFunction(numerator=[1.0, 2.0, 5.0 * (1 + 1e-10)], denominator=[1.0, 3.0, 7.0, 2.0, 0.3])
    w = probe_frequencies(source, 25)
    assert error_of(source, other, w) > 50 * 2 * (fragility(source, w) or 0.0) + 1e-13


@pytest.mark.parametrize("name", ["Butterworth 8 at 1 kHz", "light modes", "sampled Butterworth 6"])
def test_states_in_every_form_and_back(name: str) -> None:
    source = convert(SINGLE[name], "state-space").model
    for form in ("modal", "controllable-companion", "observable-companion"):
        made = convert(convert(source, "transfer-function").model, "state-space", form=form).model
        w = probe_frequencies(source, 25) * 0.97  # not on the zeros at z = -1
        fragile = sum(fragility(model, w) or 0.0 for model in (source, made))
        assert error_of(source, made, w) <= 50 * fragile + 1e-13, form
