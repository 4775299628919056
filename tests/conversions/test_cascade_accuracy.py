"""A sample of benchmarks/accuracy/coefficients_to_states.py: exact response error and plain evaluation."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.signal

import realize
from realize.verification import Pair, view_of
from realize.verification.conversion import end_behaviour, response_error

EPS = np.finfo(float).eps


def _coefficients(zeros: np.ndarray, poles: np.ndarray, gain: float, period: float | None) -> realize.TransferFunction:
    time = realize.TimeBase() if period is None else realize.TimeBase("sampled", period=period)
    return realize.TransferFunction(
        numerator=gain * np.atleast_1d(np.real(np.poly(zeros))), denominator=np.real(np.poly(poles)), time=time
    )


PLANTS = {
    "sampled Butterworth 4, low cut-off": _coefficients(*scipy.signal.butter(4, 0.002, output="zpk"), 1e-3),
    "sampled Chebyshev 4, low cut-off": _coefficients(*scipy.signal.cheby1(4, 1, 0.002, output="zpk"), 1e-3),
    "sampled Chebyshev 4": _coefficients(*scipy.signal.cheby1(4, 1, 0.6, output="zpk"), 0.1),
    "sampled elliptic 4, low cut-off": _coefficients(*scipy.signal.ellip(4, 0.5, 60, 0.002, output="zpk"), 1e-3),
    "sampled Butterworth 8": _coefficients(*scipy.signal.butter(8, 0.2, output="zpk"), 1.0),
    "elliptic band-pass": _coefficients(
        *scipy.signal.ellip(2, 0.5, 60, [1.0, 1.5], "bandpass", analog=True, output="zpk"), None
    ),
    "high-pass": _coefficients(*scipy.signal.butter(9, 1.0, "highpass", analog=True, output="zpk"), None),
    "time scales": _coefficients(np.zeros(0), -np.array([2e-3, 3e-1, 4e2, 5e4, 6e6, 7e8]), 1.0, None),
}


@pytest.mark.parametrize("name", PLANTS)
def test_the_error_is_what_the_conditions_allow(name: str) -> None:
    """At most max(1e-13, 8 eps / max(1e-4, smallest damping)), sampled also 8 eps / smallest |1 - z|."""
    model = PLANTS[name]
    source = view_of(model)
    zeros, poles = source.channel_roots[0][0]
    both = zeros.merged(poles)
    limit = max(1e-13, 8 * EPS / max(1e-4, float(both.damping.min())))
    if model.time.sampled:
        limit = max(limit, 8 * EPS / float(np.abs(1 - np.exp(both.s * model.time.seconds)).min()))
    made = realize.convert(model, "state-space").model
    pair = Pair(source, view_of(made))
    claim = response_error(pair)
    assert claim.basis == "proved" and claim.value + claim.uncertainty <= limit
    assert made.order == model.order
    ends = end_behaviour(pair, 1e-9)
    assert ends is not None and ends.holds

    size = both.frequency[both.frequency > 0]
    top = np.pi / model.time.seconds if model.time.sampled else np.inf
    w = np.geomspace(size.min() / 10, min(size.max() * 10, top), 100)
    exact = source.response(w)[:, 0, 0]
    plain = np.array(
        [
            (made.C @ np.linalg.solve(s * np.eye(made.order) - made.A, made.B) + made.D)[0, 0]
            for s in model.time.points(w)
        ]
    )
    assert np.abs(plain - exact).max() <= 1e-10 * np.abs(exact).max()
