"""The verb `demo`: the whole job on the invented axis of `realize.testing.scenario`."""

from __future__ import annotations

import time
from pathlib import Path
from typing import Any

import numpy as np

from realize.errors import InputError
from realize.steps.compare import compare
from realize.steps.conversion import Conversion
from realize.steps.convert import convert
from realize.steps.fit import fit
from realize.steps.reduce import reduce

#: What the demo asks of the reduced model: largest difference relative to the largest gain.
DEMO_ERROR = 0.05


def fresh_folder(wanted: str | None) -> Path:
    """Make the folder for the demo: the one asked for, if absent or empty, else realize-demo with the next number."""
    try:
        if wanted is not None:
            folder = Path(wanted)
            folder.mkdir(parents=True, exist_ok=True)
            if any(folder.iterdir()):
                raise InputError(
                    "a folder that is not empty", "a folder that is empty or does not exist yet", file=wanted
                )
            return folder
        for number in range(1, 10_000):
            folder = Path("realize-demo" if number == 1 else f"realize-demo-{number}")
            try:
                folder.mkdir()
            except FileExistsError:
                continue
            return folder
    except OSError as error:
        raise InputError(
            f"cannot be made ({error.strerror})", "a folder that can be written", file=str(wanted or ".")
        ) from None
    raise InputError("ten thousand demo folders", "one of them removed")


def run_demo(seed: int) -> tuple[dict[str, Conversion], dict[str, Any]]:
    """Measure, fit, convert and reduce; return the data's conversions by file name, and the record.

    Parameters
    ----------
    seed : int
        Seed of the invented measurement noise.
    """
    from realize.testing.scenario import bench_axis, bench_axis_truth

    started = time.perf_counter()
    data = bench_axis(seed)
    fitted = fit(data)
    sections = convert(fitted, "zero-pole-gain")
    reduced = reduce(fitted, error=DEMO_ERROR)
    truth = compare(bench_axis_truth(), fitted, reduced)
    record: dict[str, Any] = {
        "step": "demo",
        "seed": seed,
        "lines": int(data.radians.size),
        "fitted": _short(fitted),
        "converted": _short(sections),
        "reduced": _short(reduced),
        "against_the_invented_truth": {
            "fitted": truth["comparisons"][0]["peak-error"]["value"],
            "reduced": truth["comparisons"][1]["peak-error"]["value"],
        },
        "seconds": 0.0,
    }
    record["seconds"] = round(time.perf_counter() - started, 3)
    assert np.isfinite(record["seconds"])
    return {"fitted": fitted, "zero-pole-gain": sections, "reduced": reduced}, record


def _short(conversion: Conversion) -> dict[str, Any]:
    receipt = conversion.receipt
    return {
        "kind": receipt.result.kind,
        "order": receipt.result.order,
        "claims": {claim.name: claim.value for claim in receipt.claims},
        "failed": [claim.name for claim in receipt.failed],
    }
