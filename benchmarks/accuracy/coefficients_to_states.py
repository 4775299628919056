"""Exact response error of coefficients -> state space, side by side with scipy.signal and control.

Run: python benchmarks/accuracy/coefficients_to_states.py [--sampled] [--all]
The error is measured against exact rational arithmetic on the dynamic band of the source (docs/methods/claims).
"""

from __future__ import annotations

import sys
import time

import numpy as np
import scipy.signal
from families import continuous, sampled

import realize
from realize.verification import Pair, View
from realize.verification.conversion import end_behaviour, response_error

EPS = np.finfo(float).eps


def limit_of(view: View) -> float:
    """Return max(1e-13, 8 eps / max(1e-4, smallest damping of poles and zeros)), sampled: 8 eps / min|1 - z| too."""
    zeros, poles = view.channel_roots[0][0]
    both = zeros.merged(poles)
    damping = float(both.damping.min()) if both.s.size else 1.0
    limit = max(1e-13, 8 * EPS / max(1e-4, damping))
    if view.period is not None:
        z = np.exp(both.s * view.period)
        limit = max(limit, 8 * EPS / float(np.abs(1 - z).min()))
    return limit


def scipy_error(model: realize.TransferFunction) -> float:
    """Return the response error of scipy.signal's conversion, infinite where it fails."""
    try:
        with np.errstate(all="ignore"):
            A, B, C, D = scipy.signal.tf2ss(model.numerator[0][0], model.denominator[0][0])
        theirs = realize.StateSpace(A=A, B=B, C=C, D=D, time=model.time)
        claim = response_error(Pair(View(model), View(theirs)))
    except Exception:
        return np.inf
    return np.inf if claim.value is None else claim.value


def main() -> None:
    """Print one line a plant, and the worst ratio to the limit."""
    family = sampled() if "--sampled" in sys.argv else continuous()
    print(f"{'plant':44} {'order':>5} {'error':>9} {'limit':>9} {'double':>9} {'ends':>5} {'scipy':>9} {'ms':>7}")
    worst, bad, count = 0.0, 0, 0
    for name, model in family:
        start = time.perf_counter()
        made = realize.convert(model, "state-space")
        seconds = time.perf_counter() - start
        source = View(model)
        pair = Pair(source, View(made.model))
        claim = response_error(pair)
        error = np.inf if claim.value is None else claim.value
        end = end_behaviour(pair, 1e-9)
        limit = limit_of(source)
        w = np.geomspace(*_ends(source), 400)
        reference = source.response(w)[:, 0, 0]
        double = (
            np.abs(made.model.rational_part(made.model.time.points(w))[:, 0, 0] - reference).max()
            / np.abs(reference).max()
        )
        wrong_order = made.model.order != model.order
        over = error > limit or double > 1e-10 or wrong_order or not end.holds
        count, bad, worst = count + 1, bad + over, max(worst, error / limit)
        if over or "--all" in sys.argv:
            words = ("  OVER" if over else "") + (" ORDER" if wrong_order else "")
            print(
                f"{name:44} {model.order:5d} {error:9.1e} {limit:9.1e} {double:9.1e} {end.holds!s:>5} "
                f"{scipy_error(model):9.1e} {1e3 * seconds:7.1f}{words}"
            )
    print(f"{count} plants, {bad} over a limit, largest error / limit {worst:.3g}")


def _ends(view: View) -> tuple[float, float]:
    zeros, poles = view.channel_roots[0][0]
    size = zeros.merged(poles).frequency
    size = size[size > 0]
    top = np.pi / view.period if view.period is not None else np.inf
    return float(size.min()) / 10, min(float(size.max()) * 10, top)


if __name__ == "__main__":
    main()
