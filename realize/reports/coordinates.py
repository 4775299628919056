"""What a change of coordinates says beside its claims, for people: its condition and the form's own facts."""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping, Sequence
from typing import Any

from realize.reports.numbers import clean, short

#: Sizes and indices named one by one; of more the rest is counted.
SHOWN = 12
_PARTS = (
    ("reachable_and_observable", "reachable and observable"),
    ("reachable_only", "reachable only"),
    ("observable_only", "observable only"),
    ("neither", "neither"),
)


def coordinates_rows(details: Mapping[str, Any]) -> list[tuple[str, str]]:
    """Return title and text of what a receipt's details say of coordinates: two rows at most, none without a form.

    Parameters
    ----------
    details : mapping
        ``receipt.details`` of a conversion.
    """
    record = details.get("coordinates")
    if not isinstance(record, Mapping) or "form" not in record:
        return []
    condition = record.get("condition")
    text = f"{clean(record['form'])}, "
    text += f"condition {short(condition, 3)}" if condition is not None else "no transform from the source's states"
    own = "; ".join(part for part in (_dimensions(record), _steps(record), _indices(record), _blocks(record)) if part)
    return [("coordinates", text), *([("of the form", own)] if own else [])]


def _dimensions(record: Mapping[str, Any]) -> str:
    dimensions = record.get("dimensions")
    texts = []
    if isinstance(dimensions, Mapping):
        texts = [f"{dimensions[name]} {words}" for name, words in _PARTS if name in dimensions]
    for what in ("reachable", "observable"):
        if what in record and f"un{what}" in record:
            texts.append(f"{record[what]} {what}, {record[f'un{what}']} un{what}")
    if texts and record.get("decided"):
        texts.append(f"decided {clean(record['decided'])}")
    return ", ".join(texts)


def _steps(record: Mapping[str, Any]) -> str:
    if record.get("sizes"):
        return f"steps of {_counted(record['sizes'])}"
    if "subdiagonals" in record:
        count = record["subdiagonals"]
        return f"{count} subdiagonal" + ("" if count == 1 else "s")
    spread = record.get("spread")
    if isinstance(spread, Mapping) and {"before", "after"} <= set(spread):
        return f"largest over smallest entry {short(spread['before'], 2)} before, {short(spread['after'], 2)} after"
    return ""


def _indices(record: Mapping[str, Any]) -> str:
    texts = []
    for name in ("controllability_indices", "observability_indices"):
        if record.get(name):
            texts.append(f"{name.replace('_', ' ')} {_listed(record[name])}")
    values = record.get("hankel_singular_values") or record.get("characteristic_values")
    if values:
        title = "Hankel values" if record.get("hankel_singular_values") else "characteristic values"
        texts.append(f"{title} {short(values[0], 3)} to {short(values[-1], 3)}")
    return "; ".join(texts)


def _blocks(record: Mapping[str, Any]) -> str:
    blocks = record.get("blocks")
    if not isinstance(blocks, Sequence) or not blocks:
        return ""
    text = f"{len(blocks)} block{'s' if len(blocks) > 1 else ''} of {_counted([block['size'] for block in blocks])}"
    separations = [block["separation"] for block in blocks if block.get("separation") is not None]
    return text + (f", smallest separation {short(min(separations), 2)}" if separations else "")


def _counted(sizes: Sequence[int]) -> str:
    """Return sizes as they stand, or, where they are many, how often each occurs."""
    if len(sizes) <= SHOWN:
        return _listed(sizes)
    return ", ".join(f"{size} ({count} times)" for size, count in sorted(Counter(sizes).items(), reverse=True)[:SHOWN])


def _listed(values: Sequence[int]) -> str:
    shown = ", ".join(str(value) for value in values[:SHOWN])
    return shown + (f" and {len(values) - SHOWN} more" if len(values) > SHOWN else "")
