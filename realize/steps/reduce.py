"""The verb `reduce`."""

from __future__ import annotations

import math
import time
from collections.abc import Sequence
from dataclasses import replace
from typing import TYPE_CHECKING, Any

import msgspec

from realize.errors import Refused, UsageError
from realize.kernels.schur_response import Basis, SchurResponse
from realize.models import Model, Signal, StateSpace
from realize.schema import REDUCTION_METHODS, Claim
from realize.steps.conversion import Conversion, model_of
from realize.steps.ordinary import states_of
from realize.steps.receipts import finish, refusing_singular
from realize.steps.reduction_loop import Around, Weights, around, loop_cautions, loop_details, weights_of
from realize.steps.second_opinion import asking
from realize.verification.difference import linf_error
from realize.verification.licence import Licence, gap_of_reduction, licence, widened
from realize.verification.reduction import band_claim, reduction_claims
from realize.verification.stability import order_claim, stability_claim
from realize.verification.views import view_of, whatever_it_costs

if TYPE_CHECKING:
    from realize.reduction import Reduction


@refusing_singular()
def reduce(
    model: Model | Conversion,
    *,
    order: int | None = None,
    error: float | None = None,
    absolute_error: float | None = None,
    measured: bool = False,
    method: str = "auto",
    band: tuple[float, float] | None = None,
    keep_steady_state: bool = False,
    keep_states: Sequence[int | str] | None = None,
    controller: Model | Conversion | None = None,
    plant: Model | Conversion | None = None,
    input_weight: Sequence[float] | None = None,
    output_weight: Sequence[float] | None = None,
    certify: bool = False,
    limits: dict[str, float] | None = None,
    second_opinion: bool | None = False,
) -> Conversion:
    """Find a smaller model, with the error known.

    Exactly one of order, error and absolute_error is given.

    Parameters
    ----------
    model : Model or Conversion
        Kinds other than state space are converted first. Unstable poles and poles on the axis are kept.
    order : int, optional
        Number of states of the result.
    error, absolute_error : float, optional
        Largest L-infinity norm of the difference, relative to the largest gain or in the units of the response; the
        smallest order whose bound keeps it is taken.
    measured : bool
        Take the smallest order whose error, as it is found, keeps the limit.
    method : str
        A name from `realize.reduction.methods`, or "auto".
    band : (low, high), optional
        rad/s: the error counts there only, and is measured.
    keep_steady_state : bool
        The gain at zero frequency stays as it is.
    keep_states : sequence of names or indices, optional
        States that stay states of the result, the first ones.
    controller : Model or Conversion, optional
        Controller of the plant, u = -K y: the loop is looked at with the full plant and with the reduced one.
    plant : Model or Conversion, optional
        The model is a controller, and this is its plant.
    input_weight, output_weight : sequence of float, optional
        One factor for each input and output (or one for all): diag(output_weight) P diag(input_weight) is reduced, and
        errors, nu-gap and margins are those of the weighted plant.
    certify : bool
        Prove the claims whatever it costs.
    limits : dict, optional
        Limits by claim name.
    second_opinion : bool

    Returns
    -------
    Conversion
        A state-space model; ``receipt.details`` holds the Hankel singular values, the candidate orders, the loops and
        the licence.

    Raises
    ------
    UsageError, InputError, Refused
    """
    started = time.perf_counter()
    source = model_of(model)
    if method not in REDUCTION_METHODS:
        raise UsageError(f"no method {method!r}; there are: {', '.join(REDUCTION_METHODS)}")
    if sum(value is not None for value in (order, error, absolute_error)) != 1:
        raise UsageError("give exactly one of --order, --error and --absolute-error")
    loop = around(source, controller, plant)
    weights = weights_of(source, input_weight, output_weight)
    plain, route = states_of(source)
    keep = kept_indices(source, plain, keep_states)
    asked = {
        "measured": measured,
        "band": _in_samples(band, plain),
        "keep_steady_state": keep_steady_state,
        "keep_states": keep,
        "loop": _loop_of(loop, weights, method),
    }
    weighted = weights.applied(plain)
    found = _reduced(weighted, method, asked, order=order, absolute_error=absolute_error, relative_error=error)
    with whatever_it_costs(certify):
        source, plain, weighted = with_bases(source, plain, weighted, found, weights)
    limit = absolute_error
    if error is not None and found.largest_gain is not None:
        limit = error * found.largest_gain
    for _ in range(3):
        # a look at more frequencies may find more than the search for the order did
        if not measured or limit is None or band is not None or keep:
            break
        small = _model(found, weighted, plain, keep)
        if reduction_claims(weighted, weighted, small, bound=None, limit=limit, limits={})[0].holds is not False:
            break
        larger = _reduced(weighted, method, asked, order=found.order + 1)
        if larger.order <= found.order:
            break
        found = _passed_over(larger, found)
    small = _model(found, weighted, plain, keep)
    result = _unweighted(small, weights, source)
    # the independent routines know nothing of weights, kept states and steady states put into D
    ordinary = not (weights.given or keep or (keep_steady_state and found.method != "singular-perturbation"))
    opinion_method = found.method if ordinary else f"{found.method} with options"
    with (
        whatever_it_costs(certify),
        asking("reduce", plain, {"order": found.order, "method": opinion_method}, second_opinion) as opinion,
    ):
        claims = _claims(source, plain, weighted, small, result, found, weights, limit, measured, band, limits or {})
        claims += [order_claim(result, (limits or {}).get("order")), stability_claim(result)]
        gap, permit = _consequences(source, plain, weighted, small, found, weights, claims)
        if loop is not None and not loop.controller:
            permit = Licence(
                False, None, "The model is a controller: no other is licensed. Its own loop was looked at."
            )
        claims.append(gap)
        details = _details(found, weights, band, plain)
        for row in details["candidates"]:
            if row["kept"] and row["error"] is None and band is None:
                row["error"] = _found_error(claims, weights)
        details["licence"] = {"given": permit.given, "margin": permit.margin, "sentence": permit.sentence}
        cautions = list(found.notes)
        if loop is not None:
            details["closed_loop"] = loop_details(loop, plain, result, weights)
            cautions += loop_cautions(details["closed_loop"], permit.margin)
        return finish(
            "reduce",
            found.method,
            [*route, "state-space"],
            source,
            result,
            claims,
            started=started,
            cautions=cautions,
            opinion=opinion,
            limits=limits,
            details=details,
        )


def kept_indices(source: Model, plain: StateSpace, keep: Sequence[int | str] | None) -> tuple[int, ...]:
    """Return the indices of states named by number or by name.

    Raises
    ------
    UsageError
        If there is no such state, or it is named twice.
    """
    if not keep:
        return ()
    if not isinstance(source, StateSpace) or plain.order != source.order:
        raise UsageError(
            f"--keep-states: a {source.kind} has no states of its own here; convert it to state-space without E first"
        )
    names = [signal.name for signal in source.states]
    found = []
    for entry in keep:
        text = str(entry).strip()
        if text in names and text:
            if names.count(text) > 1:
                raise UsageError(f"--keep-states: the name {text!r} stands for several states; use numbers")
            found.append(names.index(text))
        elif text.isascii() and text.isdigit() and int(text) < source.order:
            found.append(int(text))
        else:
            known = ", ".join(name for name in names if name) or "none has a name"
            raise UsageError(
                f"--keep-states: no state {text!r}; there are {source.order}, numbered from 0 (names: {known})"
            )
    if len(set(found)) != len(found):
        raise UsageError("--keep-states: a state is listed twice")
    return tuple(found)


def _in_samples(band: tuple[float, float] | None, plain: StateSpace) -> tuple[float, float] | None:
    if band is None:
        return None
    low, high = band
    if not 0 <= low < high or not math.isfinite(high):
        raise UsageError(f"a band from {low} to {high}: the lower frequency must be below the higher one")
    if not plain.time.sampled:
        return low, high
    period = plain.time.seconds
    if low * period >= math.pi:
        raise UsageError(f"the band lies above half the sampling rate, {math.pi / period:.6g} rad/s")
    return low * period, min(high * period, math.pi)


def _loop_of(loop: Around | None, weights: Weights, method: str) -> Any:
    from realize.reduction import Loop

    if loop is None:
        return None
    if loop.dead_time:
        if method == "frequency-weighted":
            raise Refused("a loop with dead time gives no weights: it is not rational; use another method")
        return None
    other = weights.on_controller(loop.model)
    return Loop(other.A, other.B, other.C, other.D, controller=loop.controller)


def with_bases(
    source: Model, plain: StateSpace, weighted: StateSpace, found: Reduction, weights: Weights
) -> tuple[Model, StateSpace, StateSpace]:
    """Return the models with the bases that the reduction found to evaluate responses by, where they are large.

    The bases are tried against each model's own matrices first. The models handed back are copies: nobody else sees
    poles and responses that come from here.
    """
    basis = None if found.basis is None or view_of(weighted).fractions is not None else found.basis()
    if basis is None:
        return source, plain, weighted

    def seen(model: StateSpace, basis: Basis) -> StateSpace:
        made = SchurResponse.of_basis(model.A, model.B, model.C, basis)
        if made is None:
            return model
        copy = model.with_()
        copy.remembered("large response", lambda: made)
        return copy

    other = seen(weighted, basis)
    if plain is weighted:
        own = other
    else:
        (L, N, F), (R, M, H) = basis.right, basis.left
        F, H = F / weights.inputs, H / weights.outputs[:, None]
        own = seen(plain, replace(basis, right=(L, N, F), left=(R, M, H)))
    return (own if source is plain else source), own, other


def _reduced(weighted: StateSpace, method: str, asked: dict[str, Any], **choice: Any) -> Reduction:
    from realize.reduction import reduce_states

    return reduce_states(
        weighted.A, weighted.B, weighted.C, weighted.D, sampled=weighted.time.sampled, method=method, **choice, **asked
    )


def _passed_over(larger: Reduction, asked: Reduction) -> Reduction:
    """Return the larger result with what was known of the request."""
    note = f"order {asked.order} was passed over: a closer look found a larger error there"
    return replace(
        larger, largest_gain=asked.largest_gain, reason=asked.reason, notes=(*asked.notes, note), method=asked.method
    )


def _model(found: Reduction, weighted: StateSpace, plain: StateSpace, keep: tuple[int, ...]) -> StateSpace:
    """Return the reduced weighted model."""
    names: tuple[Signal, ...] = ()
    if keep and plain.states:
        others = tuple(Signal(f"rest {k + 1}") for k in range(found.order - len(keep)))
        names = tuple(plain.states[k] for k in keep) + others
    common = weighted.common() | {"receipts": ()}
    return StateSpace(A=found.A, B=found.B, C=found.C, D=found.D, states=names, **common)


def _unweighted(small: StateSpace, weights: Weights, source: Model) -> StateSpace:
    if not weights.given:
        return small.with_(receipts=source.receipts)
    inverse = Weights(1 / weights.inputs, 1 / weights.outputs, True, True)
    return inverse.applied(small).with_(receipts=source.receipts)


def _claims(
    source: Model,
    plain: StateSpace,
    weighted: StateSpace,
    small: StateSpace,
    result: StateSpace,
    found: Reduction,
    weights: Weights,
    limit: float | None,
    measured: bool,
    band: tuple[float, float] | None,
    limits: dict[str, float],
) -> list[Claim]:
    """Return the claims on errors: in the source's units, and weighted or over the band where that was asked."""
    everywhere = None if band is not None else limit
    bound_limit = None if measured else everywhere
    own = None if weights.given else everywhere
    bound = None if found.bound is None else found.bound / weights.least
    claims = reduction_claims(
        source, plain, result, bound=bound, limit=own, limits=limits, bound_limit=None if weights.given else bound_limit
    )
    if weights.given:
        inner = reduction_claims(
            weighted, weighted, small, bound=found.bound, limit=everywhere, limits={}, bound_limit=bound_limit
        )[0]
        inner = msgspec.structs.replace(inner, name="weighted-error", note="with the stated weights")
        claims.append(widened(inner, _lost(source, plain, weights)))
    if band is not None:
        high = min(band[1], math.pi / plain.time.seconds) if plain.time.sampled else band[1]
        claims.append(band_claim(weighted, small, (band[0], high), limits.get("band-error", limit)))
    return claims


def _consequences(
    source: Model,
    plain: StateSpace,
    weighted: StateSpace,
    small: StateSpace,
    found: Reduction,
    weights: Weights,
    claims: list[Claim],
) -> tuple[Claim, Licence]:
    """Return the nu-gap and the licence."""
    by_name = {claim.name: claim for claim in claims}
    error = by_name["weighted-error" if weights.given else "reduction-error"]
    bound = None
    if found.bound is not None and not weights.given:
        bound = by_name["reduction-bound"].value if by_name["reduction-bound"].basis == "bounded" else None
    full = weighted if weights.given else source
    gap = gap_of_reduction(full, small, error, bound, found.kept_order, found.marginal)
    if weights.given:
        gap = widened(gap, _lost(source, plain, weights))
    return gap, licence(gap, weighted=weights.stated, dead_time=plain.dead_time is not None)


def _found_error(claims: list[Claim], weights: Weights) -> float | None:
    """Return the error of the order that was taken, as the claim found it."""
    name = "weighted-error" if weights.given else "reduction-error"
    value = next(claim.value for claim in claims if claim.name == name)
    return value if value is not None and math.isfinite(value) else None


def _lost(source: Model, plain: StateSpace, weights: Weights) -> float | None:
    """Return what the conversion to states cost, weighted; None where that is measured only."""
    if plain is source:
        return 0.0
    lost = linf_error(source, plain)
    if lost.value is None or lost.uncertainty is None:
        return None
    return (lost.value + lost.uncertainty) * float(weights.inputs.max() * weights.outputs.max())


def _details(found: Reduction, weights: Weights, band: tuple[float, float] | None, plain: StateSpace) -> dict[str, Any]:
    details: dict[str, Any] = {
        "hankel_singular_values": [float(value) for value in found.hankel_singular_values[:200]],
        "candidates": [
            {
                "order": c.order,
                "bound": c.bound,
                "error": c.error,
                "nu_gap_bound": None if c.bound is None or not math.isfinite(c.bound) else min(1.0, c.bound),
                "kept": c.order == found.order,
            }
            for c in found.candidates
        ],
        "kept_order": found.kept_order,
        "lower_bound": float(found.lower_bound),
        "algorithm": found.algorithm,
        "reason": found.reason,
    }
    if found.kept_order:
        separation = found.separation if math.isfinite(found.separation) else None
        details["split"] = {"separation": separation, "coupling": float(found.coupling)}
    if weights.given:
        details["weights"] = {"inputs": weights.inputs.tolist(), "outputs": weights.outputs.tolist()}
    if band is not None:
        details["band"] = list(band)
    return details
