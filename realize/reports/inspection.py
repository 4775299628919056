"""The record of `inspect` as one screen of text: what the plant is, what is wrong with it, and what to do."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from realize.reports.look import PLAIN, Page, facts, laid_out, words
from realize.reports.numbers import clean, hertz, prefixed, short
from realize.reports.root_lists import roots_grid

#: Rows of the lists of poles and of zeros that one screen has room for.
POLE_ROWS, ZERO_ROWS = 8, 5
#: Hankel singular values that are written out.
HANKEL_SHOWN = 6
#: Signs of the digest, enough to tell two models apart by eye.
DIGEST_SHOWN = 23

#: Fields that have a place of their own, or none.
_PLACED = frozenset(
    (
        "file kind order minimal_order time period inputs outputs stable poles zeros channel_zeros fragility cautions "
        "findings realize digest receipts history hankel_singular_values hankel_errors hankel_basis normal_rank"
    ).split()
)


def inspect_table(record: Mapping[str, Any], *, page: Page = PLAIN) -> str:
    """Return the record of ``inspect`` as text: what the plant is, what is wrong with it, its poles and zeros.

    Fields that the record does not have are left out; long lists are cut, the record has all of them.
    """
    period = _period(record)
    rows: list[tuple[str, Any]] = []
    if "file" in record:
        rows.append(("file", clean(record["file"], 200)))
    rows.append(("kind", record.get("kind", "-")))
    if record.get("order") is not None:
        minimal = record.get("minimal_order")
        text = str(record["order"])
        if minimal is not None:
            text += " (minimal)" if minimal == record["order"] else f", of which {minimal} are needed (minimal order)"
        rows.append(("order", text))
    rows.append(
        (
            "time",
            "continuous"
            if period is None
            else f"sampled, {prefixed(period, 's', 4)} ({prefixed(1 / period, 'Hz', 4)})",
        )
    )
    for name in ("inputs", "outputs"):
        if record.get(name) is not None:
            rows.append((name, _signals(record[name])))
    if "stable" in record:
        rows.append(
            ("stable", {True: "yes", False: "NO", None: "not decided"}.get(record["stable"], str(record["stable"])))
        )
    rows += _dynamics(record) + _structure(record) + _further(record) + _hankel(record)
    fragility = record.get("fragility")
    if fragility is not None:
        rows.append(("fragility", f"{short(fragility)} (relative, one rounding of its numbers)"))
    if record.get("digest"):
        rows.append(("digest", clean(record["digest"])[:DIGEST_SHOWN]))
    parts: list[Any] = [facts(rows)]
    parts += _findings(record)
    for field, name, most in (("poles", "pole", POLE_ROWS), ("zeros", "zero", ZERO_ROWS)):
        roots = _roots_of(record, field)
        if roots is not None:
            parts += [words(""), roots_grid(roots, period, name, most)]
    parts += _channel_zeros(record, period)
    return laid_out(parts, page)


def _findings(record: Mapping[str, Any]) -> list[Any]:
    """Return what was found with what to do beneath, or plain cautions where there is nothing else."""
    findings = record.get("findings")
    if findings is None:
        findings = [{"what": text} for text in record.get("cautions") or []]
    if not findings:
        return []
    from rich.table import Table

    table = Table(box=None, show_header=False, pad_edge=False, padding=(0, 1, 0, 0))
    table.add_column(no_wrap=True)
    table.add_column(overflow="fold")
    for finding in findings:
        table.add_row(words("!", "yellow"), words(clean(finding.get("what") or "", 1000)))
        if finding.get("advice"):
            table.add_row(words(""), words("→ " + clean(finding["advice"], 1000), "green"))
    return [words(""), words("cautions", "bold"), table]


def _numbers(values: Any) -> list[float]:
    return [float(value) for value in values or [] if value is not None]


def _dynamics(record: Mapping[str, Any]) -> list[tuple[str, Any]]:
    """Return the range of the poles and the lightest damping."""
    present = [w for w in _numbers(record.get("frequency") if isinstance(record.get("frequency"), list) else []) if w]
    if not present:
        return []
    low, high = min(present), max(present)
    text = hertz(low, 4) if high <= low * (1 + 1e-9) else f"{hertz(low, 4)} to {hertz(high, 4)}"
    damped = [
        (z, w)
        for z, w in zip(record.get("damping") or [], record["frequency"], strict=True)
        if z is not None and w and 0 <= z < 0.5
    ]
    if damped:
        z, w = min(damped)
        text += f"; lightest damping {short(z)} at {hertz(w, 4)}"
    return [("dynamics", text)]


def _structure(record: Mapping[str, Any]) -> list[tuple[str, Any]]:
    """Return relative degrees and indices in a line."""
    parts = []
    degrees = record.get("relative_degree")
    if degrees:
        known = sorted({value for row in degrees for value in row if value is not None})
        if known:
            parts.append(f"relative degree {known[0]}" + (f" to {known[-1]}" if len(known) > 1 else ""))
        zero = sum(value is None for row in degrees for value in row)
        if zero:
            parts.append(f"{zero} channel{'s are' if zero > 1 else ' is'} identically zero")
    if record.get("normal_rank") is not None:
        parts.append(f"normal rank {record['normal_rank']}")
    for name, title in (("controllability_indices", "controllability"), ("observability_indices", "observability")):
        values = record.get(name)
        if values and (len(record.get("controllability_indices") or []) > 1 or len(values) > 1):
            shown = ", ".join(str(value) for value in values[:10]) + (", ..." if len(values) > 10 else "")
            parts.append(f"{title} indices {shown}")
    return [("structure", "; ".join(parts))] if parts else []


def _hankel(record: Mapping[str, Any]) -> list[tuple[str, Any]]:
    """Return the first and the last Hankel singular values, how good they are, and how many count."""
    values = record.get("hankel_singular_values")
    if not values:
        return []
    numbers = [entry.get("value") if isinstance(entry, Mapping) else entry for entry in values]
    text = ", ".join(short(value) for value in numbers[:HANKEL_SHOWN])
    if len(numbers) > HANKEL_SHOWN:
        text += f", ... {short(numbers[-1])} ({len(numbers)} in all)"
    rows: list[tuple[str, Any]] = [("Hankel values", text)]
    first = numbers[0]
    if first and len(numbers) > 1:
        counts = [(level, sum(value >= share * first for value in numbers)) for level, share in _LEVELS]
        text = ", ".join(f"{count} above {level}" for level, count in counts) + " of the first"
        errors = record.get("hankel_errors")
        if errors:
            worst = max((e / v for v, e in zip(numbers, errors, strict=True) if v), default=0.0)
            how = "proved within" if record.get("hankel_basis") == "proved" else "errors estimated, up to"
            text += f"; {how} {short(worst, 1)}, relative"
        rows.append(("", text))
    return rows


_LEVELS = (("1 %", 1e-2), ("1e-4", 1e-4), ("1e-8", 1e-8))


def _roots_of(record: Mapping[str, Any], field: str) -> list[tuple[complex, int]] | None:
    rows = record.get(field)
    if rows is None:
        return None
    return [(complex(row[0], row[1]), int(row[2]) if len(row) > 2 else 1) for row in rows]


def _signals(entries: Any) -> str:
    if isinstance(entries, int):
        return str(entries)
    texts = []
    for k, entry in enumerate(entries):
        name, unit = (entry.get("name", ""), entry.get("unit", "")) if isinstance(entry, Mapping) else (str(entry), "")
        texts.append(" ".join(part for part in (clean(name) or f"number {k}", unit and f"({clean(unit)})") if part))
    shown = ", ".join(texts[:8])
    return f"{len(texts)}: {shown}" + (f", and {len(texts) - 8} more" if len(texts) > 8 else "")


def _further(record: Mapping[str, Any]) -> list[tuple[str, Any]]:
    """Return the other plain fields of an inspection, in its order: frequencies in both units, steps as a route."""
    rows: list[tuple[str, Any]] = []
    for name, value in record.items():
        title = name.replace("_", " ")
        if name in _PLACED or value is None:
            continue
        if name == "steps":
            if value:
                rows.append((title, " → ".join(str(step) for step in value)))
        elif name == "dead_time":
            channels = [
                f"output {i}, input {j}: {prefixed(v, 's', 4)}"
                for i, r in enumerate(value)
                for j, v in enumerate(r)
                if v
            ]
            rows.append(
                (title, "; ".join(channels[:8]) + (f"; and {len(channels) - 8} more" if len(channels) > 8 else ""))
            )
        elif name.endswith("frequency") and isinstance(value, (int, float)):
            rows.append((title, f"{short(value, 4)} rad/s ({hertz(value, 4)})"))
        elif isinstance(value, (bool, int, float)):
            rows.append((title, short(value, 4)))
        elif isinstance(value, str):
            rows.append((title, clean(value, 200)))
        elif name == "descriptor":
            rows.append((title, ", ".join(f"{part} {number}" for part, number in value.items() if part != "regular")))
    return rows


def _channel_zeros(record: Mapping[str, Any], period: float | None) -> list[Any]:
    """Return the zeros channel by channel where there is nothing else and few channels, else how many there are."""
    channels = record.get("channel_zeros")
    if not channels:
        return []
    cells = [(i, j, zeros) for i, row in enumerate(channels) for j, zeros in enumerate(row)]
    if len(cells) > 4 or record.get("zeros") is not None:
        counts = [sum(int(zero[2]) for zero in zeros) for _, _, zeros in cells]
        number = str(counts[0]) if min(counts) == max(counts) else f"{min(counts)} to {max(counts)}"
        return [
            words(""),
            facts([("channel zeros", f"{number} in each of {len(cells)} channels (all in the record, --json)")]),
        ]
    parts: list[Any] = []
    for i, j, zeros in cells:
        roots = [(complex(zero[0], zero[1]), int(zero[2])) for zero in zeros]
        parts += [words(""), words(f"output {i}, input {j}", "bold"), roots_grid(roots, period, "zero", ZERO_ROWS)]
    return parts


def _period(record: Mapping[str, Any]) -> float | None:
    if record.get("period") is not None:
        return float(record["period"])
    time = record.get("time")
    if isinstance(time, Mapping) and time.get("domain") == "sampled":
        return float(time["period"]) if time.get("period") is not None else 1 / float(time["rate"])
    return None
