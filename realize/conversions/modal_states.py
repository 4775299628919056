"""The modal form of partial fractions, with the transform from the states of its source where there is one."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from realize.conversions.changed import Changed
from realize.conversions.coordinates import MATRICES_UP_TO, explicit_states
from realize.conversions.exact_coordinates import setting_of
from realize.errors import Refused
from realize.forms.modal_blocks import listed_blocks
from realize.forms.modal_transform import ModalTransform, modal_transform
from realize.models import Offset, StateSpace

if TYPE_CHECKING:
    from realize.conversions.route import Task


def modal_by_eigenvectors(task: Task, model: StateSpace, record: dict[str, Any], caution: str, reason: str) -> Changed:
    """Return the modal form of partial fractions, with a transform by eigenvectors or the reason why there is none.

    Parameters
    ----------
    task : Task
        Of a state-space source.
    model : StateSpace
        The modal form.
    record, caution
        What the receipt says where there is no transform.
    reason : str
        Why the form does not come from the states.
    """
    time = model.time
    blocks = {"blocks": listed_blocks(model.A, time.seconds if time.sampled else None)}
    found = _transform(task, model)
    if isinstance(found, str):
        said = {"note": f"{record['note']}; nor does one follow from eigenvectors: {found}"}
        return Changed(model, record | said | blocks, (caution,), float("inf"))
    own: dict[str, Any] = {
        "form": "modal",
        "condition": found.condition if np.isfinite(found.condition) else None,
        "against": "states of the source",
        "transform_residual": found.residual,
        "note": f"{reason}; the transform to their modal form follows from eigenvectors",
    }
    if model.order is not None and model.order <= MATRICES_UP_TO:
        own |= {"transform": found.transform.tolist(), "back": found.back.tolist()}
    source = task.model
    offset = source.offset
    if offset is not None and offset.states is not None:
        states = tuple((found.back @ np.array(offset.states, dtype=float)).tolist())
        model = model.with_(offset=Offset(offset.inputs, offset.outputs, states))
    return Changed(model, own | blocks, (), found.condition)


def _transform(task: Task, model: StateSpace) -> ModalTransform | str:
    source = task.model
    assert isinstance(source, StateSpace)
    if model.E is not None:
        return "the form has a polynomial part of its own"
    if source.beyond_doubles:
        return "numbers of the source lie beyond the range of doubles"
    try:
        given = explicit_states(source, "modal")
        with np.errstate(all="ignore"):
            return modal_transform(given.A, given.B, given.C, (model.A, model.B, model.C), setting_of(task))
    except Refused as refusal:
        return str(refusal)
    except (np.linalg.LinAlgError, ValueError):
        return "the eigenvectors were not found in doubles"
