"""Names of table columns: what a header such as ``point1_real`` or ``Frequency [kHz]`` says about its column.

A name is a role, a unit and the label of a channel, in any order and case, joined by blanks,
``_``, ``-``, ``.`` or ``:``. The unit may stand in brackets or behind a slash.

- frequency: ``frequency``, ``freq``, ``f`` with Hz, kHz, MHz, GHz, mHz or rad/s; ``omega`` or ``w`` (rad/s); ``GHz``
- real part and imaginary part: ``real``, ``re``; ``imaginary``, ``imag``, ``im``
- magnitude: ``magnitude``, ``mag``, ``abs``, ``amplitude``, ``gain`` (linear, or dB)
- phase: ``phase``, ``arg``, ``angle`` (deg or rad)
- ``deviation``, ``std``, ``sigma``: one standard deviation; ``coherence``, ``coh``
- data over time: ``time`` or ``t`` (s unless said: ms, us, ns); ``input`` or ``u``, ``output`` or ``y`` with the name
  of the signal before or behind; ``impulse`` and ``step`` with the label of a channel
- ``-`` or ``skip``: a column to leave out

The label of a channel is the name of an output, or ``output/input``; no label is the only channel.
"""

from __future__ import annotations

import re
from dataclasses import dataclass, replace

from realize.errors import InputError

#: unit of frequency -> power of ten, unit that is kept
FREQUENCY_UNITS = {
    "hz": (0, "Hz"),
    "khz": (3, "Hz"),
    "mhz": (6, "Hz"),
    "ghz": (9, "Hz"),
    "millihz": (-3, "Hz"),
    "rad/s": (0, "rad/s"),
}
UNITS = {
    **{unit: unit for unit in FREQUENCY_UNITS},
    "rads": "rad/s",
    "db": "db",
    "lin": "linear",
    "linear": "linear",
    "deg": "deg",
    "degree": "deg",
    "degrees": "deg",
    "°": "deg",
    "rad": "rad",
    "radian": "rad",
    "radians": "rad",
}
ROLES = {
    "frequency": ("frequency", "freq", "f", "omega", "w", "ω", "angular frequency", "angular_frequency"),
    "real": ("real part", "real", "realpart", "re"),
    "imaginary": ("imaginary part", "imag part", "imaginary", "imag", "imagpart", "im"),
    "magnitude": ("magnitude", "mag", "abs", "absolute", "amplitude", "ampl", "gain", "modulus"),
    "phase": ("phase", "phase angle", "ph", "arg", "argument", "angle", "ang"),
    "deviation": ("standard deviation", "standard_deviation", "deviation", "std", "stdev", "stddev", "sigma"),
    "coherence": ("coherence", "coh"),
}
#: unit of time -> power of ten
TIME_UNITS = {"s": 0, "ms": -3, "us": -6, "ns": -9}
_TIME_SPELLINGS = {"sec": "s", "second": "s", "seconds": "s", "µs": "us", "μs": "us"}
#: Roles of data over time -> the words for them; numbered ones such as y2 name a signal.
TIME_ROLES = {
    "time": ("time", "t"),
    "input": ("input", "in", "u", "excitation"),
    "output": ("output", "out", "y"),
    "impulse": ("impulse response", "impulse_response", "impulse"),
    "step": ("step response", "step_response", "step"),
}
#: Longest name of a column, characters.
MAX_NAME = 300
_ANGULAR = ("omega", "w", "ω", "angular frequency", "angular_frequency")
_ROLE_OF = {word: role for role, words in ROLES.items() for word in words}
_WORDS = "|".join(re.escape(word) for word in sorted(_ROLE_OF, key=len, reverse=True))
_LAST = re.compile(rf"(?P<label>.*?)(?:^|[\s_\-.:]+)(?P<role>{_WORDS})", re.IGNORECASE | re.DOTALL)
_FIRST = re.compile(rf"(?P<role>{_WORDS})[\s_\-.:]+(?P<label>.*)", re.IGNORECASE | re.DOTALL)
_CAMEL = re.compile(r"(?P<role>Re|Im|Mag|Phase|Ph|Arg|Abs|Real|Imag)(?P<label>[A-Z].*)", re.DOTALL)
_CALL = re.compile(rf"(?P<role>{_WORDS})\((?P<label>.*)\)", re.IGNORECASE | re.DOTALL)
_BRACKETS = re.compile(r"(.*?)[\s_/]*[\[(]([^\[\]()]*)[\])]", re.DOTALL)
_RADIANS = re.compile(r"rad(?:ian)?s?\s*(?:/|_?per_?|_)\s*s(?:ec(?:ond)?)?", re.IGNORECASE)
_UNITS = "|".join(sorted(map(re.escape, UNITS), key=len, reverse=True))
_UNIT_LAST = re.compile(rf"(.*?)(?:^|[\s_/\-.:]+)({_UNITS})", re.IGNORECASE | re.DOTALL)
_LOGARITHM = re.compile(r"(?:20\s*)?log(?:10)?\s*[(|\s]*\s*ma?g\.?(?:nitude)?\s*[)|]*", re.IGNORECASE)


@dataclass(frozen=True, slots=True)
class Column:
    """Role (a key of `ROLES`, ``skip``, or empty if not recognised), unit (empty if not said) and label of a column."""

    name: str
    role: str
    unit: str = ""
    label: str = ""
    #: Unit of the quantity itself, such as V or m/N, as it is written.
    quantity: str = ""


def parse(name: str, over_time: bool = False) -> Column:
    """Return what the name of a column says; the role is empty where it says nothing that is known.

    ``over_time``: names of data over time count first, so that ``output_angle`` is an output and no phase.
    """
    shown = name.strip()
    if len(shown) > MAX_NAME:
        return Column(shown, "")
    if shown.lower() in ("-", "skip"):
        return Column(shown, "skip")
    if _LOGARITHM.fullmatch(shown):
        return Column(shown, "magnitude", "db")
    text = _RADIANS.sub("rad/s", shown)
    unit = ""
    call = _CALL.fullmatch(text)
    if call is not None and call["label"].strip() and not _unit(call["label"]):
        role = _ROLE_OF[call["role"].lower()]
        if role != "frequency":
            return _finished(shown, role, "", call["label"], call["role"])
    brackets = _BRACKETS.fullmatch(text)
    if brackets is not None:
        unit, text = _unit(brackets[2]), brackets[1]
    else:
        behind = _UNIT_LAST.fullmatch(text)
        if behind is not None:
            unit, text = _unit(behind[2]), behind[1]
    text = text.strip(" \t_-.:")
    if not text and unit:
        role = "frequency" if unit in FREQUENCY_UNITS else {"db": "magnitude", "deg": "phase"}.get(unit, "")
        return Column(shown, role, unit)
    if over_time:
        found = _over_time(shown, text, brackets[2].strip() if brackets is not None else "")
        if found is not None:
            return found
    match = _LAST.fullmatch(text) or _FIRST.fullmatch(text) or _CAMEL.fullmatch(text)
    if match is None:
        found = _over_time(shown, text, brackets[2].strip() if brackets is not None else "")
        if found is not None:
            return found
        if unit == "db":
            return Column(shown, "magnitude", unit, text)
        if unit == "deg":
            return Column(shown, "phase", unit, text)
        return Column(shown, "")
    word = match["role"].lower()
    found = _finished(shown, _ROLE_OF[word], unit, match["label"], word)
    if brackets is not None and not unit and found.role not in ("", "frequency", "phase", "coherence"):
        return replace(found, quantity=brackets[2].strip())
    return found


def _over_time(shown: str, text: str, unit: str) -> Column | None:
    """Return what the name of a column of data over time says; None where it is none."""
    for role, words in TIME_ROLES.items():
        spelled = "|".join(re.escape(word) for word in words)
        if role == "time":
            behind = re.fullmatch(rf"(?:{spelled})(?:[\s_/\-.:]+(\w+))?", text, re.IGNORECASE)
            if behind is not None:
                said = unit or behind[1] or "s"
                said = _TIME_SPELLINGS.get(said, said)
                return Column(shown, "time" if said in TIME_UNITS else "", said if said in TIME_UNITS else "")
            continue
        first = re.fullmatch(rf"(?:{spelled})(?:[\s_\-.:]+(.*))?", text, re.IGNORECASE | re.DOTALL)
        last = re.fullmatch(rf"(.*)[\s_\-.:]+(?:{spelled})", text, re.IGNORECASE | re.DOTALL)
        numbered = re.fullmatch(rf"(?:{spelled})_?\d+", text, re.IGNORECASE) if role in ("input", "output") else None
        if numbered is not None:
            return Column(shown, role, "", text, unit)
        if first is not None or last is not None:
            label = (first or last)[1] or ""  # type: ignore[index]
            return Column(shown, role, "", label.strip(" \t_-.:"), unit)
    return None


def _unit(text: str) -> str:
    """Return the unit that a spelling stands for; case counts for mHz (milli) alone, all else in it is mega."""
    spelled = _RADIANS.sub("rad/s", text).strip()
    return "millihz" if spelled == "mHz" else UNITS.get(spelled.lower(), "")


#: Units that belong to a role; others (of the quantity itself, such as V or m/N) are left alone.
_OWN = {"frequency": tuple(FREQUENCY_UNITS), "magnitude": ("db", "linear"), "phase": ("deg", "rad")}


def _finished(shown: str, role: str, unit: str, label: str, word: str) -> Column:
    label = label.strip(" \t_-.:")
    if role == "frequency":
        if label:
            return Column(shown, "")
        if word.lower() in _ANGULAR:
            return Column(shown, role, unit or "rad/s") if unit in ("", "rad/s") else Column(shown, "")
    if unit and unit not in _OWN.get(role, ()):
        fits = unit in ("rad", "deg", "linear") and role in ("real", "imaginary", "deviation")
        if unit in UNITS.values() and not fits:
            return Column(shown, "")
        unit = ""
    return Column(shown, role, unit, label)


def split_label(label: str) -> tuple[str, str] | None:
    """Return (output, input) of a label such as ``y1/u1`` or ``y1_u2``; None for the name of an output alone."""
    if label.count("/") == 1:
        output, source = (part.strip() for part in label.split("/"))
        return (output, source) if output and source else None
    match = re.fullmatch(r"((?:y|out|output)_?\d+)[\s_\-.:]*((?:u|in|input)_?\d+)", label, re.IGNORECASE)
    return (match[1], match[2]) if match else None


def units_of(
    columns: list[Column], grid: dict[str, tuple[int, int]], outputs: int, inputs: int
) -> tuple[list[str], list[str]]:
    """Return the units of outputs and inputs: of the quantity a/b, a and b; refuses two units for one signal."""
    found: tuple[dict[int, Column], dict[int, Column]] = ({}, {})
    units: tuple[list[str], list[str]] = ([""] * outputs, [""] * inputs)
    for column in columns:
        if column.label not in grid or not column.quantity:
            continue
        top, slash, bottom = column.quantity.partition("/")
        parts = (top.strip(), bottom.strip()) if slash and "/" not in bottom else (column.quantity, "")
        for k, (at, unit) in enumerate(zip(grid[column.label], parts, strict=True)):
            if unit and units[k][at] and units[k][at] != unit:
                raise InputError(
                    f"the unit {unit!r} in {column.name!r}, and {units[k][at]!r} in {found[k][at].name!r}",
                    "one unit for the parts of a signal; scale one of the columns first",
                    field=f"column {columns.index(column) + 1}",
                )
            if unit:
                units[k][at], found[k][at] = unit, column
    return units
