"""What `inspect` says of the structure of a model: modes of a second-order one, index of a descriptor."""

from __future__ import annotations

from typing import Any

import numpy as np

from realize.conversions.descriptor import counts, has_descriptor, structure_of
from realize.forms.inversion import equilibrated
from realize.models import Model, SecondOrder, StateSpace


def modes_of(model: Model, poles: list[Any]) -> list[dict[str, float]] | None:
    """Return the modes of a second-order model by rising frequency, None for other kinds.

    Of each pole p (a pair once): ``frequency`` |p| in rad/s, undamped, ``damping`` ratio -Re p / |p| (negative where
    unstable, 1 for a real stable pole), and ``multiplicity``. A pole at the origin is a rigid-body mode: frequency 0,
    damping 0.
    """
    if not isinstance(model, SecondOrder):
        return None
    modes = [
        {
            "frequency": float(np.hypot(re, im)),
            "damping": float(-re / np.hypot(re, im)) + 0.0 if re or im else 0.0,
            "multiplicity": int(count),
        }
        for re, im, count in poles
        if im >= 0
    ]
    return sorted(modes, key=lambda mode: (mode["frequency"], mode["damping"]))


def descriptor_of(model: Model) -> dict[str, Any] | None:
    """Return index and counts of a descriptor model, None without E, with E = I or beyond 1000 states.

    ``regular``, ``index``, ``finite`` and ``infinite`` eigenvalues, ``impulsive`` modes: the rank of E less the finite
    ones. A second-order model counts where its mass matrix is singular.

    Raises
    ------
    SingularPencil
    """
    if isinstance(model, SecondOrder):
        pencil = model.pencil
        model = StateSpace(A=pencil.A, B=pencil.B, C=pencil.C, D=pencil.D, E=pencil.E)
        if np.linalg.matrix_rank(equilibrated(pencil.E)) == pencil.E.shape[0]:
            return None
    if not has_descriptor(model):
        return None
    assert isinstance(model, StateSpace)
    found = structure_of(model)
    return None if found is None else counts(found)
