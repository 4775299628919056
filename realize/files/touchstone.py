"""Touchstone files, versions 1 and 2: S, Y, Z, H or G parameters of any number of ports (references 1, 2).

- Comments run from ``!`` to the end of a line. The option line is ``# UNIT PARAMETER FORMAT R OHMS``, in any order and
  case; what is left out is GHz, S, MA, R 50.
- Version 1: the suffix says how many ports there are (``.s3p``), else the numbers of the first frequency do. Two ports
  are listed as 11, 21, 12, 22; more of them row by row, over several lines.
- Version 2: [Two-Port Data Order], [Matrix Format] Full, Lower or Upper, [Reference] with one resistance a port. Mixed
  modes are refused.
- Y, Z, H and G of version 1 are relative to the resistance R; they become siemens, ohm, or numbers. Those of version 2
  are so already.
- Noise parameters are left out, with a remark.

Sources
-------
1. EIA/IBIS Open Forum, *Touchstone File Format Specification*, revision 1.1, 2002 (from memory).
2. IBIS Open Forum, *Touchstone File Format Specification*, version 2.0, 2009 (from memory).
"""

from __future__ import annotations

import math
import re
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from realize.errors import InputError, Refused
from realize.files.registry import Format, ReadOptions, register
from realize.files.sources import Source
from realize.files.table_text import MAX_NUMBERS, NUMBER, decode, from_decibels, scaled, turned
from realize.models import FrequencyResponse, Model, Ports, Signal

UNITS = {"hz": 0, "khz": 3, "mhz": 6, "ghz": 9}
PARAMETERS = {"s": "scattering", "y": "admittance", "z": "impedance", "h": "hybrid", "g": "inverse-hybrid"}
FORMATS = ("ri", "ma", "db")
OPTIONS = "an option line such as # GHz S MA R 50"
#: Unit of each input and output; scattering parameters have none.
SIGNAL_UNITS: dict[str, tuple[tuple[str, ...], tuple[str, ...]]] = {
    "scattering": ((), ()),
    "impedance": (("A",), ("V",)),
    "admittance": (("V",), ("A",)),
    "hybrid": (("A", "V"), ("V", "A")),
    "inverse-hybrid": (("V", "A"), ("A", "V")),
}
MAX_PORTS = 1000
_KEYWORD = re.compile(r"\s*\[([^\]]*)\]\s*(.*)", re.DOTALL)
_OPTION = re.compile(rb"[kmg]?hz|[syzhg]|ri|ma|db|r|r?[0-9.e+-]+", re.IGNORECASE)
_SUFFIX = re.compile(r"\.s(\d+)p")


def sniff(head: bytes) -> bool:
    """True where the first line that is no comment is an option line, or the keyword [Version]."""
    lines = [line.split(b"!")[0].strip() for line in re.split(rb"[\r\n]+", head.removeprefix(b"\xef\xbb\xbf"))]
    lines = [line for line in lines if line][:2]
    if not lines:
        return False
    if re.match(rb"\[\s*version\s*\]", lines[0], re.IGNORECASE):
        return True
    if not lines[0].startswith(b"#"):
        return False
    words = lines[0][1:].split()
    if words:
        return not words[0][:1].isdigit() and all(_OPTION.fullmatch(word) for word in words)
    # the option line may be empty; so may a comment of a table
    numbers = lines[1].split() if len(lines) > 1 else []
    return len(numbers) % 2 == 1 and len(numbers) > 1 and all(NUMBER.fullmatch(n.decode("latin-1")) for n in numbers)


@dataclass
class _File:
    """What the lines before the data say, and the lines of data: (line number, fields)."""

    power: int = 9
    parameter: str = "s"
    form: str = "ma"
    resistance: float = 50.0
    options_at: int = 0
    version: int = 1
    ports: int = 0
    order: str = ""
    matrix: str = "full"
    count: int = 0
    noise_count: int = 0
    reference: list[float] = field(default_factory=list)
    data: list[tuple[int, list[str]]] = field(default_factory=list)
    noise: list[tuple[int, list[str]]] = field(default_factory=list)


def read(source: Source, options: ReadOptions) -> Model:
    """Return the frequency response of a Touchstone file; raises InputError naming the line."""
    file = _parse(decode(source.everything()))
    suffix = _SUFFIX.fullmatch(source.suffix)
    stated = int(suffix[1]) if suffix is not None else 0
    remarks: list[str] = []
    if not file.data:
        raise InputError("no line of numbers", "frequency and parameters in each line")
    if file.version == 1:
        file.ports = stated or _ports_of(file)
    elif stated and stated != file.ports:
        remarks.append(f"the suffix says {stated} port(s), and the file says {file.ports}: read as the file says")
    if not 0 < file.ports <= MAX_PORTS:
        raise InputError(f"{file.ports} ports", f"1 to {MAX_PORTS}", field="number of ports")
    name = PARAMETERS[file.parameter]
    if "hybrid" in name and file.ports != 2:
        raise InputError(
            f"{file.parameter.upper()} parameters of {file.ports} port(s)",
            "two ports",
            field=f"line {file.options_at}",
        )
    records = _records(file)
    if file.version == 2 and file.count and file.count != len(records):
        raise InputError(
            f"{len(records)} frequencies", f"{file.count}, as [Number of Frequencies] says", field="[Network Data]"
        )
    if file.noise:
        remarks.append(f"the noise parameters from line {file.noise[0][0]} on are not used")
    frequency, order = _frequencies(file, records, remarks)
    values = _values(file, records)[order]
    reference = file.reference or [file.resistance] * file.ports
    if file.version == 1 and name != "scattering":
        values = _absolute(values, name, file.resistance)
        if file.resistance != 1.0:
            remarks.append(
                f"{file.parameter.upper()} parameters of a version 1 file are relative to the reference resistance: "
                f"brought to ohm and siemens with R = {file.resistance:g}"
            )
        if not np.all(np.isfinite(values)):
            raise InputError("parameters beyond the largest double", "numbers within the doubles")
    sides = []
    for units in SIGNAL_UNITS[name]:
        sides.append(tuple(Signal(f"port{k + 1}", units[k % len(units)] if units else "") for k in range(file.ports)))
    return FrequencyResponse(
        frequency=frequency,
        frequency_unit="Hz",
        response=values,
        inputs=sides[0],
        outputs=sides[1],
        ports=Ports(name, tuple(reference)),
        remarks=tuple(remarks),
    )


def _parse(text: str) -> _File:
    """Return the parts of a file: option line, keywords, lines of network data, lines of noise data."""
    file = _File()
    where, waiting = "", 0
    for number, line in enumerate(re.split(r"\r\n|\r|\n", text), start=1):
        bare = line.split("!")[0].strip()
        if not bare:
            continue
        keyword = _KEYWORD.fullmatch(bare)
        if where == "information":
            if keyword is not None and _word(keyword[1]) == "end information":
                where = ""
            continue
        if bare[0] == "#":
            if not file.options_at:  # those further down are left alone, as the specification says
                _read_options(file, bare[1:].split(), number)
            continue
        if keyword is not None:
            if waiting:
                raise InputError("too few resistances", f"{file.ports}, one a port", field=f"line {number}")
            where = _keyword(file, _word(keyword[1]), keyword[2].strip(), number, where)
            waiting = file.ports - len(file.reference) if where == "reference" else 0
            if where == "end":
                break
            continue
        fields = bare.split()
        if where == "reference":
            file.reference += [_resistance(entry, number) for entry in fields]
            waiting = file.ports - len(file.reference)
            if waiting < 0:
                raise InputError(
                    f"{len(file.reference)} resistances", f"{file.ports}, one a port", field=f"line {number}"
                )
            where = "reference" if waiting else ""
            continue
        if file.version == 2 and where not in ("network", "noise"):
            raise InputError(f"{bare[:40]!r} before [Network Data]", "a keyword in brackets", field=f"line {number}")
        if not file.options_at:
            raise InputError("numbers without an option line above them", OPTIONS, field=f"line {number}")
        (file.noise if where == "noise" else file.data).append((number, fields))
    if not file.options_at:
        raise InputError("no option line", OPTIONS)
    if file.version == 2:
        if not file.ports:
            raise InputError("missing", "the number of ports", field="[Number of Ports]")
        if file.ports == 2 and not file.order:
            raise InputError("missing", "12_21 or 21_12", field="[Two-Port Data Order]")
    return file


def _word(text: str) -> str:
    return re.sub(r"[\s_]+", " ", text).strip().lower()


def _read_options(file: _File, words: list[str], number: int) -> None:
    file.options_at = number
    place = f"line {number}"
    k = 0
    while k < len(words):
        word = words[k].lower()
        if word in UNITS:
            file.power = UNITS[word]
        elif word in PARAMETERS:
            file.parameter = word
        elif word in FORMATS:
            file.form = word
        elif word == "r":
            k += 1
            if k == len(words):
                raise InputError("R without a number", "a resistance in ohm", field=place)
            file.resistance = _resistance(words[k], number)
        elif len(word) > 1 and word[0] == "r" and NUMBER.fullmatch(word[1:]):
            file.resistance = _resistance(word[1:], number)
        else:
            raise InputError(f"the option {words[k][:40]!r}", OPTIONS, field=place)
        k += 1


def _resistance(text: str, number: int) -> float:
    value = float(text) if NUMBER.fullmatch(text) and "," not in text and "d" not in text.lower() else math.nan
    if not (0 < value < math.inf):
        raise InputError(f"{text[:40]!r}", "a resistance greater than zero, ohm", field=f"line {number}")
    return value


def _keyword(file: _File, word: str, rest: str, number: int, where: str) -> str:
    """Take in one keyword line of version 2; return the section that begins with it."""
    place = f"line {number}"

    def whole() -> int:
        if not re.fullmatch(r"\d{1,9}", rest):
            raise InputError(f"{rest[:40]!r}", "a whole number", field=place)
        return int(rest)

    def choice(*known: str) -> str:
        if rest.lower() not in known:
            raise InputError(f"{rest[:40]!r}", " or ".join(known), field=place)
        return rest.lower()

    if word == "version":
        if not re.fullmatch(r"2\.[01]", rest):
            raise InputError(f"version {rest[:20]!r}", "2.0 or 2.1; files of version 1 do not say it", field=place)
        file.version = 2
    elif file.version == 1:
        raise InputError(f"the keyword [{word[:40]}]", "[Version] 2.0 above any other keyword", field=place)
    elif word == "number of ports":
        file.ports = whole()
    elif word == "two-port data order":
        file.order = choice("12_21", "21_12")
    elif word == "number of frequencies":
        file.count = whole()
    elif word == "number of noise frequencies":
        file.noise_count = whole()
    elif word == "matrix format":
        file.matrix = choice("full", "lower", "upper")
    elif word == "reference":
        if not file.ports:
            raise InputError("[Reference] before [Number of Ports]", "the number of ports first", field=place)
        file.reference = [_resistance(entry, number) for entry in rest.split()]
        if len(file.reference) > file.ports:
            raise InputError(f"{len(file.reference)} resistances", f"{file.ports}, one a port", field=place)
        return "reference" if len(file.reference) < file.ports else ""
    elif word == "mixed-mode order":
        raise InputError("mixed-mode parameters", "single-ended ones; export the file anew", field=place)
    elif word == "begin information":
        return "information"
    elif word == "network data":
        return "network"
    elif word == "noise data":
        return "noise"
    elif word == "end":
        return "end"
    else:
        raise InputError(f"the keyword [{word[:40]}]", "a keyword of version 2.0", field=place)
    return where if where in ("network", "noise") else ""


def _ports_of(file: _File) -> int:
    """Return the number of ports from the first frequency: it begins with an odd number of fields in a line."""
    count = 0
    for k, (_, fields) in enumerate(file.data):
        if k and len(fields) % 2:
            break
        count += len(fields)
    ports = math.isqrt(max(count - 1, 0) // 2)
    if count != 1 + 2 * ports**2 or not ports:
        raise InputError(
            f"{count} numbers for the first frequency",
            "1 + 2 n^2 for n ports; or give the file the suffix .sNp",
            field=f"line {file.data[0][0]}",
        )
    return ports


def _records(file: _File) -> list[tuple[int, list[str]]]:
    """Return (first line, fields) of each frequency; noise parameters of version 1 go to ``file.noise``."""
    n = file.ports
    size = 1 + 2 * (n * n if file.matrix == "full" else n * (n + 1) // 2)
    records: list[tuple[int, list[str]]] = []
    current: list[str] = []
    begun, total = 0, 0
    rows = file.data
    for k, (number, fields) in enumerate(rows):
        if not current:
            if file.version == 1 and n == 2 and records and _is_noise(rows, k, records[-1][1][0]):
                file.noise = rows[k:]
                break
            begun = number
        current = current + fields if current else list(fields)
        if len(current) > size:
            raise InputError(
                f"{len(current)} numbers for a frequency",
                f"{size}: the frequency and {(size - 1) // 2} pairs for {n} port(s)",
                field=f"line {number}",
            )
        if len(current) == size:
            records.append((begun, current))
            current = []
        total += len(fields)
        if total > MAX_NUMBERS:
            raise Refused(f"more than {MAX_NUMBERS:,} numbers; thin the data out")
    if current:
        raise InputError(
            f"{len(current)} numbers for the last frequency",
            f"{size}: the frequency and {(size - 1) // 2} pairs for {n} port(s)",
            field=f"line {begun}",
        )
    return records


def _is_noise(rows: list[tuple[int, list[str]]], k: int, last: str) -> bool:
    """True where noise parameters of a two-port begin: five numbers a line, frequencies from the start again."""
    first = rows[k][1]
    if len(first) != 5 or (k + 1 < len(rows) and len(rows[k + 1][1]) == 4):
        return False
    number = [float(entry) if NUMBER.fullmatch(entry) else math.nan for entry in (first[0], last)]
    return number[0] <= number[1]


def _frequencies(file: _File, records: list[tuple[int, list[str]]], remarks: list[str]) -> tuple[Any, Any]:
    """Return increasing frequencies in Hz, and the order of the records that gives them."""
    values = np.array([_number(fields[0], line, file.power) for line, fields in records])
    bad = np.flatnonzero(values < 0)
    if bad.size:
        raise InputError(
            f"{records[bad[0]][1][0]!r}", "a frequency that is not negative", field=f"line {records[bad[0]][0]}"
        )
    order = np.argsort(values, kind="stable")
    twice = np.flatnonzero(np.diff(values[order]) == 0)
    if twice.size:
        before, after = (records[int(order[twice[0] + step])] for step in (0, 1))
        raise InputError(
            f"the frequency {after[1][0]} as in line {before[0]}",
            "each frequency once; average repeated measurements first",
            field=f"line {after[0]}",
        )
    if np.any(np.diff(order) < 0):
        remarks.append("the frequencies are not in increasing order: the lines were sorted")
    return values[order], order


def _number(entry: str, line: int, power: int = 0) -> float:
    value = math.nan
    if NUMBER.fullmatch(entry) and "," not in entry and len(entry) < 2000:
        plain = entry.lower().replace("d", "e")
        value = scaled(plain, power) if power else float(plain)
    if not math.isfinite(value):
        raise InputError(f"{entry[:40]!r}", "a finite number", field=f"line {line}")
    return value


def _values(file: _File, records: list[tuple[int, list[str]]]) -> Any:
    """Return the parameters [k][row][column] as the file lists them."""
    n = file.ports
    try:
        flat = np.array([fields[1:] for _, fields in records], dtype=float)
    except ValueError:
        flat = np.full((1, 1), np.nan)
    if not np.all(np.isfinite(flat)) or any("_" in entry for _, fields in records for entry in fields):
        flat = np.array([[_number(entry, line) for entry in fields[1:]] for line, fields in records])
    first, second = flat[:, 0::2], flat[:, 1::2]
    if file.form == "ri":
        pairs = np.empty(first.shape, dtype=complex)
        pairs.real, pairs.imag = first, second
    else:
        size, expected = first, "a magnitude that is not negative"
        bad = size < 0
        if file.form == "db":
            size, bad = from_decibels(first)
            expected = "decibels within the doubles"
        if np.any(bad):
            k, c = (int(index) for index in np.argwhere(bad)[0])
            raise InputError(f"{records[k][1][1 + 2 * c]!r}", expected, field=f"line {records[k][0]}")
        pairs = size * turned(second)
    result = np.empty((len(records), n, n), dtype=complex)
    if file.matrix == "full":
        result[:] = pairs.reshape(-1, n, n)
        if n == 2 and (file.version == 1 or file.order == "21_12"):
            result = np.swapaxes(result, 1, 2)
        return result
    row, column = np.tril_indices(n) if file.matrix == "lower" else np.triu_indices(n)
    result[:, row, column] = result[:, column, row] = pairs
    return result


def _absolute(values: Any, name: str, resistance: float) -> Any:
    """Return parameters that are relative to a resistance in ohm, siemens, or as plain ratios."""
    if name == "impedance":
        return values * resistance
    if name == "admittance":
        return values / resistance
    top, bottom = (resistance, 1 / resistance) if name == "hybrid" else (1 / resistance, resistance)
    return values * np.array([[top, 1.0], [1.0, bottom]])


TOUCHSTONE = register(
    Format(
        "touchstone",
        "a Touchstone file of network parameters",
        (".s1p", ".s2p", ".s3p", ".s4p", ".ts"),
        sniff,
        read,
    )
)
