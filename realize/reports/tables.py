"""Receipts and records as text for people: facts first, the verdict in words, 80 columns unless there is more room."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from typing import Any

from realize.reports.coordinates import coordinates_rows
from realize.reports.look import PLAIN, Page, bullets, facts, grid, laid_out, words
from realize.reports.numbers import clean, hertz, prefixed, short
from realize.schema import Claim, ModelMark, Receipt

VERDICTS = {True: "yes", False: "NO", None: "open"}
_STYLES = {"yes": "green", "NO": "bold red", "open": "yellow"}
_OPINIONS = {
    "agrees": "agrees",
    "disagrees": "DISAGREES",
    "failed": "failed (the result stands as it is)",
    "not-applicable": "not applicable",
    "not-asked": "not asked for",
}


def receipt_table(conversion: Any, *, page: Page = PLAIN) -> str:
    """Return the receipt of one step as a short table.

    Parameters
    ----------
    conversion : Receipt, (model, receipt), or an object with ``receipt``
    page : Page, optional
    """
    receipt = _receipt_of(conversion)
    head = [("step", _joined(receipt.step, receipt.method and f"by {receipt.method}"))]
    head.append(("from", _mark(receipt.source)))
    head.append(("to", _mark(receipt.result)))
    if len(receipt.route) > 2:
        head.append(("route", " → ".join(clean(stop) for stop in receipt.route)))
    head += coordinates_rows(receipt.details)
    parts: list[Any] = [facts(head)]
    if receipt.claims:
        parts += [words(""), claims_grid(receipt.claims)]
    tail: list[tuple[str, Any]] = []
    if receipt.fragility:
        tail.append(("fragility", _fragility(receipt.fragility)))
    tail.append(("second opinion", _opinion(receipt)))
    tail.append(("time taken", prefixed(receipt.seconds, "s")))
    parts += [words(""), facts(tail)]
    parts += _cautions(receipt.cautions)
    parts += [words(""), verdict(receipt)]
    return laid_out(parts, page)


def verdict(receipt: Receipt) -> Any:
    """Return one sentence on whether the limits are kept."""
    limited = [claim for claim in receipt.claims if claim.limit is not None]
    if receipt.failed:
        names = ", ".join(dict.fromkeys(claim.name for claim in receipt.failed))
        return words(f"FAILED: {names} beyond the limit.", "bold red")
    if receipt.open:
        names = ", ".join(dict.fromkeys(claim.name for claim in receipt.open))
        if any(claim.value is None for claim in receipt.open):
            return words(f"OPEN: {names} could not be decided.", "yellow")
        return words(f"OPEN: {names} within the limit where measured, with no bound on what lies between.", "yellow")
    if limited:
        return words(f"All {len(limited)} limits are kept." if len(limited) > 1 else "The limit is kept.", "green")
    return words("No limits were set: the values above are for you to judge.")


def claims_grid(claims: Iterable[Claim]) -> Any:
    """Return the claims as rows: name, value with uncertainty, limit, basis, kept or not, and where and why beneath."""
    from rich.text import Text

    rows: list[list[Any]] = []
    for claim in claims:
        kept = "" if claim.limit is None else VERDICTS[claim.holds]
        rows.append(
            [claim.name, value_text(claim), short(claim.limit), claim.basis, Text(kept or "-", _STYLES.get(kept, ""))]
        )
    columns = [("claim", "left"), ("value", "left"), ("limit", "right"), ("basis", "left"), ("kept", "left")]
    from rich.console import Group

    remarks = [(claim.name, text) for claim in claims if (text := _remark(claim))]
    table = grid(columns, rows)
    return Group(table, words(""), facts(remarks)) if remarks else table


def value_text(claim: Claim) -> str:
    """Return the value of a claim with its uncertainty and unit, such as ``1.2e-9 ± 3e-12 relative``."""
    if claim.infinite:
        return "infinite"
    if claim.value is None:
        return "not available"
    if claim.name == "stability":
        return "stable" if claim.value else "UNSTABLE"
    if claim.name == "order":
        return short(int(claim.value) if float(claim.value).is_integer() else claim.value)
    text = short(claim.value)
    if claim.uncertainty:
        text += f" ± {short(claim.uncertainty, 2)}"
    unit = "" if claim.unit == "1" else clean(claim.unit, 24)
    return _joined(text, unit)


def _remark(claim: Claim) -> str:
    parts = []
    if claim.relative is not None and claim.unit != "relative":
        parts.append(f"{short(claim.relative)} relative to the largest gain")
    frequency = claim.where.get("frequency")
    if isinstance(frequency, (int, float)) and claim.value:
        parts.append(f"at {short(frequency, 4)} rad/s ({hertz(frequency, 4)})")
    spots = [f"{key} {claim.where[key]}" for key in ("output", "input") if claim.where.get(key) is not None]
    if spots and claim.value:
        parts.append(", ".join(spots))
    if claim.note:
        parts.append(clean(claim.note, 300))
    return "; ".join(parts)


def _receipt_of(conversion: Any) -> Receipt:
    if isinstance(conversion, Receipt):
        return conversion
    if isinstance(conversion, tuple):
        return conversion[1]
    return conversion.receipt


def _joined(*parts: Any) -> str:
    return " ".join(str(part) for part in parts if part)


def _mark(mark: ModelMark) -> str:
    return mark.kind if mark.order is None else f"{mark.kind}, order {mark.order}"


def _fragility(fragility: Mapping[str, float | None]) -> str:
    return (
        ", ".join(f"{name} {short(value)}" for name, value in fragility.items())
        + " (relative, one rounding of its numbers)"
    )


def _opinion(receipt: Receipt) -> str:
    opinion = receipt.second_opinion
    text = _OPINIONS.get(opinion.status, opinion.status)
    if opinion.by and opinion.status not in ("not-asked",):
        text = f"{clean(opinion.by)} {text}"
    if opinion.agreement is not None:
        text += f", difference {short(opinion.agreement)}"
    return f"{text}; {clean(opinion.note, 300)}" if opinion.note else text


def _cautions(cautions: Sequence[str]) -> list[Any]:
    return [words(""), words("cautions", "bold"), bullets([clean(text, 1000) for text in cautions])] if cautions else []


def compare_table(record: Mapping[str, Any], *, page: Page = PLAIN) -> str:
    """Return the record of ``compare`` as text.

    Parameters
    ----------
    record : mapping
        Claims by name, or ``comparisons``: a list of such mappings, each with the names of its two models under ``a``
        and ``b`` where given. A claim is a `Claim` or its plain record.
    """
    parts: list[Any] = []
    for number, one in enumerate(record.get("comparisons") or [record]):
        if number:
            parts.append(words(""))
        pair = [clean(one[key], 100) for key in ("a", "b") if isinstance(one.get(key), str)]
        if pair:
            parts.append(words(" against ".join(reversed(pair)), "bold"))
        claims = _claims_in(one)
        parts.append(claims_grid(claims) if claims else words("nothing could be compared"))
        parts += _cautions(one.get("cautions") or [])
    if "comparisons" in record:
        parts += _cautions(record.get("cautions") or [])
    return laid_out(parts, page)


def _claims_in(record: Mapping[str, Any]) -> list[Claim]:
    import msgspec

    listed = record["claims"] if isinstance(record.get("claims"), list) else list(record.values())
    names = [None] * len(listed) if isinstance(record.get("claims"), list) else list(record)
    claims = []
    for name, entry in zip(names, listed, strict=True):
        if isinstance(entry, Claim):
            claims.append(entry)
        elif isinstance(entry, Mapping) and "value" in entry:
            claims.append(msgspec.convert({"name": name, **entry} if name else dict(entry), Claim))
    return claims


def fit_table(candidates: Iterable[Mapping[str, Any]], *, page: Page = PLAIN) -> str:
    """Return the orders that a fit or a reduction tried as a table, the kept one marked.

    Parameters
    ----------
    candidates : iterable of mappings
        ``order``, and what there is of ``rms`` (relative misfit), ``weighted`` (1 = as large as the noise),
        ``bound`` (of a reduction's error), ``criterion`` (smaller is better), ``held_out`` (misfit/noise of lines left
        out), ``correlation`` (of neighbouring misfits), ``spread`` (largest deviation of a pole relative to its
        distance from the axis), ``cancelling`` (modes that may be noise), ``kept``, ``note``.
    """
    listed = [dict(candidate) for candidate in candidates]
    if not listed:
        return laid_out([words("no order was tried")], page)
    columns = [("order", "right")]
    cells = [[str(one.get("order", "-")) for one in listed]]
    for field, name, digits in _CANDIDATE:
        values = [one.get(field) for one in listed]
        if any(value is not None for value in values):
            columns.append((name, "right"))
            cells.append([short(value, digits) for value in values])
    cells.append(["kept" if one.get("kept") else "" for one in listed])
    cells.append([clean(one.get("note") or "", 200) for one in listed])
    columns += [("", "left"), ("", "left")]
    filled = [k for k, column in enumerate(cells) if any(column)]
    rows = [[cells[k][row] for k in filled] for row in range(len(listed))]
    return laid_out([grid([columns[k] for k in filled], rows)], page)


_CANDIDATE = (
    ("rms", "misfit", 3),
    ("weighted", "weighted", 3),
    ("bound", "error bound", 3),
    ("criterion", "criterion", 6),
    ("held_out", "held out", 3),
    ("correlation", "alike", 2),
    ("spread", "poles ±", 2),
    ("cancelling", "doubtful", 2),
)


def history_table(record: Mapping[str, Any], *, page: Page = PLAIN) -> str:
    """Return the record of ``inspect --history`` as text: one line a step, and whether the chain is whole."""
    rows = []
    for number, one in enumerate(record["history"], start=1):
        error, total = one.get("error"), one.get("accumulated_error")
        if not one.get("measure"):
            words_for = "measured anew" if one["step"] in ("fit", "sample") else "-"
        else:
            words_for = "not bounded" if error is None else short(error)
        rows.append(
            [
                str(number),
                clean(one["step"]),
                _place(one["source"]),
                _place(one["result"]),
                words_for,
                "not bounded" if total is None else short(total),
                ", ".join(one["failed"]) or "-",
            ]
        )
    columns = [
        ("", "right"),
        ("step", "left"),
        ("from", "left"),
        ("to", "left"),
        ("error", "right"),
        ("so far", "right"),
        ("failed claims", "left"),
    ]
    if not any(one["failed"] for one in record["history"]):
        columns, rows = columns[:-1], [row[:-1] for row in rows]
    nothing = "no receipts: nothing is known of how this model came about"
    parts: list[Any] = [grid(columns, rows) if rows else words(nothing)]
    edited = record.get("edited") or []
    if edited:
        parts += _cautions([f"Changed by other means {place}: the digests do not fit." for place in edited])
    elif rows:
        parts.append(words("Every digest fits: nothing was changed between the steps."))
    return laid_out(parts, page)


def _place(mark: Mapping[str, Any]) -> str:
    order = "" if mark.get("order") is None else f", {mark['order']}"
    return f"{clean(mark['kind'])}{order}"
