"""What tests of runs share."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

#: A job with one conversion.
HEAD = 'realize = 1\ninputs = "plants/*.json"\noutput = "made"\n'
CONVERT = '[[steps]]\nverb = "convert"\nto = "state-space"\noutput = "{name}.json"\nsecond-opinion = false\n'


def plant(k: int) -> dict[str, Any]:
    """A plant of order two, different for each number."""
    return {
        "realize": 1,
        "kind": "transfer-function",
        "numerator": [1.0, 0.5 + k / 7],
        "denominator": [1.0, 0.25 + k / 3, 4.0],
    }


def records_of(folder: Path, job: str = "jobs") -> list[dict[str, Any]]:
    """The records of a job."""
    return [json.loads(line) for line in (folder / "made" / f"{job}.records.jsonl").read_text().splitlines()]


def digests_of(folder: Path) -> dict[str, str]:
    """Name and digest of each result."""
    import realize
    from realize.models import mark

    made = sorted((folder / "made").glob("p*.json"))
    return {path.name: mark(realize.read(path)).digest for path in made}
