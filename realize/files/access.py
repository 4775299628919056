"""Reading and writing models by name: content before suffix, whole files or none."""

from __future__ import annotations

import io
import os
import sys
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING

from realize.errors import InputError, Refused, UsageError
from realize.files.json_model import JSON
from realize.files.json_model import write as write_json
from realize.files.registry import FORMATS, Format, ReadOptions, by_suffix
from realize.files.replacing import replacing
from realize.files.sources import HEAD, Source, open_source, reason
from realize.models import Model

if TYPE_CHECKING:
    from realize.steps.conversion import Conversion

_LOOKS = (
    (b"\x89PNG", "a PNG picture"),
    (b"\xff\xd8\xff", "a JPEG picture"),
    (b"GIF8", "a GIF picture"),
    (b"\x89HDF\r\n", "an HDF5 file"),
    (b"\x1f\x8b", "a gzip file; unpack it first"),
    (b"BZh", "a bzip2 file; unpack it first"),
    (b"\xfd7zXZ", "an xz file; unpack it first"),
    (b"%PDF", "a PDF document"),
    (b"\x7fELF", "a program"),
    (b"\xd0\xcf\x11\xe0", "an old Office document; export the table as CSV"),
    (b"SQLite format", "a database"),
    (b"%%MatrixMarket", 'a Matrix Market file; name it in a model file, as in "A": {"file": "A.mtx"}'),
    (b"<?xml", "XML"),
    (b"<!DOCTYPE", "a web page"),
    (b"<html", "a web page"),
)


def recognise(source: Source) -> Format:
    """Return the format of a source: by content first, then by suffix; raises InputError with what it looks like."""
    head = source.head
    if not head:
        raise InputError("an empty file", "a model file or a table")
    for start, looks in _LOOKS:
        if head.startswith(start):
            raise InputError(f"it looks like {looks}", _readable())
    for row in FORMATS.values():
        if row.can_read and row.sniff(head):
            return row
    if b"\0" in head and not head.startswith((b"\xff\xfe", b"\xfe\xff")):
        raise InputError("it looks like binary data of an unknown kind", _readable())
    named = by_suffix(source.suffix)
    if named is not None and named.can_read:
        return named
    raise InputError("neither a model file nor a table of numbers", _readable())


def _readable() -> str:
    return " or ".join(f"{row.says} ({', '.join(row.suffixes)})" for row in FORMATS.values() if row.can_read)


def read(
    path: str | os.PathLike[str],
    *,
    columns: Sequence[str] | None = None,
    rate: float | None = None,
    allow_outside: bool = False,
    columns_for_tables: bool = False,
) -> Model:
    """Read a model, or a table of measured data.

    Parameters
    ----------
    path : path
        ``-`` is standard input. The content says what format it is; the suffix counts only where it does not.
    columns : sequence of str, optional
        Names of the columns of a table, instead of its header; ``-`` leaves a column out.
    rate : float, optional
        Sampling rate of a table of data over time, Hz, where it has no column of times.
    allow_outside : bool
        Whether a model may name matrix files outside its own folder.
    columns_for_tables : bool
        Ignore ``columns`` and ``rate`` for an input that is no table, instead of refusing them.

    Raises
    ------
    InputError
        With the file, the field and index, what was found and what was expected.
    Refused
        When the model cannot be held.
    """
    return read_source(open_source(path), columns, allow_outside, columns_for_tables, rate)


def read_bytes(
    data: bytes,
    name: str,
    *,
    folder: str | os.PathLike[str] | None = None,
    columns: Sequence[str] | None = None,
    rate: float | None = None,
    allow_outside: bool = False,
) -> Model:
    """Read a model or a table from the bytes of a file; ``folder`` is where matrix files beside it are looked for."""
    source = Source(
        name,
        None if folder is None else Path(folder),
        io.BytesIO(data),
        True,
        data[:HEAD],
        os.path.splitext(name)[1].lower(),
        len(data),
    )
    return read_source(source, columns, allow_outside, True, rate)


def read_source(
    source: Source,
    columns: Sequence[str] | None,
    allow_outside: bool,
    columns_for_tables: bool,
    rate: float | None = None,
) -> Model:
    """Read a model or a table from an open source, and close it; see `read`."""
    try:
        row = recognise(source)
        if row.name not in ("table", "npy"):
            for given, words in ((columns, "names of columns are"), (rate, "a sampling rate is")):
                if given is not None and not columns_for_tables:
                    raise UsageError(f"{source.name}: {words} for tables, and this is {row.says}")
            columns = rate = None
        assert row.read is not None
        return row.read(source, ReadOptions(None if columns is None else tuple(columns), rate, allow_outside))
    except InputError as error:
        raise error.inside(file=source.name) from None
    except Refused as error:
        raise Refused(f"{source.name}: {error}") from None
    except MemoryError:
        words = "the model does not fit in memory; use sparse matrices or a larger machine"
        raise Refused(f"{source.name}: {words}") from None
    except OSError as error:
        raise InputError(f"cannot be read ({reason(error)})", "a file that can be read", file=source.name) from None
    finally:
        if source.name != "standard input":
            source.stream.close()


def write(model: Model | Conversion, path: str | os.PathLike[str]) -> None:
    """Write a model, or that of a conversion, whole or not at all.

    The suffix chooses the format; ``-`` is standard output in JSON.

    Raises
    ------
    UsageError
        For a suffix that no format has, or a kind that the format cannot hold.
    InputError
        When the file cannot be written.
    """
    from realize.steps.conversion import model_of

    model = model_of(model)
    name = os.fspath(path)
    if name == "-":
        write_json(model, sys.stdout.buffer)
        sys.stdout.buffer.flush()
        return
    row = format_for_writing(name, model.kind)
    assert row.write is not None
    with replacing(name) as stream:
        try:
            row.write(model, stream)
        except InputError as error:
            raise error.inside(file=name) from None


def format_for_writing(name: str, kind: str = "") -> Format:
    """Return the format that a name to write chooses; raises UsageError where there is none, before any work."""
    suffix = os.path.splitext(name)[1].lower()
    row = by_suffix(suffix)
    if not suffix and name.startswith("/dev/"):
        row = JSON
    if row is None or not row.can_write:
        known = ", ".join(s for r in FORMATS.values() if r.can_write for s in r.suffixes)
        found = f"no format has the suffix {suffix!r}" if suffix else "a name without suffix"
        raise UsageError(f"{name}: {found}; use one of {known}")
    if kind and row.writes_kinds and kind not in row.writes_kinds:
        only = " or ".join(row.writes_kinds)
        raise UsageError(f"{name}: {suffix} holds {only} only; write a {kind} model as .json or .npz")
    return row
