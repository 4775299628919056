"""The loop around a reduction: weights, the other half, what the loop loses, and what is licensed."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from realize.errors import Refused, UsageError
from realize.models import Model, StateSpace
from realize.steps.conversion import Conversion, model_of
from realize.steps.ordinary import states_of
from realize.verification.closed_loop import checked_loop, loop_record
from realize.verification.delayed_loop import delayed_record

Array = NDArray[np.float64]

MEASURED_LOOPS = (
    "Both loops were looked at themselves: stability by the eigenvalues of the whole loop, margins in double "
    "arithmetic where they are not marked as proved."
)


DELAYED_LOOPS = (
    "Both loops were looked at themselves, dead time included, in double arithmetic: a sampled one with its registers "
    "as states, a continuous one by the encirclements that its frequency response makes. Nothing of that is proved."
)


@dataclass(frozen=True)
class Weights:
    """Factors of inputs and outputs, for the plant diag(outputs) P diag(inputs); `stated` if the user gave both."""

    inputs: Array
    outputs: Array
    stated: bool
    given: bool

    def applied(self, model: StateSpace) -> StateSpace:
        """Return the weighted plant."""
        if not self.given:
            return model
        with np.errstate(over="ignore", under="ignore"):
            return self._checked(
                model,
                model.B * self.inputs,
                self.outputs[:, None] * model.C,
                self.outputs[:, None] * model.D * self.inputs,
            )

    def on_controller(self, model: StateSpace) -> StateSpace:
        """Return the controller of the weighted plant: diag(1 / inputs) K diag(1 / outputs)."""
        if not self.given:
            return model
        with np.errstate(over="ignore", under="ignore"):
            return self._checked(
                model,
                model.B / self.outputs,
                model.C / self.inputs[:, None],
                model.D / self.inputs[:, None] / self.outputs,
            )

    def _checked(self, model: StateSpace, B: Array, C: Array, D: Array) -> StateSpace:
        if not all(np.isfinite(matrix).all() for matrix in (B, C, D)):
            raise Refused("the weighted model does not fit into doubles; use other weights")
        return model.with_(B=B, C=C, D=D, decimals={}, receipts=())

    @property
    def least(self) -> float:
        """The smallest factor a channel of the difference is weighted with."""
        return float(self.inputs.min() * self.outputs.min()) if self.given else 1.0


def weights_of(plant: Model, inputs: Sequence[float] | None, outputs: Sequence[float] | None) -> Weights:
    """Return the weights, one a channel.

    Raises
    ------
    UsageError
        If there are neither one nor as many as channels, or a weight is not above zero.
    """
    p, m = plant.shape

    def spread(values: Sequence[float] | None, count: int, name: str) -> Array:
        if values is None:
            return np.ones(count)
        array = np.atleast_1d(np.asarray(values, dtype=float))
        if array.ndim != 1 or array.size not in (1, count):
            raise UsageError(f"--{name}-weight: {array.size} factors for {count} {name}s; give one, or one for each")
        if not np.all(np.isfinite(array) & (array > 0)):
            raise UsageError(f"--{name}-weight: every factor has to be a finite number above zero")
        return np.broadcast_to(array, (count,)).astype(float)

    stated = inputs is not None and outputs is not None
    given = inputs is not None or outputs is not None
    return Weights(spread(inputs, m, "input"), spread(outputs, p, "output"), stated, given)


@dataclass(frozen=True)
class Around:
    """The other half of the loop: a controller, or the plant where the model is a controller."""

    model: StateSpace
    controller: bool
    dead_time: bool

    def halves(self, model: StateSpace, weights: Weights) -> tuple[StateSpace, StateSpace]:
        """Return (plant, controller) with a model in its place, weighted."""
        if self.controller:
            return weights.applied(model), weights.on_controller(self.model)
        # the weights belong to the model that is reduced: the plant takes their inverses
        return weights.on_controller(self.model), weights.applied(model)


def around(source: Model, controller: Model | Conversion | None, plant: Model | Conversion | None) -> Around | None:
    """Return the other half of the loop, checked against the model."""
    if controller is not None and plant is not None:
        raise UsageError("give a controller (to a plant) or a plant (to its controller), not both")
    if controller is None and plant is None:
        return None
    other = model_of(controller if controller is not None else plant)  # type: ignore[arg-type]
    if controller is not None:
        checked_loop(source, other)
    else:
        checked_loop(other, source)
    dead = any(m.dead_time is not None for m in (source, other))
    return Around(states_of(other)[0], controller is not None, dead)


def loop_details(loop: Around, full: StateSpace, reduced: StateSpace, weights: Weights) -> dict[str, Any]:
    """Return the loops with the full and with the reduced model, and what is lost between them."""
    look = delayed_record if loop.dead_time else loop_record
    one, two = (look(*loop.halves(model, weights)) for model in (full, reduced))

    def lost(name: str) -> float | None:
        before, after = one.get(name), two.get(name)
        if before is None or after is None or not np.isfinite(before):
            return None
        return float(before - after) if np.isfinite(after) else None

    return {
        "of": "plant" if loop.controller else "controller",
        "dead_time": loop.dead_time,
        "full": one,
        "reduced": two,
        "loss": {name: lost(name) for name in ("stability_margin", "gain_margin", "phase_margin")},
    }


def loop_cautions(details: dict[str, Any], licensed: float | None) -> list[str]:
    """Return what has to be said about the loops."""
    full, reduced = details["full"], details["reduced"]
    notes = []
    for name, one in (("full", full), ("reduced", reduced)):
        if one["stable"] is None:
            notes.append(f"Whether the loop u = -K y with the {name} model is stable is not known: {one['note']}.")
        elif not one["stable"]:
            notes.append(f"The loop u = -K y with the {name} model is NOT stable.")
    if full["stable"] and reduced["stable"]:
        before, after = full["stability_margin"], reduced["stability_margin"]
        if after < before / 2 or before < after / 2:
            notes.append(
                f"The stability margin b(P, K) is {before:.3g} with the full model and {after:.3g} with the reduced "
                "one: do not judge the loop by the reduced model."
            )
        if licensed is not None and details["of"] == "plant":
            lower = reduced.get("lower")
            if lower is not None and lower > licensed:
                notes.append(
                    f"This controller is licensed: its margin with the reduced model, at least {lower:.3g}, "
                    f"exceeds {licensed:.3g}."
                )
            else:
                notes.append(
                    f"The licence does not cover this controller: its margin with the reduced model, {after:.3g}, "
                    f"was not shown to exceed {licensed:.3g}. The loop with the full model was looked at itself."
                )
    notes.append(DELAYED_LOOPS if details["dead_time"] else MEASURED_LOOPS)
    return notes
