"""Hand-made faults in reduction, in fitting, and in the verification itself."""

from __future__ import annotations

import importlib
from dataclasses import replace
from functools import partial
from typing import Any

import msgspec
import numpy as np
from faults import (
    FIT,
    ZPK,
    Fault,
    after,
    at_length,
    axis_pole,
    both_units,
    chain,
    dead_time_left,
    delayed,
    differentiator,
    differing,
    differing_at_the_edge,
    differing_matrix,
    differing_sampled,
    first_channel,
    fit_with,
    fitted,
    halved,
    last_states,
    measured,
    method,
    narrow,
    no_point_check,
    not_well_conditioned,
    notch,
    on,
    plant,
    proof_of_less,
    reduced,
    reduced_with,
    scaled_time,
    small_proof_of_less,
    state_model,
    tenfold,
    twice,
    wrapped,
)

from realize.kernels.exact import polynomials, roots
from realize.models import DeadTime, FrequencyResponse, TimeBase
from realize.reduction import balanced_truncation
from realize.reduction.prepare import Prepared
from realize.verification import Pair, bands, conversion, difference, small, stability
from realize.verification.proof import Proof

POINT = "point check"
EXACT = "exact comparison"


def claim(name: str, *, open_: bool = False) -> str:
    return f"claim {name}" + (", open" if open_ else "")


def delayed_plant() -> Any:
    return plant(dead_time=DeadTime((0.1,), (0.0,), ((0.0,),)))


def sampled_plant() -> Any:
    return plant(time=TimeBase("sampled", period=0.01))


def large_chain() -> Any:
    model = chain()
    return model.with_(C=1e6 * model.C)


def clear_chain() -> Any:
    return chain(D=1.0)


NOISY = partial(fitted, partial(measured, sigma=20.0))


def unstable_kept() -> Any:
    model = chain()
    A = model.A.copy()
    A[-1, -1] = 3.0
    return reduced(lambda: model.with_(A=A), order=4)


def after_first(place: Any) -> Any:
    """The search returns the value at its first frequency."""

    def change(function: Any, error: Any, w: Any, band: Any, **more: Any) -> tuple[float, float]:
        values = error(w[:1])
        return float(values[0]), float(w[0])

    return wrapped(place, "largest", change)


def wrapped_method(place: Any, name: str, change: Any) -> Any:
    own = getattr(place, name)
    return method(place, name, lambda *a, **k: change(own, *a, **k))


def wrong_order(patch: Any) -> None:
    own = stability.order_claim
    patch.setattr(REDUCE_STEP, "order_claim", lambda result, limit=None: own(chain(), limit))


BY_ERROR = partial(reduced, chain, error=0.01)


PREPARE = importlib.import_module("realize.reduction.prepare")
REDUCE = importlib.import_module("realize.reduction.reduce")
REDUCE_STEP = importlib.import_module("realize.steps.reduce")
FIT_STEP = importlib.import_module("realize.steps.fit")


def ten_times_the_gain(patch: Any) -> None:
    own = Prepared.largest_gain
    patch.setattr(Prepared, "largest_gain", lambda self: tenfold(own(self)))


REDUCTION = [
    Fault(
        "bound without the factor 2",
        "reduction.prepare.tail_bounds",
        partial(reduced, chain, error=0.12),
        after(PREPARE, "tail_bounds", lambda t: t / 2),
        claim("reduction-error"),
    ),
    Fault(
        "Gramians exchanged",
        "reduction.prepare.hankel_factors",
        BY_ERROR,
        after(PREPARE, "hankel_factors", lambda f: replace(f, left=f.right, right=f.left[:, ::-1])),
        claim("reduction-error"),
    ),
    Fault(
        "the least important states kept",
        "reduction.balanced_truncation",
        BY_ERROR,
        wrapped(balanced_truncation, "balanced_part", last_states),
        claim("reduction-error"),
    ),
    Fault(
        "wrong exponent of the gain",
        "reduction.reduce.prepare",
        BY_ERROR,
        after(REDUCE, "prepare", scaled_time),
        claim("reduction-error"),
    ),
    Fault(
        "D forgotten",
        "reduction.reduce_states",
        partial(reduced, clear_chain, error=0.01),
        reduced_with(lambda f: {"D": 0 * f.D}),
        claim("reduction-error"),
    ),
    Fault(
        "B of the result with the wrong sign",
        "reduction.reduce_states",
        BY_ERROR,
        reduced_with(lambda f: {"B": -f.B}),
        claim("reduction-error"),
    ),
    Fault(
        "largest gain ten times too large",
        "reduction.Prepared.largest_gain",
        BY_ERROR,
        ten_times_the_gain,
        "relative error",
    ),
    Fault(
        "judged against the model after E was divided out",
        "steps.reduce.reduction_claims",
        partial(reduced, not_well_conditioned, order=2),
        wrapped(REDUCE_STEP, "reduction_claims", lambda f, s, plain, *a, **k: f(plain, plain, *a, **k)),
        EXACT,
    ),
]

FITTING = [
    Fault(
        "conjugate forgotten",
        "fitting.fit_response",
        FIT,
        fit_with(lambda f: {"residues": f.residues.conj()}),
        claim("rms-misfit"),
    ),
    Fault(
        "direct term dropped",
        "fitting.fit_response",
        FIT,
        fit_with(lambda f: {"direct": 0 * f.direct}),
        claim("rms-misfit"),
    ),
    Fault(
        "poles in hertz",
        "fitting.fit_response",
        FIT,
        fit_with(lambda f: {"poles": f.poles / (2 * np.pi)}),
        claim("rms-misfit"),
    ),
    Fault(
        "dead time dropped",
        "steps.fit.convert_model",
        partial(fitted, partial(measured, dead=0.2), {"rms-misfit": 1e-6}),
        after(FIT_STEP, "convert_model", dead_time_left),
        claim("rms-misfit"),
    ),
    Fault(
        "hertz read as rad/s",
        "FrequencyResponse.radians",
        both_units,
        method(FrequencyResponse, "radians", property(lambda self: np.asarray(self.frequency))),
        "consistency",
    ),
    Fault(
        "every other line left out",
        "verification.misfit.misfit",
        NOISY,
        wrapped(FIT_STEP, "misfit", lambda f, d, m, k: f(d, m, k & (np.arange(k.size) % 2 == 0))),
        EXACT,
    ),
    Fault(
        "variance for deviation",
        "steps.fit.weighted_misfit",
        NOISY,
        wrapped(FIT_STEP, "weighted_misfit", lambda f, p, s, *a, **k: f(p, s**2, *a, **k)),
        EXACT,
    ),
]

VERIFICATION = [
    Fault(
        "identical() says yes",
        "verification.Pair.identical",
        differing,
        method(Pair, "identical", property(lambda self: True)),
        EXACT,
    ),
    Fault(
        "the proof says identical",
        "verification.Proof.identical",
        differing,
        at_length(method(Proof, "identical", property(lambda self: True))),
        EXACT,
    ),
    Fault("point check left out, D dropped", "verification.views", on(state_model, ZPK), no_point_check, EXACT),
    Fault(
        "numerators of both sides halved",
        "kernels.exact.polynomials.reduce_fraction",
        BY_ERROR,
        after(polynomials, "reduce_fraction", lambda p: (p[0] / 2, p[1])),
        EXACT,
    ),
    Fault(
        "exponent of the norm not put back",
        "verification.difference._lifted",
        partial(reduced, large_chain, order=2),
        method(difference, "_lifted", lambda value, exponent: value),
        EXACT,
    ),
    Fault(
        "M with the wrong sign",
        "verification.Proof.difference",
        on(plant, ZPK),
        at_length(
            method(
                Proof, "difference", property(lambda s: [b * s.d1 + a * s.d2 for a, b in zip(s.n1, s.n2, strict=True)])
            )
        ),
        claim("response-error"),
    ),
    Fault(
        "error of a small plant halved",
        "verification.small._Squares",
        differing,
        wrapped_method(small._Squares, "__init__", halved),
        EXACT,
    ),
    Fault(
        "everything about small plants is positive",
        "verification.small.positive_whole",
        small_proof_of_less,
        method(small, "positive_whole", lambda *a: True),
        "consistency",
    ),
    Fault(
        "only the first channel summed",
        "verification.Proof._sum",
        differing_matrix,
        wrapped_method(Proof, "_sum", first_channel),
        EXACT,
    ),
    Fault(
        "dynamic band without the factor 10",
        "verification.search.dynamic_band",
        differing_at_the_edge,
        wrapped(bands, "dynamic_band", narrow),
        EXACT,
    ),
    Fault(
        "divisor at a notch ten times too large",
        "verification.Pair.edge_gain",
        notch,
        wrapped_method(Pair, "edge_gain", lambda f, *a: 10 * f(*a)),
        EXACT,
    ),
    Fault(
        "everything is positive",
        "verification.Proof.within",
        proof_of_less,
        method(Proof, "within", lambda self, *a, **k: True),
        "consistency",
    ),
    Fault(
        "proof over the first interval only",
        "verification.bands.intervals_of",
        proof_of_less,
        after(bands, "intervals_of", lambda found: found[:1]),
        "consistency",
    ),
    Fault(
        "tangent of the whole angle",
        "verification.Proof.place",
        differing_sampled,
        wrapped_method(Proof, "place", lambda f, s, w, up, bits=120: f(s, w / 2, up, bits)),
        EXACT,
    ),
    Fault(
        "multiplicities not counted",
        "verification.conversion._multiplicity",
        differentiator,
        method(conversion, "_multiplicity", lambda p, x: 0),
        "worked example",
    ),
    Fault(
        "axis poles not compared",
        "verification.conversion._axis_moved",
        axis_pole,
        method(conversion, "_axis_moved", lambda *a: ""),
        "worked example",
    ),
    Fault(
        "dead times not compared",
        "verification.conversion.dead_time_difference",
        delayed,
        method(conversion, "dead_time_difference", lambda *a: 0.0),
        "worked example",
    ),
    Fault(
        "every limit is kept",
        "schema.judge",
        twice,
        at_length(after(conversion, "judge", lambda c: msgspec.structs.replace(c, holds=True))),
        "worked example",
    ),
    Fault(
        "every pole counts as inside",
        "kernels.exact.roots.inside_left_half_plane",
        unstable_kept,
        method(roots, "inside_left_half_plane", lambda p: p.degree()),
        EXACT,
    ),
    Fault(
        "order of the source in place of the result's",
        "verification.stability.order_claim",
        partial(reduced, chain, order=2),
        wrong_order,
        EXACT,
    ),
]
