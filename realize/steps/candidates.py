"""The default state model of several channels: candidates in rising price, each proved, the first good or the best one.

Every candidate has the true McMillan degree: modal coordinates from the minimal states of each pole; cascades channel
by channel, where the orders of the channels add up to the degree; balanced and staircase coordinates of the same.
Modal coordinates are as accurate as rounding allows except where poles crowd together; cascades keep the roll-off of
every channel; balanced coordinates suit crowded poles, and staircases keep C A^k B = 0.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np

from realize.conversions import Task, convert_model, minimal_states, plan_route
from realize.errors import Refused
from realize.models import Model, StateSpace
from realize.schema import STRUCTURED, Claim
from realize.verification import conversion_claims, view_of

EPS = float(np.finfo(float).eps)
#: A peak error of so many roundings, and a response error of so many over the smallest damping ratio, are good.
PEAK, RESPONSE = 16 * EPS, 8 * EPS
#: A channel that is off by less than this, and a response error below this, are good.
CHANNEL, FLOOR = 1e-9, 1e-13
#: Smallest damping ratio that counts.
LEAST_DAMPING = 1e-4


@dataclass(frozen=True)
class Candidate:
    """A state model with its name, its route, its claims, and how far these are from good ones (1 or less: good)."""

    name: str
    route: list[str]
    model: Model
    claims: list[Claim]
    score: float

    @property
    def failures(self) -> set[str]:
        """Names of the claims that failed."""
        return {claim.name for claim in self.claims if claim.holds is False}


def choose_states(task: Task, first: StateSpace, route: list[str], limits: dict[str, float] | None) -> Candidate:
    """Return the first good candidate, or the best of all.

    Parameters
    ----------
    task : Task
        To state space, no form asked for.
    first : StateSpace
        The modal candidate.
    route : list of str
        Nodes of its route.
    limits : dict, optional
        Limits that replace the defaults.
    """
    best: Candidate | None = None
    tried: dict[str, float] = {}
    for name, way, model in _candidates(task, first, route):
        claims = conversion_claims(task.model, model, name in STRUCTURED, limits)
        candidate = Candidate(name, way, model, claims, _score(task.model, claims))
        tried[name] = float(f"{candidate.score:.3g}") if np.isfinite(candidate.score) else np.inf
        if best is None or (len(candidate.failures), candidate.score) < (len(best.failures), best.score):
            best = candidate
        if candidate.score <= 1 and not candidate.failures:
            break
    assert best is not None
    if best.failures:
        best = _larger(task, best, limits) or best
    task.details["candidates"] = {name: (score if np.isfinite(score) else None) for name, score in tried.items()}
    worst = next((claim for claim in best.claims if claim.name == "channel-error"), None)
    if best.name != "cascade" and worst is not None and (worst.infinite or (worst.value or 0.0) > CHANNEL):
        off = "without bound" if worst.infinite or worst.value is None else f"by {worst.value:.1e} of itself"
        where = worst.where or {}
        task.notes.append(
            f"One channel (output {where.get('output')}, input {where.get('input')}) is off {off} where it is far "
            "below the others: states shared by the channels cannot hold it. --form cascade keeps every channel, "
            "with an order that is larger where channels share poles."
        )
    return best


def _candidates(task: Task, first: StateSpace, route: list[str]) -> Iterator[tuple[str, list[str], Model]]:
    """Make the candidates one by one: name, route, model."""
    yield "modal", route, first
    if not minimal_states.exactly_minimal(task.model):
        return
    parts = minimal_states.parts_of(task)
    if parts.order == parts.channel_orders:
        found = _cascade(task)
        if found is not None:
            yield "cascade", *found
    for name, model in minimal_states.dense_states(parts, task):
        yield name, [*route[:-1], f"state-space:{name}"], model


def _cascade(task: Task) -> tuple[list[str], Model] | None:
    other = replace(task, form="cascade")
    try:
        way = plan_route(other)
        return [row.target for row in way], convert_model(other, way)
    except Refused:
        return None


def _larger(task: Task, best: Candidate, limits: dict[str, float] | None) -> Candidate | None:
    """Return cascades channel by channel, of more than the McMillan degree, if nothing smaller keeps the limits."""
    found = _cascade(task)
    if found is None:
        return None
    claims = conversion_claims(task.model, found[1], True, limits)
    larger = Candidate("cascade", *found, claims, _score(task.model, claims))
    if len(larger.failures) >= len(best.failures):
        return None
    task.notes.append(
        f"The order {found[1].order} is more than the McMillan degree {best.model.order}: "
        "no coordinates of that order keep the limits in doubles."
    )
    return larger


def _score(source: Model, claims: list[Claim]) -> float:
    """Return the largest claim in units of what is good."""
    view = view_of(source)
    damping = view.poles.damping[view.poles.frequency > 0]
    least = max(LEAST_DAMPING, float(damping.min(initial=1.0)))
    good = {"peak-error": max(PEAK, EPS / least), "response-error": max(FLOOR, RESPONSE / least)}
    good["channel-error"] = CHANNEL
    values = [
        np.inf if claim.infinite or claim.value is None else claim.value / good[claim.name]
        for claim in claims
        if claim.name in good
    ]
    return max(values, default=np.inf)
