"""The verb `fit`."""

from __future__ import annotations

import time
from collections.abc import Sequence
from typing import Any

import numpy as np

from realize.conversions import Task, convert_model, plan_route
from realize.errors import InputError, UsageError
from realize.models import DeadTime, FrequencyResponse, ImpulseResponse, Model, PoleResidue, ZeroPoleGain
from realize.schema import ESTIMATED_DEAD_TIMES, FIT_METHODS, UNIVERSAL_KINDS, Claim, judge
from realize.steps.conversion import Conversion
from realize.steps.data_cautions import data_cautions, dead_time_caution
from realize.steps.fit_record import fit_details
from realize.steps.measured import response_of, runs_of
from realize.steps.receipts import finish
from realize.steps.second_opinion import asking
from realize.verification.misfit import misfit, rms_misfit, weighted_misfit, worst_misfit
from realize.verification.stability import order_claim, stability_claim


def fit(
    data: Model | Conversion | Sequence[Model | Conversion],
    *,
    to: str = "state-space",
    order: int | tuple[int, int] | str = "auto",
    method: str = "auto",
    dead_time: float | str | None = None,
    relative_degree: int | None = None,
    integrators: int | None = None,
    fixed_poles: Any = None,
    fixed_zeros: Any = None,
    steady_state_gain: Any = None,
    symmetric: bool = False,
    passive: str | None = None,
    allow_unstable: bool = False,
    band: tuple[float, float] | None = None,
    parameter: str | None = None,
    averaging: str | None = None,
    estimator: str | None = None,
    window: str | None = None,
    segment: int | None = None,
    overlap: float | None = None,
    excitation_period: int | None = None,
    settling: float | None = None,
    sampled: bool = False,
    names: Sequence[str] | None = None,
    limits: dict[str, float] | None = None,
    second_opinion: bool | None = False,
) -> Conversion:
    """Turn measured data into a model.

    Parameters
    ----------
    data : FrequencyResponse, ImpulseResponse, TimeRecord, or several runs of one
        Runs of a frequency response are merged into their mean, with the deviation of the mean; time records are
        averaged together into one frequency response.
    to : str
        Kind of the result.
    order : int, (low, high) or "auto"
        Number of poles.
    method : str
        A name of ``realize.fitting.METHODS``, or "auto".
    dead_time : float or str, optional
        Known dead time of every channel, s; it is taken out of the data and put into the model. "auto" estimates one
        with the fit; "auto-per-input", "auto-per-output", "auto-per-channel" estimate several.
    relative_degree : int, optional
        Every channel falls off at least like s^-N; 1 stands for no feed-through.
    integrators : int, optional
        So many poles exactly at 0, sampled at z = 1; the order counts them.
    fixed_poles, fixed_zeros : list of complex or [re, im], optional
        Poles of the model, and zeros of every channel, rad/s (sampled: z); the order counts the poles.
    steady_state_gain : float or [outputs][inputs], optional
        Gain at frequency 0.
    symmetric : bool
        Reciprocal: the response is a symmetric matrix.
    passive : str, optional
        "positive-real" (impedance, admittance), "bounded-real" (scattering), or "auto": as the ports of the data say.
        The response is changed as little as that needs.
    allow_unstable : bool
        Poles may be unstable where the data ask for it.
    band : (low, high), optional
        Use only these frequencies, rad/s.
    parameter : str, optional
        Of data with ports, such as scattering parameters: fit this other parameter of the same network.
    averaging, estimator, window, segment, overlap, excitation_period, settling : optional
        How time records become a frequency response: see ``realize.estimation.Settings``.
    sampled : bool
        The inputs of the time records are held between the samples: the model is that of the sampled plant. An impulse
        response is that of a sampled plant, its Markov parameters.
    names : sequence of str, optional
        What to call the runs.
    limits : dict, optional
        Limits by claim name.
    second_opinion : bool

    Returns
    -------
    Conversion
        ``receipt.details`` holds the candidates of the order, the modes with error bars, the misfit of each channel,
        the confidence band of the response at some lines, and the noise.

    Raises
    ------
    InputError, UsageError, Refused
    """
    started = time.perf_counter()
    if to not in UNIVERSAL_KINDS:
        raise UsageError(f"no kind {to!r} to fit; there are: {', '.join(UNIVERSAL_KINDS)}")
    if method not in FIT_METHODS:
        raise UsageError(f"no method {method!r}; there are: {', '.join(FIT_METHODS)}")
    given = limits or {}
    estimation = {
        "averaging": averaging,
        "estimator": estimator,
        "window": window,
        "segment": segment,
        "overlap": overlap,
        "excitation_period": excitation_period,
        "settling": settling,
    }
    runs = runs_of(data)
    if isinstance(runs[0], ImpulseResponse):
        from realize.steps.fit_samples import fit_impulse

        others = {
            "--dead-time": dead_time,
            "--relative-degree": relative_degree,
            "--integrators": integrators,
            "--fixed-poles": fixed_poles,
            "--fixed-zeros": fixed_zeros,
            "--steady-state-gain": steady_state_gain,
            "--symmetric": symmetric or None,
            "--passive": passive,
            "--allow-unstable": allow_unstable or None,
            "--band": band,
            "--parameter": parameter,
            **{f"--{name.replace('_', '-')}": value for name, value in estimation.items()},
        }
        return fit_impulse(
            runs,
            {name: value for name, value in others.items() if value is not None},
            to=to,
            order=order,
            method=method,
            sampled=sampled,
            names=names,
            limits=given,
            second_opinion=second_opinion,
            started=started,
        )
    source, told, seen = response_of(runs, names, sampled, estimation)
    if parameter is not None:
        from realize.steps.port_parameters import as_parameter

        source = as_parameter(source, parameter)
    keep = _lines(source, band)
    from realize.steps.constraints import constraint_claims, enforced, passive_kind, structure_of

    structure = structure_of(
        source,
        relative_degree=relative_degree,
        integrators=integrators,
        fixed_poles=fixed_poles,
        fixed_zeros=fixed_zeros,
        steady_state_gain=steady_state_gain,
        symmetric=symmetric,
        allow_unstable=allow_unstable,
        dead_time=dead_time,
    )
    passive_as = passive_kind(source, passive, dead_time)
    dead = _dead_time(source, dead_time)

    from realize.fitting import fit_response

    w = source.radians[keep]
    response = source.response[keep]
    if dead is not None:
        response = response * np.exp(1j * w[:, None, None] * dead.total)
    found = fit_response(
        w,
        response,
        deviation=None if source.deviation is None else source.deviation[keep],
        coherence=None if source.coherence is None else source.coherence[keep],
        order=order,
        method=method,
        period=source.time.seconds if source.time.sampled else None,
        structure=structure,
    )
    details: dict[str, Any] = {}
    if passive_as:
        period = source.time.seconds if source.time.sampled else None
        found, details["passivity"] = enforced(found, structure, w, passive_as, period, isinstance(order, int))
    if found.dead_time is not None:
        dead = _estimated(found.dead_time)
    fitted = _model(found, source.common() | {"dead_time": dead}, to)
    task = Task(fitted, to)
    route = plan_route(task)
    result = convert_model(task, route)

    # a line at a fixed pole says nothing finite
    counted = keep.copy()
    counted[keep] = ~np.any(source.time.points(w)[:, None] == found.poles[None, :], axis=1)
    part = misfit(source, result, counted)
    rms = rms_misfit(part, given.get("rms-misfit"))
    claims: list[Claim] = [rms, worst_misfit(part, given.get("worst-misfit"))]
    if source.deviation is not None:
        weighted = weighted_misfit(part, source.deviation, given.get("weighted-misfit"))
    else:
        weighted = judge(
            "weighted-misfit",
            found.weighted,
            unit="1",
            # the same rounding as in the misfit itself, and that of the misfit that the noise was estimated from
            uncertainty=None
            if not rms.value or rms.uncertainty is None
            else 10 * found.weighted * rms.uncertainty / rms.value,
            limit=given.get("weighted-misfit"),
            note=f"the deviation is {found.noise.basis}",
        )
    claims += [weighted] if weighted is not None else []
    claims += [order_claim(result, given.get("order")), stability_claim(result)]
    claims += constraint_claims(structure, result, given, passive_as)
    cautions = [*told, *data_cautions(source), *found.cautions, *_structure_cautions(found, to, details)]
    cautions += _far_gain(found, structure, w)
    if isinstance(dead_time, (int, float)) and (words := dead_time_caution(source, float(dead_time))):
        cautions.append(words)
    hertz = w / (2 * np.pi)
    cautions.append(
        f"The model is fitted from {w[0]:.6g} to {w[-1]:.6g} rad/s ({hertz[0]:.6g} to {hertz[-1]:.6g} Hz): "
        "outside of it nothing was measured."
    )
    with asking("fit", source, {}, second_opinion) as opinion:
        return finish(
            "fit",
            found.method,
            [fitted.kind, *(row.target for row in route)],
            source,
            result,
            claims,
            started=started,
            cautions=cautions,
            opinion=opinion,
            limits=limits,
            details=fit_details(found, source, w, chosen=not isinstance(order, int)) | seen | details,
        )


def _lines(source: FrequencyResponse, band: tuple[float, float] | None) -> np.ndarray:
    w = source.radians
    if band is None:
        return np.ones(w.size, dtype=bool)
    # a line at the edge that the change of units moved by a rounding still counts
    slack = 4 * np.finfo(float).eps
    keep = (w >= band[0] * (1 - slack)) & (w <= band[1] * (1 + slack))
    if not keep.any():
        raise InputError(
            f"no line between {band[0]:.6g} and {band[1]:.6g} rad/s",
            f"a band that overlaps {w[0]:.6g} to {w[-1]:.6g} rad/s",
            field="band",
        )
    return keep


def _model(found: Any, common: dict[str, Any], to: str) -> Model:
    """Return the fit as partial fractions, or as zeros, poles and gain where the structure needs that."""
    if found.factors is None:
        return PoleResidue(
            poles=found.poles, residues=found.residues, powers=found.powers, direct=found.direct, **common
        )
    p, m = found.factors.gain.shape
    if to == "state-space" and p * m > 1 and found.factors.chain is not None:
        from realize.steps.chained import chained_states

        return chained_states(found.factors.chain, (p, m), common)
    zeros = [[found.factors.zeros[i * m + j] for j in range(m)] for i in range(p)]
    none = np.zeros(0, dtype=complex)
    poles = [[found.poles if found.factors.gain[i, j] else none for j in range(m)] for i in range(p)]
    return ZeroPoleGain(zeros=zeros, poles=poles, gain=found.factors.gain, **common)


def _structure_cautions(found: Any, to: str, details: dict[str, Any]) -> list[str]:
    """Return words about what the kind of the result cannot keep, and about what passivity cost."""
    cautions = []
    if found.factors is not None and to == "pole-residue":
        cautions.append(
            "rounded residues cannot cancel exactly: a pole-residue result loses a relative degree above 1 and moves "
            "fixed zeros; zero-pole-gain and state-space keep them"
        )
    change = details.get("passivity")
    if change is not None and change["rms"] > 0:
        cautions.append(
            f"made passive: the response changed by {change['rms']:.2g} (root mean square over the lines, relative), "
            f"{change['largest']:.2g} of the largest gain at most; the error bars are those of the fit before"
        )
    if change is not None and change["poles_added"]:
        cautions.append(
            f"{change['poles_added']} poles outside of the measured band were added: the fit was not passive where "
            "nothing was measured, and they leave the response within the band as it is"
        )
    return cautions


def _far_gain(found: Any, structure: Any, w: np.ndarray) -> list[str]:
    """Return words where a pinned gain is met only by poles below the data, which ask for another one."""
    if structure is None or structure.steady_state_gain is None:
        return []
    lowest = float(w[w > 0][0])
    # a pole without deviation is one that was given
    slow = [row for row in found.pole_table if row.frequency < 0.1 * lowest and row.frequency_deviation != 0]
    if not slow:
        return []
    return [
        f"the steady-state gain is met by {len(slow)} pole(s) or pair(s) below a tenth of the lowest line, at "
        f"{min(row.frequency for row in slow):.3g} rad/s, where nothing was measured: within the lines the data ask "
        "for another gain. Look at the number given, or fix the order."
    ]


def _estimated(total: np.ndarray) -> DeadTime:
    p, m = total.shape
    return DeadTime((0.0,) * m, (0.0,) * p, tuple(tuple(map(float, row)) for row in total))


def _dead_time(source: FrequencyResponse, seconds: float | str | None) -> DeadTime | None:
    """Return the dead time that is known: what the data file says, or the same for all channels."""
    if seconds is None:
        return source.dead_time
    if source.dead_time is not None:
        raise UsageError("the data already state a dead time; leave --dead-time out")
    if seconds in ESTIMATED_DEAD_TIMES:
        return None
    if isinstance(seconds, str):
        raise UsageError(f"no dead time {seconds!r}; write seconds, or one of {', '.join(ESTIMATED_DEAD_TIMES)}")
    p, m = source.shape
    return DeadTime((0.0,) * m, (0.0,) * p, tuple((float(seconds),) * m for _ in range(p)))
