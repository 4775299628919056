"""The verb `minimal`."""

from __future__ import annotations

import math
import time
from collections.abc import Iterator
from contextlib import suppress
from typing import Any

import numpy as np

from realize.conversions import Task, convert_model, plan_route
from realize.conversions.cancelling import cancelled
from realize.errors import RealizeError, Refused
from realize.models import Model, PoleResidue, Sections, StateSpace, TransferFunction, ZeroPoleGain, is_data
from realize.schema import Claim, judge
from realize.steps.conversion import Conversion, model_of
from realize.steps.minimal_states import EPS, Decision, candidates, decide
from realize.steps.receipts import finish, fragility_of, probe_frequencies, refusing_singular
from realize.steps.second_opinion import asking
from realize.verification import conversion_claims, view_of
from realize.verification.views import whatever_it_costs

#: Kinds in which common factors cancel where they stand.
IN_PLACE = (TransferFunction, ZeroPoleGain, PoleResidue, Sections)
#: A candidate whose errors stay below this is taken without a look at the others.
GOOD = 1e-14
#: Decisions within this factor of the threshold are called ambiguous.
AMBIGUOUS = 1e3
#: Default limit of the errors of an exact minimal realization (that of a conversion).
LIMIT = 1e-9


@refusing_singular()
def minimal(
    model: Model | Conversion,
    *,
    exact: bool = False,
    certify: bool = False,
    limits: dict[str, float] | None = None,
    second_opinion: bool | None = False,
) -> Conversion:
    """Remove what no input reaches and no output sees.

    Parameters
    ----------
    model : Model or Conversion
        The kind is kept: common factors of coefficients cancel, equal poles and zeros, zero residues; a state model
        comes back as a state model.
    exact : bool
        Decide on the numbers as given: doubles as the rationals they are, decimals as typed. Otherwise within their
        rounding: the smallest order that a relative change of each number by at most 4 n eps reaches.
    certify : bool
        Prove the claims whatever it costs.
    limits : dict, optional
        Limits by claim name.
    second_opinion : bool or None

    Returns
    -------
    Conversion
        ``receipt.details`` holds ``order``, ``source_order``, ``gap`` (threshold, largest change for what was removed,
        smallest for what was kept), ``runner_up`` and ``runner_up_cost``, ``ambiguous`` and the ``removed`` modes.

    Raises
    ------
    Refused
    """
    started = time.perf_counter()
    source = model_of(model)
    if is_data(source):
        raise Refused(f"a model of kind {source.kind} is data and has no minimal realization; fit a model first")
    asked = dict(limits or {})
    with whatever_it_costs(certify), asking("minimal", source, {}, second_opinion) as opinion:
        route: list[str] = []
        work = source
        if not isinstance(source, (StateSpace, *IN_PLACE)):
            task = Task(source, "state-space")
            rows = plan_route(task)
            work, route = convert_model(task, rows), [row.target for row in rows]
        decision = _in_place(work, exact) if isinstance(work, IN_PLACE) else decide(work, exact)
        allowed = _allowed(source, decision, asked)
        result, claims, shape = _best(source, work, decision, allowed)
        claims = [_order_claim(decision, asked) if claim.name == "order" else claim for claim in claims]
        details = _details(source, result, decision)
        return finish(
            "minimal",
            f"{'exact arithmetic' if exact else 'changes within rounding'}, {shape}",
            [*route, result.kind],
            source,
            result,
            claims,
            started=started,
            cautions=_cautions(source, result, decision, details),
            opinion=opinion,
            limits=asked,
            details=details,
        )


def _in_place(model: Model, exact: bool) -> Decision:
    """Return the decision about a model in coefficients, roots, residues or sections."""
    from realize.steps.inspect_poles import minimal_order_of

    found = cancelled(model, lambda n: 0.0 if exact else 4 * max(n, 1) * EPS)
    view = view_of(found.model)
    order, proved = found.model.order or 0, True
    notes: list[str] = []
    if model.shape != (1, 1):
        degree = minimal_order_of(view, notes)
        order, proved = (order, False) if degree is None else (degree, not notes)
    gone: list[dict[str, Any]] = []
    for pole, count, why, place in found.gone:
        gone.append({"pole": pole, "states": count, "why": why})
        if place is not None and model.shape != (1, 1):
            gone[-1].update(output=place[0], input=place[1])
    return Decision(
        order=order,
        proved=proved,
        threshold=0.0 if exact else 4 * max(model.order or 0, 1) * EPS,
        dropped=found.dropped,
        kept=found.kept,
        gone=gone,
        made=found.model,
        notes=notes,
    )


def _allowed(source: Model, decision: Decision, asked: dict[str, float]) -> dict[str, float]:
    """Return limits: what was asked for; where numbers had to change, at least what changes of 4 n eps may do."""
    if decision.hidden is None and decision.dropped == 0:
        return asked
    fragile = fragility_of(source, probe_frequencies(source)) or 0.0
    # fragility is the effect of one rounding, eps / 2
    bound = max(LIMIT, 8 * max(source.order or 0, 1) * fragile)
    return {"peak-error": bound, "response-error": bound, "end-behaviour": bound} | asked


def _best(source: Model, work: Model, decision: Decision, limits: dict[str, float]) -> tuple[Model, list[Claim], str]:
    """Return the candidate with the smallest errors, its claims, and its coordinates."""
    best: tuple[tuple[int, float], Model, list[Claim], str] | None = None
    reason: RealizeError | None = None
    for result, shape, structured in _candidates(work, decision):
        try:
            own = limits if structured else {k: v for k, v in limits.items() if k != "end-behaviour"}
            if not structured:
                own = {k: v for k, v in own.items() if k != "response-error" or v != limits.get("peak-error")}
            claims = conversion_claims(source, result, structured, own)
        except Refused as error:
            reason = error
            continue
        score = (sum(claim.holds is False for claim in claims), _worst(claims))
        if best is None or score < best[0]:
            best = (score, result, claims, shape)
        if score <= (0, GOOD):
            break
    if best is None:
        raise reason or Refused(
            "no coordinates could hold the minimal realization in doubles; scale time and gain first"
        )
    return best[1:]


def _candidates(work: Model, decision: Decision) -> Iterator[tuple[Model, str, bool]]:
    if decision.made is not None:
        same = decision.made is work
        yield decision.made, "left as it was" if same else decision.made.kind, not isinstance(work, StateSpace)
        if same or not isinstance(work, StateSpace):
            return
    if isinstance(work, StateSpace):
        yield from candidates(work, decision)


def _worst(claims: list[Claim]) -> float:
    values = [
        math.inf if claim.infinite or claim.value is None else claim.value
        for claim in claims
        if claim.name in ("response-error", "peak-error")
    ]
    return max(values, default=math.inf)


def _order_claim(decision: Decision, asked: dict[str, float]) -> Claim:
    note = "" if decision.proved else "a rank modulo large primes, or a decision in doubles"
    return judge(
        "order",
        float(decision.order),
        unit="states",
        basis="proved" if decision.proved else "measured",
        uncertainty=0.0 if decision.proved else None,
        limit=asked.get("order"),
        note=note,
    )


def _removed(source: Model, decision: Decision) -> list[dict[str, Any]]:
    period = source.time.seconds if source.time.sampled else None
    rows = []
    for entry in decision.gone:
        pole = complex(entry["pole"])
        if pole.imag < 0:
            continue
        s = pole
        if period is not None:
            s = complex(np.log(pole) / period) if pole else complex(-math.inf)
        size = abs(s)
        row: dict[str, Any] = {
            "pole": [pole.real, pole.imag],
            "states": int(entry["states"]) * (2 if pole.imag else 1),
            "frequency": size if math.isfinite(size) else None,
            "damping": -s.real / size if size and math.isfinite(size) else 1.0,
            "why": entry["why"],
        }
        rows.append(row | {name: entry[name] for name in ("change", "output", "input") if name in entry})
    return rows


def _details(source: Model, result: Model, decision: Decision) -> dict[str, Any]:
    def ratio(value: float) -> float | None:
        return value / decision.threshold if decision.threshold and math.isfinite(value) else None

    cost = _runner_up_cost(result)
    kept = decision.kept
    # clear is: what went needs less than a quarter of the threshold, and what stays a thousand times more
    near = bool(decision.gone) and decision.dropped > decision.threshold / 4
    ambiguous = decision.threshold > 0 and (near or decision.doubtful or kept < AMBIGUOUS * decision.threshold)
    return {
        "order": decision.order,
        "source_order": source.order,
        "gap": {
            "threshold": decision.threshold,
            "dropped": decision.dropped,
            "kept": kept if math.isfinite(kept) else None,
            "dropped_over_threshold": ratio(decision.dropped),
            "kept_over_threshold": ratio(kept),
        },
        "runner_up": decision.order - 1 if decision.order else None,
        "runner_up_cost": cost,
        "ambiguous": bool(ambiguous),
        "removed": _removed(source, decision),
    }


def _runner_up_cost(result: Model) -> float | None:
    """Return how near, relative to the largest gain, a model with one state fewer can come: no nearer than this.

    The smallest Hankel singular value (Adamyan, Arov & Krein 1971), over the largest gain of the stable part.
    """
    with suppress(RealizeError, ArithmeticError, ValueError, np.linalg.LinAlgError):
        from realize.reduction import prepare
        from realize.steps.reduce import states_of

        states, _ = states_of(result)
        if not states.order or states.order > 300:
            return None
        prepared = prepare(states.A, states.B, states.C, states.D, sampled=result.time.sampled)
        values = prepared.factors.values
        if not values.size:
            return None
        gain = prepared.largest_gain().value
        return float(prepared.in_gain(float(values[-1])) / gain) if gain > 0 else None
    return None


def _cautions(source: Model, result: Model, decision: Decision, details: dict[str, Any]) -> list[str]:
    notes = list(decision.notes)
    if details["ambiguous"]:
        ratio = details["gap"]["kept_over_threshold"]
        notes.append(
            f"The order {decision.order} is ambiguous: "
            + (
                f"numbers changed by {ratio:.2g} times the threshold of {decision.threshold:.1e} "
                f"would bring it to {decision.order - 1}"
                if ratio is not None and ratio < AMBIGUOUS
                else "how many modes are hidden among near poles, or by numbers of such a span, is not clear"
                if decision.doubtful
                else "what was removed lies close to the threshold"
            )
            + ". Use --exact if the numbers are exact, or look at the removed modes and at runner_up_cost."
        )
    unstable = 0
    for row in details["removed"]:
        edge = abs(complex(*row["pole"])) >= 1 if source.time.sampled else row["pole"][0] >= 0
        unstable += row["states"] * edge
    if unstable:
        notes.append(
            f"{unstable} of the removed states are not stable: the plant can run away unseen at its output, "
            "or without the input being able to stop it."
        )
    if isinstance(result, StateSpace) and result is not source:
        states = getattr(source, "states", ())
        if any(state.name for state in states) and not any(state.name for state in result.states):
            notes.append("The states have new coordinates: their names and units are left behind.")
        if source.offset is not None and source.offset.states is not None and result.offset is not source.offset:
            notes.append("The operating point of the states is left behind with their coordinates.")
    return notes
