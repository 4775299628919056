"""Numbers and names as people read them: few digits, prefixes, nothing that a terminal or a font could trip over."""

from __future__ import annotations

import math
from typing import Any

_PREFIXES = {-12: "p", -9: "n", -6: "µ", -3: "m", 0: "", 3: "k", 6: "M", 9: "G", 12: "T"}


def short(value: Any, digits: int = 3) -> str:
    """Return a number with a few significant digits: ``0.0123``, ``1.5e-12``; words for what is no number."""
    if value is None:
        return "-"
    if isinstance(value, bool):
        return "yes" if value else "no"
    if isinstance(value, int) and abs(value) < 10**9:
        return str(value)
    try:
        number = float(value)
    except OverflowError:
        return "beyond doubles"
    if math.isnan(number):
        return "undefined"
    if math.isinf(number):
        return "infinite" if number > 0 else "-infinite"
    if number == 0:
        return "0"
    text = f"{number:.{digits}g}"
    mantissa, mark, exponent = text.partition("e")
    if not mark:
        return text
    if "." in mantissa:
        mantissa = mantissa.rstrip("0").rstrip(".")
    power = int(exponent)
    # 1.23e+03 reads better as 1230 where that pretends no more digits than zeros
    if 0 <= power < 6:
        return f"{float(text):.0f}"
    return f"{mantissa}e{power}"


def prefixed(value: float, unit: str, digits: int = 3) -> str:
    """Return a value with a prefix of the unit, such as ``2.4 kHz``; powers of ten outside 1e-12 to 1e15."""
    if not math.isfinite(value) or value == 0:
        return f"{short(value, digits)} {unit}"
    rounded = float(f"{value:.{digits - 1}e}")
    power = 3 * math.floor(math.log10(abs(rounded)) / 3 + 1e-12)
    if power not in _PREFIXES:
        return f"{short(value, digits)} {unit}"
    return f"{short(rounded / 10.0**power, digits)} {_PREFIXES[power]}{unit}"


def hertz(radians: float, digits: int = 3) -> str:
    """Return an angular frequency (rad/s) as Hz with a prefix."""
    return prefixed(radians / (2 * math.pi), "Hz", digits)


def clean(text: Any, longest: int = 60) -> str:
    """Return text on one line without control characters, cut in the middle when it is long."""
    line = "".join(letter if letter.isprintable() else " " for letter in str(text))
    line = " ".join(line.split())
    if len(line) <= longest:
        return line
    head = (longest - 1) * 2 // 3
    return line[:head] + "…" + line[len(line) - (longest - 1 - head) :]


def channel_name(model: Any, output: int, column: int, longest: int = 60) -> str:
    """Return ``input → output`` with the signals' names, or their indices where they have none."""
    source = model.inputs[column].name or f"input {column}"
    target = model.outputs[output].name or f"output {output}"
    each = max(8, (longest - 3) // 2)
    return f"{clean(source, each)} → {clean(target, each)}"


def channel_unit(model: Any, output: int, column: int) -> str:
    """Return the unit of a channel's response, such as ``(rad/s)/(N*m)``; empty where both signals have none."""

    def wrapped(unit: str) -> str:
        return f"({unit})" if any(sign in unit for sign in "/* ·") else unit

    above, below = clean(model.outputs[output].unit, 16), clean(model.inputs[column].unit, 16)
    if not above and not below:
        return ""
    if not below:
        return above
    return f"{wrapped(above) or '1'}/{wrapped(below)}"
