"""Matrix Market files (coordinate or array; real or integer; general, symmetric or skew-symmetric) to dense arrays.

Format: R. F. Boisvert, R. Pozo, K. Remington, The Matrix Market Exchange Formats, NISTIR 5935, 1996.
"""

from __future__ import annotations

import re

import numpy as np
from numpy.typing import NDArray

from realize.errors import InputError, Refused
from realize.files.sources import require_memory

#: Largest dense matrix that is built, bytes.
DENSE_LIMIT = 4 << 30
_HEADER = re.compile(rb"%%MatrixMarket[ \t]+(\S+)[ \t]+(\S+)[ \t]+(\S+)[ \t]+(\S+)[ \t]*", re.IGNORECASE)
_ALLOWED = {1: (b"matrix",), 2: (b"coordinate", b"array"), 3: (b"real", b"integer", b"double")}
_SYMMETRY = (b"general", b"symmetric", b"skew-symmetric")
_STRANGE = re.compile(rb"[^0-9eE+\-. \t\r\n]")


def require_dense(rows: int, columns: int, name: str) -> None:
    """Raise Refused when a dense matrix of that size would exceed the limit, or memory."""
    size = 8 * rows * columns
    if size > DENSE_LIMIT:
        raise Refused(
            f"{name}: {rows} x {columns} needs {size / 2**30:.1f} GiB as a dense matrix, and the limit is "
            f"{DENSE_LIMIT >> 30} GiB; reduce the model with a sparse method first"
        )
    require_memory(size, f"{name}, dense,")


def parse(data: bytes) -> NDArray[np.float64]:
    """Return the matrix; raises InputError with the line that is wrong, Refused when it cannot be held dense."""
    first, _, rest = data.partition(b"\n")
    match = _HEADER.fullmatch(first.rstrip(b"\r"))
    if match is None:
        raise InputError("no Matrix Market header", "%%MatrixMarket matrix coordinate real general", field="line 1")
    words = [match.group(k).lower() for k in range(1, 5)]
    for k, allowed in (*_ALLOWED.items(), (4, _SYMMETRY)):
        if words[k - 1] not in allowed:
            expected = ", ".join(word.decode() for word in allowed)
            raise InputError(f"{words[k - 1].decode('ascii', 'replace')!r}", expected, field="line 1")
    line = 2
    while True:
        text, newline, rest = rest.partition(b"\n")
        if text.strip() and not text.lstrip().startswith(b"%"):
            break
        if not newline:
            raise InputError("no line with the sizes", "rows, columns (and entries)", field=f"line {line}")
        line += 1
    sparse = words[1] == b"coordinate"
    fields = text.split()
    if len(fields) != (3 if sparse else 2) or not all(re.fullmatch(rb"\d{1,18}", size) for size in fields):
        expected = "rows, columns, entries" if sparse else "rows, columns"
        raise InputError(f"{text[:40].decode('ascii', 'replace')!r}", expected, field=f"line {line}")
    sizes = [int(size) for size in fields]
    rows, columns = sizes[:2]
    symmetric = words[3] != b"general"
    if symmetric and rows != columns:
        raise InputError(f"{rows} x {columns}", "a square matrix, as it is called symmetric", field=f"line {line}")
    strange = _STRANGE.search(rest)
    if strange is not None:
        below = line + 1 + rest.count(b"\n", 0, strange.start())
        raise InputError(f"the character {strange.group().decode('latin-1')!r}", "numbers", field=f"line {below}")
    entries = sizes[2] if sparse else _stored(rows, words[3]) if symmetric else rows * columns
    if entries * (6 if sparse else 2) > len(rest) + 1:
        found = f"{entries} entries announced in {len(rest)} bytes"
        raise InputError(found, "as many entries as announced", field=f"line {line}")
    require_dense(rows, columns, "the matrix")
    tokens = rest.split()
    if len(tokens) != entries * (3 if sparse else 1):
        raise InputError(f"{len(tokens)} numbers", f"{entries * (3 if sparse else 1)}", field=f"after line {line}")
    try:
        values = np.array(list(map(float, tokens[2::3] if sparse else tokens)), dtype=float)
        places = [np.array(list(map(int, tokens[k::3])), dtype=np.int64) - 1 for k in (0, 1)] if sparse else []
    except (ValueError, OverflowError):
        raise InputError("something that is no number", "numbers", field=f"after line {line}") from None
    bad = np.flatnonzero(~np.isfinite(values))
    if bad.size:
        raise InputError("a number beyond the largest double", "a finite number", field=f"entry {int(bad[0]) + 1}")
    return _placed(rows, columns, words[3], values, places)


def _stored(rows: int, symmetry: bytes) -> int:
    """Return how many entries the array format lists for a square matrix that is not general."""
    return rows * (rows - 1) // 2 + (rows if symmetry == b"symmetric" else 0)


def _placed(
    rows: int, columns: int, symmetry: bytes, values: NDArray[np.float64], places: list[NDArray[np.int64]]
) -> NDArray[np.float64]:
    matrix = np.zeros((rows, columns))
    if places:
        row, column = places
    elif symmetry == b"general":
        return values.reshape(columns, rows).T.copy()
    else:
        column, row = np.triu_indices(rows, 1 if symmetry == b"skew-symmetric" else 0)
    bad = np.flatnonzero((row < 0) | (row >= rows) | (column < 0) | (column >= columns))
    if bad.size:
        k = int(bad[0])
        found = f"entry {k + 1} at ({row[k] + 1}, {column[k] + 1})"
        raise InputError(found, f"places within {rows} x {columns}, from 1")
    mirrored = symmetry != b"general"
    if symmetry == b"skew-symmetric" and np.any(row == column):
        raise InputError("an entry on the diagonal", "none, as the matrix is called skew-symmetric")
    low, high = (np.minimum(row, column), np.maximum(row, column)) if mirrored else (row, column)
    keys, counts = np.unique(low * columns + high, return_counts=True)
    if np.any(counts > 1):
        key = int(keys[counts > 1][0])
        raise InputError(f"two entries at ({key // columns + 1}, {key % columns + 1})", "one entry for each place")
    matrix[row, column] = values
    if mirrored:
        matrix[column, row] = -values if symmetry == b"skew-symmetric" else values
    return matrix
