"""Rows of the conversion table about second-order models."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from realize.errors import Refused
from realize.forms.inversion import Verdict
from realize.forms.second_order import NoStructure, SecondOrderParts, second_order_parts, states_of_pencil
from realize.models import Model, PoleResidue, SecondOrder, Signal, StateSpace

if TYPE_CHECKING:
    from realize.conversions.route import Task

#: What a refusal says when a plant of another kind is to become a second-order model.
STRUCTURE_NEEDED = (
    "a second-order model is read off a state model whose states are positions and velocities, or made of the modes of "
    "a pole-residue model; from {kind} neither way is open: reduce the model first, or convert it to pole-residue and "
    "that to second-order"
)


def verdict_words(what: str, verdict: Verdict, inverted: bool) -> str:
    """Return what became of a mass or descriptor matrix, as one sentence."""
    if inverted:
        if verdict.kind == "diagonal":
            return f"{what} is diagonal and was divided out."
        return f"{what} was inverted: its condition number is {verdict.condition:.3g}, scaling aside."
    if verdict.kind == "singular":
        return f"{what} is singular within the rounding of doubles; it stays in E, and nothing was inverted."
    return (
        f"{what} was not inverted (condition number {verdict.condition:.3g}, scaling aside): it stays in E, so that "
        "no digit is lost."
    )


def states_from_second_order(model: Model, task: Task) -> StateSpace:
    """Positions and velocities as states; the mass matrix is inverted where that is harmless, else it stands in E."""
    assert isinstance(model, SecondOrder)
    pencil, inverted, verdict = states_of_pencil(model.pencil, model.mass)
    n = model.mass.shape[0]
    if verdict.kind != "identity":
        task.notes.append(verdict_words("The mass matrix", verdict, inverted))
        if inverted and pencil.A.shape[0] < model.pencil.A.shape[0]:
            task.notes.append(
                "Outputs that read accelerations are differences of rounded terms now: far below the first mode, where "
                "an acceleration vanishes with the square of the frequency, they keep a rounding of those terms."
            )
    task.details["mass"] = {"is": verdict.kind, "condition": verdict.condition, "inverted": inverted}
    names = [f"q{k + 1}" for k in range(n)] + [f"v{k + 1}" for k in range(n)]
    names += [f"a{k + 1}" for k in range(pencil.A.shape[0] - 2 * n)]
    return StateSpace(
        A=pencil.A,
        B=pencil.B,
        C=pencil.C,
        D=pencil.D,
        E=None if inverted else pencil.E,
        states=tuple(Signal(name) for name in names),
        **task.model.common(),
    )


def second_order_from_states(model: Model, task: Task) -> SecondOrder:
    """Mass, damping and stiffness where they stand as blocks in E and A; refused where they do not."""
    assert isinstance(model, StateSpace)
    if model.time.sampled:
        raise Refused("a second-order model is in continuous time, and this one is sampled")
    try:
        parts = second_order_parts(model.A, model.B, model.C, model.D, model.E)
    except NoStructure as reason:
        raise Refused(
            f"no second-order structure: {reason}; bring the states into positions q and velocities v with q' = v, or "
            "convert --to pole-residue and that --to second-order, for the modes as coordinates"
        ) from None
    labels = [model.states[k].name or f"state {k}" for k in parts.positions]
    task.details["positions"] = labels
    return _model_of(parts, task)


def second_order_from_residues(model: Model, task: Task) -> SecondOrder:
    """Modes as coordinates: unit mass, diagonal damping and stiffness; refused where poles are no pairs."""
    from realize.forms.second_order_modes import modal_coordinates

    assert isinstance(model, PoleResidue)
    if model.time.sampled:
        raise Refused("a second-order model is in continuous time, and this one is sampled")
    if model.direct.shape[0] > 1:
        raise Refused(
            f"a polynomial part of degree {model.direct.shape[0] - 1} has no place in modal second-order coordinates; "
            "take it off first, or use --to state-space"
        )
    try:
        with np.errstate(over="ignore", under="ignore", invalid="ignore"):
            parts = modal_coordinates(model.poles, model.residues, model.powers, model.direct[0])
    except NoStructure as reason:
        raise Refused(
            f"no modal second-order coordinates: {reason}; use --to state-space --form modal, which takes poles of any "
            "kind"
        ) from None
    n = parts.mass.shape[0]
    task.details["modes"] = n
    distinct = sum(1 for pole in set(model.poles.tolist()) if pole.imag > 0)
    if n > 0 and 2 * distinct == model.poles.size and n > distinct:
        task.notes.append(
            f"{n} coordinates stand for {distinct} pairs of poles: a pair whose mode shape is not real, or whose "
            "residue has a rank above one, takes a coordinate for each."
        )
    return _model_of(parts, task)


def _model_of(parts: SecondOrderParts, task: Task) -> SecondOrder:
    return SecondOrder(
        mass=parts.mass,
        damping=parts.damping,
        stiffness=parts.stiffness,
        input=parts.input,
        position_output=parts.outputs[0],
        velocity_output=parts.outputs[1],
        direct=parts.direct,
        **task.model.common(),
    )
