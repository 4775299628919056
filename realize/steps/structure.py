"""What `inspect` says of the structure of a model: modes of a second-order one."""

from __future__ import annotations

from typing import Any

import numpy as np

from realize.models import Model, SecondOrder


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
