"""Text tables to rows of numbers: comments, header, separator, decimal comma, quotes.

- Lines that begin with ``#``, ``%`` or ``!`` are comments. The header is the line above the numbers if it is no number;
  else the last comment above them, if it reads as names of columns; a line of units below the names is added to them.
- The separator is the semicolon, else the tabulator, else the comma, else blanks: whichever the first line of numbers
  has outside of quotes. A comma behind a number and before a blank (``1.5, 2.5``) separates.
- With semicolons, tabulators or blanks, and inside quotes, a comma within a number is the decimal comma. Then no number
  may have a point too: thousands separators are refused, never guessed.
"""

from __future__ import annotations

import math
import re
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from realize.errors import InputError, Refused

COMMENTS = ("#", "%", "!")
#: Largest number of lines, numbers in a line, and characters in a line.
MAX_LINES = 500_000
MAX_WIDTH = 10_000
MAX_LINE = 1 << 20
#: Most numbers in one table.
MAX_NUMBERS = 8_000_000
NUMBER = re.compile(r"[+-]?(?:\d+[.,]?\d*|[.,]\d+)(?:[eEdD][+-]?\d+)?", re.ASCII)
_SEPARATOR = re.compile(r'"?sep=(?:.|\\t)?"?', re.IGNORECASE)
_NON_FINITE = re.compile(r"[+-]?(nan|inf|infinity|n/a|na|#.*|-+)?", re.IGNORECASE)


@dataclass
class Table:
    """Numbers as text, their lines, the names above them, and the comments."""

    names: list[str] | None = None
    names_line: int = 0
    rows: list[list[str]] = field(default_factory=list)
    lines: list[int] = field(default_factory=list)
    comments: list[str] = field(default_factory=list)
    last_comment: tuple[int, str] | None = None
    separator: str = ""
    commas: bool = False


def decode(data: bytes) -> str:
    """Return the text of a table: UTF-8, UTF-16 with a byte order mark, else Latin-1 (a degree sign in a header)."""
    if data.startswith((b"\xff\xfe", b"\xfe\xff")):
        try:
            return data.decode("utf-16")
        except UnicodeDecodeError:
            raise InputError("text that is not UTF-16, as its first bytes say", "UTF-8 text") from None
    if b"\0" in data:
        line = data.count(b"\n", 0, data.index(0)) + 1
        raise InputError("a zero byte", "a table of text", field=f"line {line}")
    try:
        return data.decode("utf-8-sig")
    except UnicodeDecodeError:
        return data.decode("latin-1")


def separator_of(line: str) -> str:
    """Return ``;``, tabulator, ``,`` or a blank: what separates the fields of a line."""
    bare = re.sub(r'"[^"]*"', "0", line.strip())
    for mark in (";", "\t"):
        if mark in bare:
            return mark
    if "," in bare and (not re.search(r"\s", bare) or re.search(r",\s|\s,", bare)):
        return ","
    return " "


def split(line: str, separator: str) -> list[str]:
    """Return the fields of a line without quotes and blanks; one separator at the end of the line is left out."""
    if '"' in line:
        if separator == " ":
            return [quoted or plain for quoted, plain in re.findall(r'"([^"]*)"|(\S+)', line)]
        import csv

        reader = csv.reader([line.strip(" ")], delimiter=separator, skipinitialspace=True)
        try:
            fields = [entry.strip() for entry in next(reader)]
        except csv.Error:  # a field of more than 128 KiB
            fields = [line]
    elif separator == " ":
        return line.split()
    else:
        fields = [entry.strip() for entry in line.split(separator)]
    if len(fields) > 1 and not fields[-1]:
        fields.pop()
    return fields


def _all_numbers(fields: list[str]) -> bool:
    return bool(fields) and all(NUMBER.fullmatch(entry) for entry in fields)


def is_data(line: str) -> bool:
    """True for a line of two or more numbers."""
    if len(line) > 1 << 16:
        line = line[: 1 << 16].rsplit(" ", 1)[0]
    fields = split(line, separator_of(line)) if line.strip() else []
    return len(fields) >= 2 and _all_numbers(fields)


def split_names(line: str, separator: str) -> list[str]:
    """Return the fields of a line of names, where a blank before a bracket separates nothing."""
    for mark in (";", "\t", ","):
        if mark in line and separator != mark and separator == " ":
            separator = mark
            break
    if separator == " ":
        line = re.sub(r"\s+(?=[\[(])", "", line)
    return split(line, separator)


def scan(text: str) -> Table:
    """Return the table in a text; numbers stay text, so that the frequency can be scaled without rounding twice.

    Raises InputError naming the line that does not fit; Refused for more than half a million lines.
    """
    table = Table()
    names: list[tuple[int, str]] = []
    width = 0
    if max(text.count("\n"), text.count("\r")) > MAX_LINES:
        raise Refused(f"more than {MAX_LINES:,} lines; thin the data out, or cut a band")
    for number, line in enumerate(re.split(r"\r\n|\r|\n", text), start=1):
        if len(line) > MAX_LINE:
            raise InputError(f"a line of {len(line):,} characters", "a line for each frequency", field=f"line {number}")
        bare = line.strip()
        if not bare:
            continue
        if not table.rows and not names and _SEPARATOR.fullmatch(bare):
            continue  # some programs say so what separates the fields, which the numbers say as well
        if bare[0] in COMMENTS:
            table.comments.append(bare)
            if not table.rows and not names:
                table.last_comment = (number, bare.lstrip("#%! \t"))
            continue
        if not table.rows:
            if not _first(line):
                names.append((number, line.strip("\r\n")))
                if len(names) > 2:
                    raise InputError(
                        f"{bare[:60]!r}",
                        "numbers, below at most one line of names and one of units",
                        field=f"line {number}",
                    )
                continue
            table.separator = separator_of(line)
        fields = split(line, table.separator)
        if not table.rows:
            width = len(fields)
            if width > MAX_WIDTH:
                raise InputError(f"{width:,} columns", f"at most {MAX_WIDTH:,}", field=f"line {number}")
        elif len(fields) != width:
            raise InputError(f"{len(fields)} columns", f"{width}, as in line {table.lines[0]}", field=f"line {number}")
        if len(table.rows) * width >= MAX_NUMBERS:
            raise Refused(f"more than {MAX_NUMBERS:,} numbers; thin the data out, or leave channels out")
        table.rows.append(fields)
        table.lines.append(number)
    table.commas = "," in text and (table.separator != "," or '"' in text)
    if not table.rows:
        raise InputError("no line of numbers", "a table: frequency and response in each line")
    if names:
        table.names = split_names(names[0][1], table.separator)
        table.names_line = names[0][0]
        if len(names) == 2:
            _add_units(table, split_names(names[1][1], table.separator), names[1][0])
    return table


def _first(line: str) -> bool:
    """True where a line above any numbers belongs to the numbers: no field of it could be a name."""
    fields = split(line, separator_of(line))
    good = [entry for entry in fields if NUMBER.fullmatch(entry)]
    # a line that is mostly numbers is a line of numbers with something wrong in it
    return bool(good) and (2 * len(good) >= len(fields))


def _add_units(table: Table, units: list[str], line: int) -> None:
    assert table.names is not None
    if len(units) != len(table.names):
        expected = f"{len(table.names)}, as names in line {table.names_line}"
        raise InputError(f"{len(units)} units", expected, field=f"line {line}")
    table.names = [
        f"{name} [{unit.strip('[]()')}]" if unit.strip("[]()") and not name.endswith(("]", ")")) else name
        for name, unit in zip(table.names, units, strict=True)
    ]


def numbers(table: Table, column: int, name: str, decimal_comma: bool, power: int = 0) -> list[float]:
    """Return one column as the doubles nearest to its numbers times 10**power.

    Raises InputError naming line and column.
    """
    plain = [row[column] for row in table.rows]
    joined = "".join(plain)
    if power == 0 and joined.isascii() and "_" not in joined:
        try:
            values = list(map(float, plain))
        except ValueError:
            values = [math.nan]
        if all(map(math.isfinite, values)):
            return values
    result = []
    for entry, line in zip(plain, table.lines, strict=True):
        if NUMBER.fullmatch(entry) is None or len(entry) > 2000:
            what = "no value" if not entry else f"{entry[:40]!r}"
            expected = "a finite number" if _NON_FINITE.fullmatch(entry) else "a number"
            expected += "; remove the line, or leave the column out"
            raise InputError(what, expected, field=place(line, column, name))
        if "," in entry:
            if not decimal_comma:
                raise InputError(f"{entry[:40]!r}", "a number", field=place(line, column, name))
            entry = entry.replace(",", ".")
        if "d" in entry or "D" in entry:
            entry = entry.replace("d", "e").replace("D", "e")
        value = scaled(entry, power) if power else float(entry)
        if not math.isfinite(value):
            found = f"{entry[:40]!r}, beyond the largest double"
            raise InputError(found, "a finite number", field=place(line, column, name))
        result.append(value)
    return result


def scaled(entry: str, power: int) -> float:
    """Return the double nearest to a decimal number times 10**power."""
    mantissa, _, exponent = entry.lower().partition("e")
    if len(exponent) > 8:
        return float(entry)
    return float(f"{mantissa}e{int(exponent or 0) + power}")


def place(line: int, column: int, name: str) -> str:
    """Return ``line 17, column 3 (real)``."""
    return f"line {line}, column {column + 1}" + (f" ({name})" if name else "")


def decimal_comma(table: Table) -> bool:
    """True where commas within numbers are decimal commas; raises InputError where points stand beside them."""
    comma = point = None
    if not table.commas:
        return False
    for row, line in zip(table.rows, table.lines, strict=True):
        for k, entry in enumerate(row):
            if comma is None and "," in entry:
                comma = (line, k, entry)
            if point is None and "." in entry:
                point = (line, k, entry)
        if comma is not None and point is not None:
            raise InputError(
                f"the decimal comma in {comma[2][:30]!r} and the point in {point[2][:30]!r} (line {point[0]})",
                "one or the other, without thousands separators",
                field=place(*comma[:2], ""),
            )
    return comma is not None


def from_decibels(decibels: Any) -> tuple[Any, Any]:
    """Return 10^(dB/20), and where that is no double: too large, or so small that it would become zero."""
    with np.errstate(over="ignore", under="ignore"):
        size = 10.0 ** (decibels / 20)
    return size, ~np.isfinite(size) | (size == 0)


def turned(degrees: Any) -> Any:
    """Return exp(j phase) of degrees, exact at multiples of 90: the argument is reduced before it becomes radians."""
    quarter = np.rint(degrees / 90)
    rest = np.exp(1j * np.deg2rad(degrees - 90 * quarter))
    return rest * np.array([1, 1j, -1, -1j])[np.mod(quarter, 4).astype(int)]
