"""The verb `convert`."""

from __future__ import annotations

import time
from collections.abc import Sequence
from dataclasses import replace
from typing import Any

import numpy as np

from realize.conversions import (
    Changed,
    Choice,
    Task,
    choose_arithmetic,
    convert_model,
    coordinate_row,
    follow,
    plan_route,
)
from realize.errors import Refused, UsageError
from realize.forms.coordinates import NoTransform
from realize.forms.registry import TABLE
from realize.models import Model, StateSpace, TimeRecord, is_data
from realize.models.checks import MAX_DIGITS
from realize.schema import ARITHMETICS, CLAIMS, FORMS, KINDS, ORDERINGS, SIDES, STRUCTURED, TABULATED_KINDS, Claim
from realize.steps.conversion import Conversion, model_of
from realize.steps.receipts import finish, refusing_singular
from realize.steps.second_opinion import asking
from realize.verification import conversion_claims, view_of
from realize.verification.views import whatever_it_costs

#: Kinds that `digits` goes with: every other holds matrices or samples in doubles.
WITH_DIGITS = ("transfer-function", "zero-pole-gain", "pole-residue", "sections")
#: Damping ratio below which an oscillation counts as one of a flexible structure.
FLEXIBLE = 0.1
#: Modal coordinates of states that keep the response to this need no rival.
MODAL_GOOD = 1e-10
#: The default coordinates of several channels are changed for a cascade where a channel is off by more than this.
GOOD = 1e-9


#: Forms whose blocks come in an order that can be chosen.
ORDERED = ("schur",)


def _task(
    model: Model,
    to: str,
    form: str | None,
    common_denominator: bool,
    digits: int | None,
    arithmetic: str,
    ordering: str | None,
    force: bool = False,
    side: str | None = None,
) -> Task:
    if to not in KINDS:
        raise UsageError(f"no kind {to!r} to convert to; there are: {', '.join(KINDS)}")
    if to in TABULATED_KINDS and (form is not None or ordering is not None or arithmetic == "double"):
        raise UsageError(f"--to {to} takes no form, ordering or arithmetic double")
    if form is not None and form not in FORMS:
        raise UsageError(f"no form {form!r}; there are: {', '.join(FORMS)}")
    if arithmetic not in ARITHMETICS:
        raise UsageError(f"no arithmetic {arithmetic!r}; there are: {', '.join(ARITHMETICS)}")
    if ordering is not None and ordering not in ORDERINGS:
        raise UsageError(f"no ordering {ordering!r}; there are: {', '.join(ORDERINGS)}")
    if ordering is not None and form not in ORDERED:
        raise UsageError(f"--ordering goes with --form {', '.join(ORDERED)}")
    if side is not None and (to != "matrix-fraction" or side not in SIDES):
        raise UsageError(f"--side goes with --to matrix-fraction, and is one of: {', '.join(SIDES)}")
    if common_denominator and to != "transfer-function":
        raise UsageError("--common-denominator goes with --to transfer-function")
    if is_data(model):
        raise Refused(
            f"the data of a model of kind {model.kind} have no exact conversion to a model; "
            + (
                "fit takes time records, and --to frequency-response estimates the response"
                if isinstance(model, TimeRecord)
                else "fit takes frequency responses"
            )
        )
    if digits is not None:
        if to not in WITH_DIGITS:
            raise UsageError(f"--digits goes with --to {', '.join(WITH_DIGITS)}, not with --to {to}")
        if isinstance(digits, bool) or not isinstance(digits, int) or not 1 <= digits <= MAX_DIGITS:
            raise UsageError(f"--digits {digits}: expected a whole number from 1 to {MAX_DIGITS}")
        if arithmetic == "double":
            raise UsageError("--digits needs exact arithmetic, and --arithmetic double was asked for")
    return Task(model, to, form, common_denominator, digits, arithmetic, ordering, force, side)


def explain(
    model: Model | Conversion,
    to: str,
    *,
    form: str | None = None,
    ordering: str | None = None,
    common_denominator: bool = False,
    digits: int | None = None,
    arithmetic: str = "auto",
) -> list[str]:
    """Return the route of a conversion in words, one line a row, and last the arithmetic and why."""
    task = _task(model_of(model), to, form, common_denominator, digits, arithmetic, ordering)
    if to in TABULATED_KINDS:
        return [f"{task.model.kind} -> {to}: exact values where they are affordable, each rounded once"]
    route = plan_route(task)
    lines = [f"{row.source} -> {row.target} ({'exact' if row.exact else 'rounding'}): {row.says}" for row in route]
    return [*(lines or [f"{task.model.kind} stays as it is (exact)"]), choose_arithmetic(task).words]


@refusing_singular()
def convert(
    model: Model | Conversion,
    to: str,
    *,
    form: str | None = None,
    ordering: str | None = None,
    force: bool = False,
    side: str | None = None,
    frequencies: Sequence[float] | None = None,
    band: tuple[float, float] | None = None,
    count: int | None = None,
    period: float | None = None,
    common_denominator: bool = False,
    digits: int | None = None,
    arithmetic: str = "auto",
    certify: bool = False,
    averaging: str | None = None,
    estimator: str | None = None,
    window: str | None = None,
    segment: int | None = None,
    overlap: float | None = None,
    excitation_period: int | None = None,
    settling: float | None = None,
    sampled: bool = False,
    limits: dict[str, float] | None = None,
    second_opinion: bool | None = False,
) -> Conversion:
    """Write the same model as another kind, or in other coordinates.

    Parameters
    ----------
    model : Model or Conversion
    to : str
        A parametric kind.
    form : str, optional
        Coordinates of a state-space result; the default is a cascade for one channel, the best of several minimal ones
        for more, and whatever a state-space source has. The receipt's ``details["coordinates"]`` has the transform from
        the states of a state-space source, its condition number, and the way back.
    ordering : str, optional
        Order of the blocks of the form "schur": "speed" (slowest first, the default), "damping" (least damped first)
        or "stability" (unstable first).
    side : str, optional
        Side of the denominator of a matrix fraction, "right" (the default) or "left". One that is a matrix fraction
        already is made coprime and reduced if a side is asked for.
    frequencies : sequence of float, optional
        Grid of a frequency response, rad/s; the default is dense around the resonances.
    band : (low, high), optional
        Range of that grid, rad/s.
    count : int, optional
        Points of the grid, evenly spaced on a log scale; samples of an impulse response.
    period : float, optional
        Step of an impulse response of a continuous model, s.
    force : bool
        Give a form even where it ruins the model; the claim then fails.
    common_denominator : bool
        One denominator for all channels of a transfer function.
    digits : int, optional
        Decimals with so many correct significant digits in place of doubles (1 to 2000); for transfer-function,
        zero-pole-gain, pole-residue and sections. Numbers that are doubles exactly may stay doubles.
    arithmetic : str
        "auto": exact where few enough operations are predicted; "exact": whatever it costs, claims too; "double":
        doubles alone make the result, and the claims say what that cost.
    certify : bool
        Prove the claims whatever it costs.
    averaging, estimator, window, segment, overlap, excitation_period, settling : optional
        How a time record becomes a frequency response: see ``realize.estimation.Settings``.
    sampled : bool
        The inputs of a time record are held between the samples: the response is that of the sampled plant.
    limits : dict, optional
        Limits by claim name, instead of the defaults.
    second_opinion : bool or None
        Ask an independent library, in a child process; None: only where a limited claim is not proved.

    Returns
    -------
    Conversion

    Raises
    ------
    UsageError, Refused
    """
    started = time.perf_counter()
    source = model_of(model)
    estimation: dict[str, Any] = {
        "averaging": averaging,
        "estimator": estimator,
        "window": window,
        "segment": segment,
        "overlap": overlap,
        "excitation_period": excitation_period,
        "settling": settling,
    }
    given = sampled or any(value is not None for value in estimation.values())
    if isinstance(source, TimeRecord) and to == "frequency-response":
        from realize.steps.measured import estimated

        return estimated([source], sampled=sampled, limits=limits, **estimation)
    if given:
        raise UsageError("options of time data go with a time record and --to frequency-response")
    task = _task(source, to, form, common_denominator, digits, arithmetic, ordering, force, side)
    wanted: dict[str, Any] = {"frequencies": frequencies, "band": band, "count": count, "period": period}
    if to in TABULATED_KINDS:
        from realize.steps.tabulate import tabulated

        with whatever_it_costs(certify or arithmetic == "exact"):
            return tabulated(source, to, **wanted, limits=limits, second_opinion=second_opinion)
    if any(value is not None for value in wanted.values()):
        raise UsageError("--frequencies, --band, --count and --period go with --to " + " or ".join(TABULATED_KINDS))
    choice = choose_arithmetic(task)
    lifted = certify or arithmetic == "exact"
    with whatever_it_costs(lifted), asking("convert", source, {"to": to}, second_opinion) as opinion:
        changed = None
        if form is None:
            route, result, claims, shape = _default(task, limits)
        else:
            route, value, choice = _in_form(task, choice, limits)
            changed = value if isinstance(value, Changed) else None
            result = value.model if isinstance(value, Changed) else value
            shape = form
            claims = conversion_claims(source, result, shape in STRUCTURED, limits)
            if changed is not None and (form not in STRUCTURED or isinstance(source, StateSpace)):
                _refuse_ruin(task, claims, changed, limits)
        cautions = [*_cautions(source, result, to), *task.notes, *_costly(choice)]
        return finish(
            "convert",
            f"{_method(choice, changed, source) if route else 'left as it was'}, {shape or to}",
            route,
            source,
            result,
            claims,
            started=started,
            cautions=cautions + list(changed.cautions if changed else ()),
            opinion=opinion,
            limits=limits,
            details={
                **({"form": shape} if shape else {}),
                "arithmetic": choice.arithmetic,
                "predicted_operations": float(f"{choice.predicted:.3g}"),
                "budget": choice.budget,
                **({"coordinates": changed.record} if changed else {}),
                **task.details,
            },
            digits=digits,
        )


def _default(task: Task, limits: dict[str, float] | None) -> tuple[list[str], Model, list[Claim], str]:
    """Return route, result, claims and coordinates ('' for none) of a conversion without a form asked for."""
    source = task.model
    route = plan_route(task)
    result = convert_model(task, route)
    shape = _form_of(task, route)
    if shape == "minimal" and isinstance(result, StateSpace):
        from realize.conversions import minimal_states
        from realize.steps.candidates import choose_states

        best = choose_states(task, result, [row.target for row in route], limits)
        task.details.update(minimal_states.decision(task))
        return best.route, best.model, best.claims, best.name
    nodes = [row.target for row in route]
    claims = conversion_claims(source, result, (shape or task.to) in STRUCTURED, limits)
    rival = _rival(source, shape, claims)
    if rival:
        other = replace(task, form=rival)
        try:
            second_route = plan_route(other)
            second = convert_model(other, second_route)
        except Refused:
            second = None
        if second is not None:
            second_claims = conversion_claims(source, second, True, limits)
            better = _worst(second_claims) < _worst(claims)
            as_good = rival == "modal" and _worst(second_claims) <= _worst(claims)
            if (better or as_good) and _failures(second_claims) <= _failures(claims):
                return [row.target for row in second_route], second, second_claims, rival
    return nodes, result, claims, shape


def _in_form(task: Task, choice: Choice, limits: dict[str, float] | None) -> tuple[list[str], Model | Changed, Choice]:
    """Return route, result and arithmetic of a conversion to a form that was asked for."""
    if not task.changes_coordinates:
        rows = plan_route(task)
        return [row.target for row in rows], follow(task, rows), choice
    if not isinstance(task.model, StateSpace):
        route, base, _, _ = _default(replace(task, form=None), limits)
        # the function is the same from any realization that stands for the source
        row = coordinate_row("state-space:minimal", task)
        return [*route, row.target], row.apply(base, task), choice
    form = TABLE[task.form or ""]
    rows = plan_route(task)
    route = [row.target for row in rows]
    try:
        changed: Changed = rows[-1].apply(task.model, task)
    except Refused as reason:
        if not form.otherwise or not (isinstance(reason, NoTransform) or form.name == "modal"):
            raise
        return _from_response(task, str(reason))
    if form.name == "modal":
        return _modal(task, route, changed, choice, limits)
    return route, changed, choice


def _from_response(task: Task, reason: str) -> tuple[list[str], Changed, Choice]:
    """Return a form of a state model that comes from its response alone, with the reason why."""
    other = replace(task, without_transform=True)
    rows = plan_route(other)
    route = [row.target for row in rows]
    value = follow(other, rows)
    record: dict[str, Any] = {
        "form": task.form,
        "condition": None,
        "against": "the response of the source, not its states",
        "note": f"there is no transform: {reason}",
    }
    caution = f"The form stands for the response alone, without a transform from the states of the source: {reason}."
    if isinstance(value, Changed):
        kept = {key: entry for key, entry in value.record.items() if key not in record}
        return (
            route,
            replace(value, record=record | kept, cautions=(*value.cautions, caution)),
            choose_arithmetic(other),
        )
    assert isinstance(value, StateSpace)
    if task.form == "modal":
        from realize.conversions.modal_states import modal_by_eigenvectors

        return route, modal_by_eigenvectors(task, value, record, caution, reason), choose_arithmetic(other)
    return route, Changed(value, record, (caution,), float("inf")), choose_arithmetic(other)


def _modal(
    task: Task, route: list[str], changed: Changed, choice: Choice, limits: dict[str, float] | None
) -> tuple[list[str], Changed, Choice]:
    """Return block diagonal coordinates of the states, or the modal form of the partial fractions where that is better.

    It is better where it splits what the states could only keep together, or where their peak error is above
    1e-10 and that of the partial fractions smaller by a factor of four; and where it fails no claim more.
    """
    clusters = any("separation" in block for block in changed.record["blocks"])
    claims = conversion_claims(task.model, changed.model, False, limits)
    if not clusters and _peak(claims) <= MODAL_GOOD:
        return route, changed, choice
    reason = "partial fractions keep the response better than a transform of the states"
    try:
        second, other, arithmetic = _from_response(task, reason)
    except Refused:
        return route, changed, choice
    rival = conversion_claims(task.model, other.model, False, limits)
    good = _failures(rival) <= _failures(claims)
    if good and (_peak(rival) < _peak(claims) / 4 or (clusters and _peak(rival) <= MODAL_GOOD)):
        return second, other, arithmetic
    return route, changed, choice


def _peak(claims: list[Claim]) -> float:
    """Return the peak error, infinite where there is none."""
    claim = next((claim for claim in claims if claim.name == "peak-error"), None)
    return np.inf if claim is None or claim.infinite or claim.value is None else claim.value


def _refuse_ruin(task: Task, claims: list[Claim], changed: Changed, limits: dict[str, float] | None) -> None:
    """Raise `Refused` where a claim exceeds its default limit (or a larger one that was asked for).

    Dense coordinates are judged by the peak error; companion forms of a state model, whose coefficients may be ruined
    by their one rounding, by the response error and the end behaviour as well.
    """
    if task.force:
        return
    for claim in claims:
        defaults = CLAIMS[claim.name].limits
        default = defaults.get("convert", defaults.get("convert:structured") if task.form in STRUCTURED else None)
        if default is None:
            continue
        limit = max(default, (limits or {}).get(claim.name, 0.0))
        if not claim.infinite and (claim.value is None or claim.value <= limit):
            continue
        size = "infinite" if claim.infinite or claim.value is None else f"{claim.value:.1e}"
        condition = ""
        if np.isfinite(changed.condition):
            condition = f", with a transform of condition number {changed.condition:.1e}"
        raise Refused(
            f"{task.form} coordinates ruin this model: the {claim.name.replace('-', ' ')} would be {size} (limit "
            f"{limit:g}){condition}; use --form {TABLE[task.form or ''].instead} instead, or --force to have it all "
            "the same"
        )


def _failures(claims: list[Claim]) -> set[str]:
    """Return the names of the claims that failed."""
    return {claim.name for claim in claims if claim.holds is False}


def _rival(source: Model, shape: str, claims: list[Claim]) -> str:
    """Return the other coordinates worth a try by default: '' for none.

    Modal coordinates that lose a channel (partial fractions, or several channels in doubles) have the cascade as rival;
    the cascade of a flexible
    structure (one channel, all poles lightly damped oscillations) has modal coordinates, which are what its user thinks
    in, if they are at least as good.
    """
    if shape == "modal" and _worst(claims) > GOOD:
        return "cascade"
    if shape == "cascade" and source.shape == (1, 1):
        poles = view_of(source).poles.s.tolist()
        if poles and all(s.imag and -FLEXIBLE * abs(s) < s.real < 0 for s in poles):
            return "modal"
    return ""


def _method(choice: Choice, changed: Changed | None, source: Model) -> str:
    form = TABLE.get(changed.record["form"]) if changed is not None else None
    if form is not None and choice.arithmetic == "exact" and not form.exact and not isinstance(source, StateSpace):
        return "exact rational arithmetic, then double arithmetic"
    return "exact rational arithmetic" if choice.arithmetic == "exact" else "double arithmetic"


def _costly(choice: Choice) -> list[str]:
    """Return what exact arithmetic beyond the budget costs, in words."""
    if choice.arithmetic != "exact" or not choice.over:
        return []
    return [
        f"Exact arithmetic was asked for: about {choice.predicted:.1e} predicted operations, "
        f"{choice.predicted / choice.budget:.2g} times what auto would spend (some seconds)."
    ]


def _form_of(task: Task, route: list[Any]) -> str:
    if task.to != "state-space" or not route:
        return ""
    return route[-1].target.partition(":")[2]


def _worst(claims: list[Claim]) -> float:
    """Return the larger one of peak error and error of the worst channel."""
    values = [
        np.inf if claim.infinite or claim.value is None else claim.value
        for claim in claims
        if claim.name in ("peak-error", "channel-error", "response-error")
    ]
    return max(values, default=np.inf)


def _cautions(source: Model, result: Model, to: str) -> list[str]:
    notes = []
    view = view_of(source)
    if source.shape == (1, 1) and view.fractions is not None and source.order is not None:
        hidden = source.order - max(view.fractions[0][0][1].degree(), view.fractions[0][0][0].degree())
        if hidden > 0:
            kept = (result.order or 0) > source.order - hidden
            notes.append(
                f"{hidden} of the source's {source.order} poles cancel exactly with zeros; "
                + ("they are kept in the result." if kept else "the result is without them.")
            )
            unstable = view.cancelled_unstable
            if unstable:
                notes.append(
                    f"{unstable} of the cancelled poles are not stable: the plant can run away unseen at its output."
                )
    states = getattr(source, "states", ())
    if (
        any(state.name for state in states)
        and result is not source
        and not any(s.name for s in getattr(result, "states", ()))
    ):
        notes.append("The states have new coordinates: their names and units are left behind.")
    carried = result.offset is not None and result.offset.states is not None
    if source.offset is not None and source.offset.states is not None and not carried:
        notes.append("The operating point of the states is left behind with their coordinates.")
    if result.beyond_doubles:
        places = ", ".join(result.beyond_doubles[:3]) + (" ..." if len(result.beyond_doubles) > 3 else "")
        notes.append(f"Numbers beyond the range of doubles are written as decimal strings: {places}.")
    return notes
