"""Lines of the keys of a TOML text, so that a message can name the place."""

from __future__ import annotations

import re

Path = tuple[str | int, ...]

_KEY = re.compile(
    r"""\s*((?:[A-Za-z0-9_-]+|"[^"\n]*"|'[^'\n]*')(?:\s*\.\s*(?:[A-Za-z0-9_-]+|"[^"\n]*"|'[^'\n]*'))*)\s*="""
)
_PART = re.compile(r"""[A-Za-z0-9_-]+|"[^"\n]*"|'[^'\n]*'""")
#: What counts inside a value: strings, whose content does not, comments, and brackets.
_TOKEN = re.compile(
    r'"""(?:\\.|[^\\])*?"""|' + r"'''.*?'''|" + r'"(?:\\.|[^"\\\n])*"|' + r"'[^'\n]*'|#[^\n]*|[\[\]{}]|\n", re.DOTALL
)


def _parts(text: str) -> Path:
    return tuple(part.strip("\"'") for part in _PART.findall(text))


def lines_of(text: str) -> dict[Path, int]:
    """Return the line (from 1) of every table and key of a TOML text that is known to be well formed.

    The path of a key is ``("steps", 1, "to")``; keys of inline tables are not in it, their table is.
    """
    found: dict[Path, int] = {}
    table: Path = ()
    counts: dict[Path, int] = {}
    position, line = 0, 1
    while position < len(text):
        end = text.find("\n", position)
        end = len(text) if end < 0 else end
        head = text[position:end].strip()
        if head.startswith("["):
            several = head.startswith("[[")
            name = _parts(head.partition("#")[0].strip("[] \t\r"))
            table = _inside(name[:-1], counts) + name[-1:]
            if several:
                counts[table] = counts.get(table, -1) + 1
                found.setdefault(table, line)
                table = (*table, counts[table])
            elif table in counts:
                table = (*table, counts[table])
            found.setdefault(table, line)
        elif (key := _KEY.match(text, position)) is not None and key.end() <= end + 1:
            path = table + _parts(key[1])
            for length in range(len(table) + 1, len(path) + 1):
                found.setdefault(path[:length], line)
            end = _end_of_value(text, key.end())
        line += text.count("\n", position, end) + 1
        position = end + 1
    return found


def _inside(name: Path, counts: dict[Path, int]) -> Path:
    """Return the path of a table with the number of the array entry that it lies in."""
    path: Path = ()
    for part in name:
        path = (*path, part)
        if path in counts:
            path = (*path, counts[path])
    return path


def _end_of_value(text: str, position: int) -> int:
    """Return the place of the line end after a value, which may go over several lines."""
    depth = 0
    for token in _TOKEN.finditer(text, position):
        mark = token[0]
        if mark in "[{":
            depth += 1
        elif mark in "]}":
            depth -= 1
        elif mark == "\n" and depth <= 0:
            return token.start()
    return len(text)


def line_of(lines: dict[Path, int], path: Path) -> int:
    """Return the line of a path, or of the nearest table around it; 1 where there is none."""
    for length in range(len(path), 0, -1):
        if path[:length] in lines:
            return lines[path[:length]]
    return 1
