"""What is wrong with a model, or looks wrong, and what to do about each: the remarks of `inspect`."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any, NamedTuple

import numpy as np

from realize.models import FrequencyResponse, Model, StateSpace, TimeRecord, TransferFunction
from realize.models.state_space import is_identity
from realize.steps.data_cautions import data_cautions, unit_cautions
from realize.steps.receipts import FRAGILE, probe_frequencies
from realize.verification import View

#: Poles this far apart in size, fastest over slowest, are worth a word.
STIFF = 1e9
#: A pole and a zero closer than this, relative to their size, are worth a word; so is a mode this much weaker.
NEAR = 1e-6
#: A damping ratio below this is worth a word.
LIGHT = 1e-3
#: Norm of the states' matrix over that after scaling from which the units of the states are called bad.
BADLY_SCALED = 1e4
#: A typical gain outside this range, and gains of channels further apart than this, look like units.
LARGE_GAIN, SMALL_GAIN, APART = 1e6, 1e-8, 1e8
#: A sampled model whose fastest pole is this much slower than its sampling rate (rad/s) loses digits near z = 1.
OVERSAMPLED = 1e-5
#: Natural frequencies (rad/s) from which a number of two digits looks as if it had been meant in Hz.
ROUND_FROM = 40.0
#: Largest order whose modes are looked at one by one.
MODES_ORDER = 400
#: How many pairs or modes are named.
NAMED = 3


class Finding(NamedTuple):
    """What was found, and what to do about it; empty where nothing has to be done."""

    subject: str
    what: str
    advice: str = ""

    @property
    def sentence(self) -> str:
        return f"{self.what} {self.advice}".strip()


def frequency_text(w: float) -> str:
    """Return an angular frequency in both units."""
    return f"{w:.4g} rad/s ({w / (2 * np.pi):.4g} Hz)"


def findings_of(model: Model, record: dict[str, Any], view: View) -> list[Finding]:
    """Return what is worth a word about a parametric model, the gravest first.

    Parameters
    ----------
    model : Model
    record : dict
        What `inspect` has found so far.
    view : View
    """
    found: list[Finding] = []
    for part in (_stability, _numbers, _hidden, _cancelling, _weak_modes, _scaling, _units, _time, _small_values):
        found += part(model, record, view)
    return found


def _stability(model: Model, record: dict[str, Any], view: View) -> Iterator[Finding]:
    if record["stable"] is not False:
        return
    edge = view.period is not None
    bad = [
        (complex(re, im), count)
        for re, im, count in record["poles"]
        if (abs(complex(re, im)) >= 1 if edge else re >= 0) and im >= 0
    ]
    named = ", ".join(f"{z.real:.4g}" + (f" ± {z.imag:.4g}j" if z.imag else "") for z, _ in bad[:NAMED])
    more = f", and {len(bad) - NAMED} more" if len(bad) > NAMED else ""
    yield Finding(
        "stability",
        "Not stable: at least one pole is on or beyond the edge of stability"
        + (f": {named}{more}." if bad else ".")
        + " So there are no Hankel singular values.",
        "`reduce` keeps such poles; `convert --to state-space --form linear-quadratic-balanced` balances with them.",
    )


def _hidden(model: Model, record: dict[str, Any], view: View) -> Iterator[Finding]:
    order, minimal = record["order"], record["minimal_order"]
    if minimal is not None and order is not None and minimal < order:
        what = f"{order - minimal} of {order} poles are not seen at the output: the minimal order is {minimal}."
        hidden = record.get("decoupling_zeros") or {}
        for side, words in (("input", "Out of reach of the inputs"), ("output", "Not seen at the outputs")):
            modes = hidden.get(side) or []
            if modes:
                what += f" {words}: {_listed(modes, view)}."
        if isinstance(model, StateSpace):
            yield Finding(
                "order", what, "`minimal` takes them out, `convert --to state-space --form kalman` shows them apart."
            )
        else:
            yield Finding("order", what, "`minimal` takes them out.")


def _small_values(model: Model, record: dict[str, Any], view: View) -> Iterator[Finding]:
    values, errors = record.get("hankel_singular_values"), record.get("hankel_errors")
    if values and errors and values[0] > 0:
        noise = sum(1 for v, e in zip(values, errors, strict=True) if 0 < v <= e)
        if noise:
            yield Finding(
                "order",
                f"{noise} of {len(values)} Hankel singular values are below their own error: noise of the doubles.",
                "Do not read an order off them.",
            )
        small = sum(1 for v in values if 0 < v < NEAR * values[0])
        if small and 2 * small >= len(values) >= 4:
            yield Finding(
                "order",
                f"{small} of {len(values)} Hankel singular values are below {NEAR:g} of the first: "
                "far fewer states would do.",
                "`reduce --error 0.1%` finds how many.",
            )


def _listed(modes: list[list[float]], view: View) -> str:
    texts = []
    for re, im, _ in modes:
        if im < 0:
            continue
        texts.append(f"{re:.4g}" + (f" ± {im:.4g}j" if im else ""))
    return ", ".join(texts[:NAMED]) + (f" and {len(texts) - NAMED} more" if len(texts) > NAMED else "")


def _cancelling(model: Model, record: dict[str, Any], view: View) -> Iterator[Finding]:
    """Pairs of a pole and a zero of a single channel, with their distance."""
    if model.shape != (1, 1) or view.fractions is None:
        return
    zeros, poles = view.channel_roots[0][0]
    if not (zeros.s.size and poles.s.size):
        return
    size = np.abs(poles.s)[None, :]
    gap = np.abs(zeros.s[:, None] - poles.s[None, :])
    relative = np.divide(gap, size, out=np.full(gap.shape, np.inf), where=size > 0)
    nearest = relative.argmin(axis=1)
    distance = relative.min(axis=1)
    # a pair of conjugates counts once
    close = [k for k in np.argsort(distance).tolist() if distance[k] < NEAR and zeros.s[k].imag >= 0]
    if not close:
        return
    named = []
    for k in close[:NAMED]:
        apart = f"{distance[k]:.1e}" if distance[k] > 4e-16 else "less than 4e-16"
        named.append(f"{frequency_text(float(abs(poles.s[nearest[k]])))}, {apart} apart")
    more = f", and {len(close) - NAMED} more" if len(close) > NAMED else ""
    count = int(np.sum(distance < NEAR))
    yield Finding(
        "cancellation",
        f"{count} {'zero lies' if count == 1 else 'zeros lie'} within {NEAR:g} of a pole, relative to its size: "
        f"nearly cancelling: {'; '.join(named)}{more}.",
        "They do not cancel exactly. If they should: `minimal` takes out what is within rounding, "
        "`reduce --error 0.01%` what hardly counts.",
    )


def _weak_modes(model: Model, record: dict[str, Any], view: View) -> Iterator[Finding]:
    """Modes whose share |C v| |w B| / (2 |Re p|) is far below the response at their own frequency."""
    n = model.order or 0
    if not isinstance(model, StateSpace) or not 2 <= n <= MODES_ORDER or not is_identity(model.E):
        return
    from realize.kernels.unit_scaling import scale_model

    if not all(np.all(np.isfinite(matrix)) for matrix in (model.A, model.B, model.C)):
        return
    import scipy.linalg

    scaled = scale_model(model.A, model.B, model.C, sampled=model.time.sampled)
    if not np.any(scaled.B) or not np.any(scaled.C):
        return
    poles, left, right = scipy.linalg.eig(scaled.A, left=True, right=True, check_finite=False)
    with np.errstate(all="ignore"):
        inner = np.abs(np.sum(left.conj() * right, axis=0))
        reach = np.linalg.norm(left.conj().T @ scaled.B, axis=1) / np.linalg.norm(scaled.B)
        sight = np.linalg.norm(scaled.C @ right, axis=0) / np.linalg.norm(scaled.C)
        # which side is to blame is a matter of the states' own units: scaled ones share the weakness
        reached, seen = (
            np.linalg.norm(vectors.conj().T @ matrix, axis=1)
            / (np.linalg.norm(vectors, axis=0) * np.linalg.norm(matrix))
            for vectors, matrix in (
                (left * np.exp2(-scaled.states)[:, None], model.B),
                (right.conj() * np.exp2(scaled.states)[:, None], model.C.T),
            )
        )
        width = np.abs(1 - np.abs(poles) ** 2) if model.time.sampled else 2 * np.abs(poles.real)
        unit = float(np.ldexp(1.0, scaled.time))
        s = poles * unit if view.period is None else np.log(poles + 0j) / view.period
        share = reach * sight / (inner * width) * np.linalg.norm(scaled.B) * np.linalg.norm(scaled.C)
        share = np.ldexp(share, np.clip(scaled.gain, -2000, 2000))
        # clustered poles have no shares of their own
        w = np.abs(s)
        fit = np.isfinite(share) & (inner > NEAR) & (width > 0) & np.isfinite(w) & (w > 0) & (poles.imag >= 0)
        if view.period is not None:
            fit &= w < np.pi / view.period
        around = np.full(w.size, np.nan)
        around[fit] = np.linalg.norm(view.response(w[fit]), axis=(1, 2))
        share = np.divide(share, around, out=np.full(w.size, np.inf), where=around > 0)
    weak = [k for k in np.flatnonzero(fit).tolist() if share[k] < NEAR]
    if (record["minimal_order"] if record["minimal_order"] is not None else n) < n:
        # those that are hidden exactly are told already
        weak = [k for k in weak if min(reach[k], sight[k]) > 64 * np.finfo(float).eps]
    if not weak:
        return
    weak.sort(key=lambda k: float(share[k]))
    texts = []
    for k in weak[:NAMED]:
        side = "from inputs to outputs"
        if reached[k] < 1e-3 * seen[k]:
            side = "the inputs hardly reach it"
        elif seen[k] < 1e-3 * reached[k]:
            side = "the outputs hardly see it"
        texts.append(f"{frequency_text(float(w[k]))} at {share[k]:.1e} ({side})")
    more = f", and {len(weak) - NAMED} more" if len(weak) > NAMED else ""
    yield Finding(
        "weak modes",
        f"{len(weak)} {'mode hardly shows' if len(weak) == 1 else 'modes hardly show'} in the response at its own "
        f"frequency: "
        f"{'; '.join(texts)}{more}.",
        "Check sensors and actuators, or let `reduce` take them out.",
    )


def _scaling(model: Model, record: dict[str, Any], view: View) -> Iterator[Finding]:
    scaling = record.get("scaling")
    if scaling and isinstance(model, StateSpace) and (scaling.get("ratio") or 0) > BADLY_SCALED:
        yield Finding(
            "scaling",
            f"Badly scaled states: other units would make the entries of A {scaling['ratio']:.1e} times smaller "
            "and far more alike.",
            "`convert --to state-space --form scaled` does it exactly.",
        )
    if scaling and isinstance(model, TransferFunction) and scaling["before"] - scaling["after"] > 60:
        yield Finding(
            "scaling",
            f"Coefficients spread over {scaling['before'] * 0.30103:.0f} decades; with time counted in units of "
            f"2^{-scaling['time']} s it would be {scaling['after'] * 0.30103:.0f}.",
            "`convert --to zero-pole-gain` keeps poles and zeros instead of coefficients.",
        )


def _units(model: Model, record: dict[str, Any], view: View) -> Iterator[Finding]:
    w = probe_frequencies(model)
    if w.size and not model.beyond_doubles:
        with np.errstate(all="ignore"):
            size = np.abs(view.response(w))
        size = np.where(np.isfinite(size), size, np.nan)
        # a resonance or an integrator is not a unit, and neither is a roll-off
        largest = np.array([_largest(size[:, i, j]) for i in range(size.shape[1]) for j in range(size.shape[2])])
        middle = np.array([_median(size[:, i, j]) for i in range(size.shape[1]) for j in range(size.shape[2])])
        present = largest[largest > 0]
        if present.size and (np.nanmin(middle) > LARGE_GAIN or present.max() < SMALL_GAIN):
            level = float(np.nanmin(middle) if np.nanmin(middle) > LARGE_GAIN else present.max())
            yield Finding(
                "units",
                f"The gain is around {level:.1e} over the dynamics: the units of inputs and outputs do not match.",
                "Give one of them in another unit (k, M, m, µ), or check that nothing is in Pa, N or m by mistake.",
            )
        elif present.size > 1 and present.max() > APART * present.min():
            yield Finding(
                "units",
                f"Channels differ by {present.max() / present.min():.1e} in gain: norms, balancing and reduction see "
                "the largest only.",
                "Choose units in which 1 matters equally at every input and output.",
            )
    if view.period is None:
        dynamics = view.poles
        rates = np.unique(dynamics.frequency[(dynamics.s.imag > 0) & (dynamics.damping < 0.5)])
        if rates.size and all(rate >= ROUND_FROM and _is_round(rate) for rate in rates.tolist()):
            first = float(rates[0])
            yield Finding(
                "units",
                f"Natural frequencies are round numbers in rad/s: {frequency_text(first)}. They look like Hz.",
                "If they were meant in Hz, multiply poles and zeros by 2 pi.",
            )


def _largest(values: Any) -> float:
    kept = values[np.isfinite(values)]
    return float(kept.max()) if kept.size else np.nan


def _median(values: Any) -> float:
    kept = values[np.isfinite(values)]
    return float(np.median(kept)) if kept.size else np.nan


def _is_round(value: float) -> bool:
    return abs(float(f"{value:.2g}") - value) <= 1e-9 * value


def _time(model: Model, record: dict[str, Any], view: View) -> Iterator[Finding]:
    dynamics = view.poles
    sizes = dynamics.frequency[dynamics.frequency > 0]
    if sizes.size and sizes.max() / sizes.min() > STIFF:
        yield Finding(
            "time scales",
            f"Time scales are {sizes.max() / sizes.min():.1e} apart, fastest over slowest pole: "
            f"{frequency_text(float(sizes.min()))} and {frequency_text(float(sizes.max()))}.",
            "Simulate with an implicit method; `convert --to zero-pole-gain` or `--form cascade` keep both ends.",
        )
    light = (dynamics.damping < LIGHT) & (dynamics.frequency > 0)
    if light.any():
        k = np.flatnonzero(light)[np.argmin(dynamics.damping[light])]
        yield Finding(
            "damping",
            f"{int(light.sum())} poles have a damping ratio below {LIGHT:g}; the lightest, {dynamics.damping[k]:.1e}, "
            f"at {frequency_text(float(dynamics.frequency[k]))}.",
            "`--form modal` keeps each oscillation in a block of its own.",
        )
    if view.period is not None and sizes.size and sizes.max() * view.period < OVERSAMPLED:
        yield Finding(
            "sampling",
            f"Sampled {2 * np.pi / (sizes.max() * view.period):.1e} times in a period of the fastest pole: all poles "
            "crowd at z = 1, where doubles keep few digits of them.",
            "Sample more slowly, or check the unit of the period (s).",
        )
    if model.dead_time is not None and sizes.size:
        longest = float(np.max(model.dead_time.total))
        if longest * sizes.min() > 1e3:
            yield Finding(
                "dead time",
                f"The dead time, {longest:.3g} s, is {longest * sizes.min():.1e} times the slowest time constant.",
                "Check its unit: it is in seconds.",
            )


def _numbers(model: Model, record: dict[str, Any], view: View) -> Iterator[Finding]:
    if model.beyond_doubles:
        yield Finding(
            "range",
            f"{len(model.beyond_doubles)} numbers are beyond the range of doubles; they are kept as decimals.",
            "`convert --to zero-pole-gain` often brings them back into range; `--digits` writes decimals.",
        )
    value = record.get("fragility")
    if value is not None and value > FRAGILE:
        yield Finding(
            "fragility",
            f"One rounding of the model's own numbers moves its response by up to {value:.1e} of its size.",
            "Doubles in this kind cannot carry the plant: ask its source for poles and zeros, residues or sections, or "
            "for decimals.",
        )


def remarks_of(model: Model) -> list[Finding]:
    """Return what the reader of the file had to say."""
    return [Finding("file", f"{text[:1].upper()}{text[1:]}.") for text in model.remarks]


def record_findings(model: TimeRecord) -> list[Finding]:
    """Return what is worth a word about a time record."""
    found = []
    for side, values, signals in (("input", model.input, model.inputs), ("output", model.output, model.outputs)):
        for k in np.flatnonzero(np.all(values == values[:1], axis=0)):
            name = signals[k].name if signals and signals[k].name else str(k)
            found.append(Finding("record", f"The {side} {name} is constant.", "Check the channel and its wiring."))
        top = np.abs(values).max(axis=0)
        for k in np.flatnonzero(top > 0):
            at_the_end = np.sum(np.abs(values[:, k]) == top[k])
            if at_the_end > max(4, 0.01 * values.shape[0]) and at_the_end < 0.3 * values.shape[0]:
                name = signals[k].name if signals and signals[k].name else str(k)
                found.append(
                    Finding(
                        "record",
                        f"The {side} {name} is at {top[k]:.6g}, its largest value, in {at_the_end} samples: clipped?",
                        "Check the range of the instrument.",
                    )
                )
    return found


def data_findings(model: FrequencyResponse) -> list[Finding]:
    """Return what is worth a word about measured data."""
    found = []
    if model.deviation is None and model.coherence is None:
        found.append(
            Finding(
                "noise",
                "No deviation or coherence: a fit has to estimate the noise itself.",
                "Add a column with one standard deviation or the coherence, if the analyser gives one.",
            )
        )
    units = unit_cautions(model)
    found += [Finding("units" if text in units else "data", text) for text in data_cautions(model)]
    largest = float(np.abs(model.response).max())
    if largest > 0 and not SMALL_GAIN < largest < LARGE_GAIN:
        found.append(
            Finding(
                "units",
                f"The largest gain is {largest:.1e}: the units of inputs and outputs do not match.",
                "Give one of them in another unit.",
            )
        )
    return found
