"""Conversions to data: a frequency response on a grid of frequencies, an impulse response at equal steps of time."""

from __future__ import annotations

import time
from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from realize.errors import Refused, UsageError
from realize.models import FrequencyResponse, ImpulseResponse, Model
from realize.schema import CLAIMS, Claim, SecondOpinion, judge
from realize.steps.conversion import Conversion
from realize.steps.receipts import finish
from realize.verification import view_of
from realize.verification.bands import channel_zeros, whole_band
from realize.verification.evaluation import evaluation_error
from realize.verification.search import Band, seeds
from realize.verification.views import View

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

#: Most points of a grid.
MOST = 100_000
#: Damping ratio below which a pole counts as a resonance, and points in its half-power band from which it is covered.
RESONANT, COVERED = 0.1, 3
#: Samples of an impulse response unless said, at most, and how many slowest time constants they span.
SAMPLES, HORIZON = 1000, 5.0
#: Predicted operations of exact samples.
BUDGET = 2e10


def tabulated(
    source: Model,
    to: str,
    *,
    frequencies: Sequence[float] | None,
    band: tuple[float, float] | None,
    count: int | None,
    period: float | None,
    limits: dict[str, float] | None,
    second_opinion: bool | None,
) -> Conversion:
    """Return the frequency or impulse response of a model as data, with the largest error of a point as claim.

    Parameters
    ----------
    frequencies : sequence of float, optional
        The grid, rad/s.
    band : (low, high), optional
        Part of the frequencies that is wanted, rad/s.
    count : int, optional
        Number of points: evenly spaced on a log scale, or samples of an impulse response.
    period : float, optional
        Step of an impulse response, s; a sampled model has its own.
    """
    started = time.perf_counter()
    view = view_of(source)
    if count is not None and not 1 <= count <= MOST:
        raise UsageError(f"--count {count}: expected 1 to {MOST}")
    opinion = None
    if second_opinion:
        opinion = lambda result: SecondOpinion(status="not-applicable", note="tables have no counterpart")  # noqa: E731
    if to == "frequency-response":
        if period is not None:
            raise UsageError("--period goes with --to impulse-response")
        result, claims, cautions, details = _frequency_response(view, frequencies, band, count, limits or {})
    else:
        if frequencies is not None or band is not None:
            raise UsageError("--frequencies and --band go with --to frequency-response")
        result, claims, cautions, details = _impulse_response(view, count, period, limits or {})
    exact = view.fractions is not None
    return finish(
        "convert",
        f"{'exact' if exact else 'double'} arithmetic, {to}",
        [to],
        source,
        result,
        claims,
        started=started,
        cautions=cautions,
        opinion=opinion,
        limits=limits,
        details={"arithmetic": "exact" if exact else "double", **details},
    )


Table = tuple[Model, list[Claim], list[str], dict[str, Any]]


def _grid(view: View, frequencies: Any, band: tuple[float, float] | None, count: int | None) -> Array:
    """Return the frequencies, rad/s."""
    top = np.inf if view.period is None else np.pi / view.period
    if frequencies is not None:
        if count is not None or band is not None:
            raise UsageError("--frequencies is the whole grid: leave out --band and --count")
        w = np.unique(np.asarray(frequencies, dtype=float))
        if w.size == 0 or not np.all(np.isfinite(w)) or w[0] < 0 or w[-1] > top * (1 + 1e-12):
            raise UsageError(
                "--frequencies: expected numbers that are not negative"
                + ("" if view.period is None else f", up to half the sampling rate ({top:.6g} rad/s)")
            )
        return w
    whole = whole_band(view, margin=1.0)
    low, high = (whole.low, whole.high) if band is None else band
    if not 0 <= low < high or low >= top:
        raise UsageError(f"--band {low:g},{high:g} rad/s holds no frequency of the model")
    high = min(high, top)
    if count is not None:
        low = low or min(whole.low, high / 1e3)
        return np.geomspace(low, high, count) if count > 1 else np.array([high])
    inside = Band(max(low, min(whole.low, high / 10)), high, whole.zero and low == 0, whole.left_out)
    w = seeds(inside, view.poles, *channel_zeros(view))
    return w[(w >= low) & (w <= high)]


def _norms(values: ComplexArray | Array) -> Array:
    """Return the Frobenius norm [k] of values [k][outputs][inputs], squares kept inside of the range of doubles."""
    sizes = np.abs(values)
    # a power of two changes no digit
    shift = np.frexp(sizes.max(axis=(1, 2), initial=0.0))[1]
    with np.errstate(under="ignore", over="ignore"):
        scaled = np.ldexp(sizes, -shift[:, None, None])
        result: Array = np.ldexp(np.sqrt(np.sum(scaled**2, axis=(1, 2))), shift)
    return result


def _coverage(view: View, w: Array) -> tuple[dict[str, Any], list[str]]:
    """Return how many points lie in the half-power band of each resonance inside of the grid's range."""
    poles = view.poles
    natural, damping = poles.frequency, poles.damping
    light = (damping < RESONANT) & (damping > 0) & (poles.s.imag > 0)
    light &= (natural >= w[0]) & (natural <= w[-1])
    if not light.any():
        return {"points": int(w.size), "resonances": 0}, []
    counts = [
        int(np.sum(np.abs(w - n) <= z * n))
        for n, z in zip(natural[light].tolist(), damping[light].tolist(), strict=True)
    ]
    details = {"points": int(w.size), "resonances": len(counts), "fewest_points_at_a_resonance": min(counts)}
    thin = sum(number < COVERED for number in counts)
    if not thin:
        return details, []
    return details, [
        f"{thin} of {len(counts)} resonances have fewer than {COVERED} points in their half-power band: "
        "what is between the points is not in the table."
    ]


def _frequency_response(
    view: View, frequencies: Any, band: tuple[float, float] | None, count: int | None, limits: dict[str, float]
) -> Table:
    model = view.model
    w = _grid(view, frequencies, band, count)
    p, m = model.shape
    limit = limits.get("response-error", CLAIMS["response-error"].limits["convert:structured"])
    if view.fractions is not None:
        from realize.kernels.exact.evaluation import evaluate

        values, bound = np.empty((w.size, p, m), dtype=complex), np.empty((w.size, p, m))
        for i in range(p):
            for j in range(m):
                values[:, i, j], bound[:, i, j] = evaluate(*view.fractions[i][j], w, view.exact_period)
    else:
        values, bound = model.rational_part(model.time.points(w)), np.zeros((w.size, p, m))
    poles = ~np.isfinite(values).all(axis=(1, 2))
    if frequencies is not None and poles.any():
        raise Refused(f"no finite response at {w[poles][0]:.17g} rad/s: a pole, or beyond the doubles; leave it out")
    w, values, bound = w[~poles], values[~poles], bound[~poles]
    rational = values
    if w.size == 0:
        raise Refused("no frequency with a finite response is left; give others with --frequencies")
    if model.dead_time is not None:
        angle = w[:, None, None] * model.dead_time.total
        values = values * np.exp(-1j * angle)
        # the rounding of the angle turns the value, and the product is rounded
        bound = bound + np.abs(values) * (np.abs(angle) * 2.0**-52 + 2.0**-50)
    details, cautions = _coverage(view, w)
    if view.fractions is not None:
        size, error = _norms(values), _norms(bound)
        with np.errstate(divide="ignore", invalid="ignore"):
            relative = np.where(error == 0, 0.0, error / size)
        worst = int(np.argmax(relative))
        claim = judge(
            "response-error",
            float(relative[worst]) * (1 + 2.0**-40),
            limit=limit,
            basis="proved",
            uncertainty=0.0,
            where={"frequency": float(w[worst])},
            note="at the points of the grid; the value is a bound",
        )
    else:
        claim = judge(
            "response-error",
            evaluation_error(model, w, rational),
            limit=limit,
            note="evaluated in double arithmetic; measured at a few points beside refined solutions, and scaled up by "
            "the fragility of the others",
        )
    common = model.common() | {"dead_time": None}
    result = FrequencyResponse(frequency=w, frequency_unit="rad/s", response=values, **common)
    return result, [claim], cautions, {"grid": {**details, "low": float(w[0]), "high": float(w[-1])}}


def _steps(view: View, count: int | None, period: float | None) -> tuple[float, int, list[str]]:
    """Return step and number of samples: a third of the fastest time constant, over five of the slowest."""
    sizes = view.poles.frequency
    sizes = sizes[(sizes > 0) & np.isfinite(sizes)]
    fast, slow = (float(sizes.max()), float(sizes.min())) if sizes.size else (1.0, 1.0)
    rates = np.abs(view.poles.s.real)
    rates = rates[rates > 0]
    horizon = HORIZON / float(rates.min()) if rates.size else 2 * np.pi * HORIZON / slow
    if view.period is not None:
        if period is not None and period != view.period:
            raise UsageError(f"--period {period:g}: the model is sampled every {view.period:g} s; leave it out")
        return view.period, count or int(np.clip(np.ceil(horizon / view.period), 16, SAMPLES)), []
    if period is not None:
        return period, count or int(np.clip(np.ceil(horizon / period), 16, SAMPLES)), []
    fine = 0.3 / fast
    number = count or int(np.clip(np.ceil(horizon / fine), 16, SAMPLES))
    step = fine if number * fine >= horizon else horizon / number
    if step <= fine:
        return step, number, []
    return (
        step,
        number,
        [
            f"The step is {step:.3g} s, so that {number} samples reach over the slowest mode: the fastest ones "
            "are over within a step. Give --period and --count for another part."
        ],
    )


def _impulse_response(view: View, count: int | None, period: float | None, limits: dict[str, float]) -> Table:
    model = view.model
    step, number, cautions = _steps(view, count, period)
    if view.fractions is None:
        raise Refused(
            f"order {model.order} is beyond what exact arithmetic can sample in seconds; reduce the model first, "
            "or take --to frequency-response"
        )
    from realize.kernels.exact.impulse import sampled_terms, values_at_steps

    p, m = model.shape
    values, bound = np.empty((number, p, m)), np.zeros((number, p, m))
    for i in range(p):
        for j in range(m):
            n, d = view.fractions[i][j]
            if n.degree() > d.degree():
                raise Refused(f"output {i}, input {j} has more zeros than poles: its impulse response is no function")
            if view.period is None and n.degree() == d.degree():
                raise Refused(
                    f"output {i}, input {j} has feed-through: its impulse response starts with an impulse, which no "
                    "sample can hold; take the feed-through off, or use --to frequency-response"
                )
            size = max(d.degree(), 1)
            if float(number) * number * size * 64 > BUDGET:
                raise Refused(
                    f"{number} samples at order {size} would take too long in exact arithmetic; lower --count"
                )
            if view.period is not None:
                values[:, i, j], bound[:, i, j] = sampled_terms(n, d, number)
            else:
                values[:, i, j], bound[:, i, j] = values_at_steps(n, d, step, number)
    if not np.all(np.isfinite(values)):
        raise Refused("a sample lies beyond the range of doubles: the plant is unstable; lower --count or --period")
    peak, error = float(_norms(values).max()), _norms(bound)
    worst = int(np.argmax(error))
    value = 0.0 if error[worst] == 0 else (float(error[worst]) / peak if peak > 0 else np.inf)
    claim = judge(
        "peak-error",
        value * (1 + 2.0**-40),
        limit=limits.get("peak-error", CLAIMS["peak-error"].limits["convert"]),
        basis="proved",
        uncertainty=0.0,
        where={"sample": worst},
        note="of the samples, relative to the largest of them; the value is a bound",
    )
    result = ImpulseResponse(period=step, samples=values, **model.common())
    return result, [claim], cautions, {"grid": {"samples": number, "period": step}}
